"""The main story in the window: find the operator that explodes, apply the rewrites, compare, export; by mouse and by keyboard."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from PySide6.QtCore import QPoint, Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QFileDialog
from pytestqt.qtbot import QtBot

from app.export.files import carried
from app.model import Workbench
from app.window import Window, application
from core.algebra.operators import Group, Join, JoinKind
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog
from core.compare import Kind
from core.engine.duckdb_engine import DuckEngine
from core.engine.profile import profile
from core.rewrite import Offer, Refusal
from core.sheet import edit
from core.sheet.document import Sheet, new_sheet
from core.sheet.file import from_json
from tests.data import demo


@pytest.fixture(scope="module")
def story() -> Sheet:
    folder = demo.folder(0.2)
    engine = DuckEngine.over_folder(folder)
    catalog, _ = profile(engine, catalog_from_ddl(demo.schema()))
    engine.close()
    return edit.with_text(
        new_sheet("Late parcels", catalog, str(folder)), "A", demo.queries()["01-late-parcels-by-depot.a"]
    )


@pytest.fixture
def window(qtbot: QtBot, story: Sheet) -> Iterator[Window]:
    application()
    made = Window(dark=False)
    qtbot.addWidget(made)
    made.show()
    made.bench.open(story, None)
    qtbot.waitExposed(made)
    made.canvas.fit()
    yield made
    made.bench.saved = made.bench.sheet
    made.worker.cancel()
    made.worker.wait()


def exploding(window: Window) -> Join:
    """The operator of the first finding."""
    draft = window.bench.draft
    assert draft is not None
    finding = next(f for f in window.bench.findings(draft) if f.kind == "fan-out join")
    assert isinstance(finding.operator, Join)
    return finding.operator


def click(window: Window, operator: object) -> None:
    owner = window.canvas.drawn.owners[operator]  # type: ignore[index]
    left, top, _, _ = window.canvas.drawn.display.boxes[owner]
    place = window.canvas.to_window(left + 20, top + 20)
    QTest.mouseClick(
        window.canvas,
        Qt.MouseButton.LeftButton,
        Qt.KeyboardModifier.NoModifier,
        QPoint(round(place.x()), round(place.y())),
    )


def idle(qtbot: QtBot, window: Window) -> None:
    qtbot.waitUntil(lambda: not window.worker.busy, timeout=60_000)


def pick(window: Window, title: str) -> None:
    """Marks a rewrite of the panel's list."""
    for i in range(window.panel.list.count()):
        if window.panel.list.item(i).text().startswith(title) and "refused" not in window.panel.list.item(i).text():
            window.panel.list.setCurrentRow(i)
            return
    raise AssertionError(f"{title} is not offered")


def check_end(window: Window) -> None:
    draft = window.bench.sheet.draft("B")
    assert draft is not None and draft.formulation is not None
    kinds = [op.kind for op in draft.formulation.operators() if isinstance(op, Join)]
    assert kinds == [JoinKind.SEMI, JoinKind.SEMI]
    group = next(op for op in draft.formulation.operators() if isinstance(op, Group))
    assert not group.aggregates[0].aggregate.distinct


def test_by_mouse(qtbot: QtBot, window: Window, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    window.actions_by_method["copy_draft"].trigger()
    assert window.bench.active == "B"
    click(window, exploding(window))
    assert window.bench.selection is exploding(window)
    for title in ("join to semi-join", "join to semi-join", "count what is different anyway"):
        draft = window.bench.draft
        assert draft is not None and draft.formulation is not None
        wanted = Group if title.startswith("count") else Join
        inner = [op for op in draft.formulation.operators() if isinstance(op, wanted)]
        target = next(op for op in reversed(inner) if not (isinstance(op, Join) and op.kind is JoinKind.SEMI))
        click(window, target)
        pick(window, title)
        QTest.mouseClick(window.panel.button, Qt.MouseButton.LeftButton)
    check_end(window)
    window.actions_by_method["compare"].trigger()
    idle(qtbot, window)
    assert window.below.verdict is not None and window.below.verdict.kind is Kind.EQUAL
    assert "proved" in window.bench.sheet.verdict
    for ending in (".svg", ".pdf", ".png"):
        target = tmp_path / f"sheet{ending}"
        monkeypatch.setattr(QFileDialog, "getSaveFileName", lambda *_, target=target: (str(target), ""))
        window.actions_by_method["export_dialog"].trigger()
        payload = carried(target)
        assert payload is not None
        again = from_json(payload.decode())
        assert [d.name for d in again.drafts] == ["A0", "B3"]
        assert again.verdict == window.bench.sheet.verdict


def press(widget: object, key: Qt.Key, modifier: Qt.KeyboardModifier = Qt.KeyboardModifier.NoModifier) -> None:
    QTest.keyClick(widget, key, modifier)  # type: ignore[arg-type]


def test_by_keyboard(qtbot: QtBot, window: Window, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    control, shift = Qt.KeyboardModifier.ControlModifier, Qt.KeyboardModifier.ShiftModifier
    window.activateWindow()
    press(window, Qt.Key.Key_F6)
    press(window, Qt.Key.Key_D, control)
    assert window.bench.active == "B"
    target = exploding(window)
    while window.bench.selection is not target:
        before = window.bench.selection
        press(window.canvas, Qt.Key.Key_Down)
        assert window.bench.selection is not before, "the arrows do not lead there"
    press(window, Qt.Key.Key_F8)
    assert window.panel.list.hasFocus()
    press(window.panel.list, Qt.Key.Key_Return)
    press(window.canvas, Qt.Key.Key_Down)
    press(window.panel.list, Qt.Key.Key_Return)
    while not isinstance(window.bench.selection, Group):
        press(window.canvas, Qt.Key.Key_Up)
    pick(window, "count what is different anyway")
    press(window, Qt.Key.Key_Return, control)
    check_end(window)
    press(window, Qt.Key.Key_V, control | shift)
    idle(qtbot, window)
    assert window.below.verdict is not None and window.below.verdict.kind is Kind.EQUAL
    target_file = tmp_path / "sheet.svg"
    monkeypatch.setattr(QFileDialog, "getSaveFileName", lambda *_: (str(target_file), ""))
    press(window, Qt.Key.Key_E, control)
    assert carried(target_file) is not None
    for _ in range(3):
        press(window, Qt.Key.Key_Z, control)
    draft = window.bench.sheet.draft("B")
    assert draft is not None and draft.current == 0
    press(window, Qt.Key.Key_Z, control | shift)
    draft = window.bench.sheet.draft("B")
    assert draft is not None and draft.current == 1


def test_the_tree_follows_the_typing(qtbot: QtBot, window: Window) -> None:
    field = window.editor.field
    field.setPlainText("select depot_id from parcels where weight_kg > 5")
    qtbot.waitUntil(lambda: "weight_kg" in str(window.bench.draft and window.bench.draft.text), timeout=5000)
    good = window.bench.draft.formulation  # type: ignore[union-attr]
    field.setPlainText("select depot_id from parcels where weigth_kg > 5")
    window.editor.read_now()
    draft = window.bench.draft
    assert draft is not None and draft.problems and draft.formulation is good
    assert "did you mean weight_kg?" in window.editor.problem.text()
    assert window.editor.field.extraSelections()


def test_work_can_be_stopped(qtbot: QtBot, window: Window) -> None:
    window.actions_by_method["improve"].trigger()
    assert window.worker.busy
    window.actions_by_method["stop"].trigger()
    assert not window.worker.busy
    assert len(window.bench.sheet.drafts) == 1


def test_measured_sizes_appear(qtbot: QtBot, window: Window) -> None:
    window.actions_by_method["measure"].trigger()
    idle(qtbot, window)
    draft = window.bench.draft
    assert draft is not None and draft.formulation is not None
    sizes = window.bench.sizes(draft.formulation)
    assert all(size.measured is not None for size in sizes.values())


def test_rewrites_that_save_most_stand_first_however_much_they_save(qtbot: QtBot) -> None:
    """A product of large relations: the ratio has more than three figures."""
    catalog = catalog_from_ddl("create table big (a integer, b integer); create table wide (a integer, b integer)")
    large = Catalog({facts.name: replace(facts, rows=1_000_000) for facts in catalog})
    text = "select big.b from big, wide where big.a = wide.a and big.b = 1"
    made = Window(Workbench(edit.with_text(new_sheet("One", large), "A", text)), dark=False)
    qtbot.addWidget(made)
    formulation = made.bench.sheet.drafts[0].formulation
    assert formulation is not None
    most = 0.0
    for operator in formulation.operators():
        made.bench.select(operator, "A")
        answers = made.panel._answers
        assert len(answers) == len(made.bench.answers(operator))
        offered = [made.bench.totals(a) for a in answers if isinstance(a, Offer)]
        assert [after for _, after in offered] == sorted(after for _, after in offered)
        assert all(isinstance(a, Refusal) for a in answers[len(offered) :])
        most = max([most, *(before / max(after, 1.0) for before, after in offered)])
    assert most >= 1000


def test_a_count_is_not_set_against_an_estimate(window: Window) -> None:
    """Exchanging the sides of a join changes no total, however far the counts are from the estimates."""
    bench = window.bench
    join = exploding(window)
    formulation = bench.sheet.drafts[0].formulation
    assert formulation is not None
    bench.amend(measured={o: round(100 * s.rows) + 7 for o, s in bench.sizes(formulation).items()})
    bench.select(join, "A")
    offers = [a for a in bench.answers(join) if isinstance(a, Offer) and a.rule.name == "commute-join"]
    assert offers
    for offer in offers:
        before, after = bench.totals(offer)
        assert before == pytest.approx(after)


def test_a_disabled_action_says_why(window: Window) -> None:
    action = window.actions_by_method["compare"]
    assert not action.isEnabled()
    assert action.statusTip() == "needs two formulations"


def test_every_action_has_a_method_and_shortcuts_are_apart(window: Window) -> None:
    from app.actions import ENTRIES

    assert all(callable(getattr(window, entry.method)) for entry in ENTRIES)
    shortcuts = [entry.shortcut for entry in ENTRIES if entry.shortcut]
    assert len(set(shortcuts)) == len(shortcuts)


def test_both_themes_and_the_print_view_are_painted(window: Window, tmp_path: Path) -> None:
    seen = set()
    for method in ("toggle_dark", "toggle_print", "toggle_dark"):
        window.actions_by_method[method].trigger()
        picture = window.canvas.grab().toImage()
        seen.add(picture.pixelColor(3, 3).name())
        colours = {
            picture.pixelColor(x, y).rgb() for x in range(0, picture.width(), 7) for y in range(0, picture.height(), 7)
        }
        assert len(colours) > 3
    assert len(seen) >= 2
