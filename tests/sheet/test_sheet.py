"""The document: edits, history, and a file that opens as it was."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from core.algebra.notation import tree_text
from core.catalog.ddl import catalog_from_ddl
from core.rewrite import Offer, rewrites
from core.sheet import edit
from core.sheet.document import History, Sheet, new_sheet
from core.sheet.file import SheetError, from_json, load, save, to_json
from tests.generate.queries import SCHEMA

TEXT = "select r.b, count(distinct r.a) as n from r join t on r.a = t.a where r.c > 1 group by r.b"


def sheet_with_rewrites(count: int = 3) -> Sheet:
    sheet = edit.with_text(new_sheet("One", catalog_from_ddl(SCHEMA), ""), "A", TEXT)
    for _ in range(count):
        draft = sheet.draft("A")
        assert draft is not None and draft.formulation is not None
        offers = [
            a
            for op in draft.formulation.operators()
            for a in rewrites(draft.formulation, op, sheet.catalog)
            if isinstance(a, Offer)
            and a.rule.name in ("join-to-semi-join", "count-distinct-to-count", "push-selection-below-join")
        ]
        sheet = edit.with_rewrite(sheet, "A", offers[0])
    return sheet


def test_a_sheet_opens_as_it_was(tmp_path: Path) -> None:
    sheet = sheet_with_rewrites()
    draft = sheet.draft("A")
    assert draft is not None and draft.formulation is not None
    operators = draft.formulation.operators()
    sheet = edit.with_callout(sheet, "A", operators[2], "look here\nand there")
    from dataclasses import replace

    sheet = replace(sheet, measured={op: i for i, op in enumerate(operators)}, verdict="A ≡ B")
    path = tmp_path / "one.planimeter"
    save(sheet, path)
    again = load(path)
    assert to_json(again) == to_json(sheet)
    assert tree_text(again.drafts[0].formulation.root) == tree_text(draft.formulation.root)  # type: ignore[union-attr]
    assert again.callouts[0].text == "look here\nand there"
    assert sorted(again.measured.values()) == list(range(len(operators)))


def test_every_offer_is_opened_as_the_one_it_was() -> None:
    """Several offers of one rule at one operator: the file names the one that was taken, whoever took it."""
    text = "select r.a from r join t on r.a = t.a where r.c > 1 and t.a > 2"
    sheet = edit.with_text(new_sheet("One", catalog_from_ddl(SCHEMA), ""), "A", text)
    formulation = sheet.drafts[0].formulation
    assert formulation is not None
    offers = [
        answer
        for operator in formulation.operators()
        for answer in rewrites(formulation, operator, sheet.catalog)
        if isinstance(answer, Offer)
    ]
    assert any(offer.choice > 0 for offer in offers)
    for offer in offers:
        again = from_json(to_json(edit.with_rewrite(sheet, "A", offer))).drafts[0]
        assert again.revisions[1].what == offer.what
        assert tree_text(again.formulation.root) == tree_text(offer.after.root)  # type: ignore[union-attr]


def test_an_offer_that_is_not_there_any_more_is_said() -> None:
    document = json.loads(to_json(sheet_with_rewrites()))
    document["drafts"][0]["revisions"][1]["choice"] = 99
    with pytest.raises(SheetError, match="is not legal with this catalog"):
        from_json(json.dumps(document))


def test_no_half_file_is_left(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "one.planimeter"
    save(sheet_with_rewrites(0), path)
    before = path.read_text()
    monkeypatch.setattr("os.replace", lambda *_: (_ for _ in ()).throw(OSError("disk full")))
    with pytest.raises(OSError, match="disk full"):
        save(sheet_with_rewrites(2), path)
    assert path.read_text() == before
    assert [p.name for p in tmp_path.iterdir()] == ["one.planimeter"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", "this is no sheet"),
        ("[]", "a sheet says format"),
        ('{"format": "something else"}', "something else"),
        ('{"format": "planimeter sheet 1"}', "the sheet lacks"),
    ],
)
def test_what_is_no_sheet_is_said(text: str, message: str) -> None:
    with pytest.raises(SheetError, match=message):
        from_json(text)


def test_a_rewrite_that_is_not_legal_any_more_is_said() -> None:
    document = json.loads(to_json(sheet_with_rewrites()))
    document["catalog"] = document["catalog"].replace('primary = ["a"]', "")
    with pytest.raises(SheetError, match="is not legal with this catalog"):
        from_json(json.dumps(document))


def test_history() -> None:
    first = new_sheet("x", catalog_from_ddl(SCHEMA))
    history = History(first)
    second = edit.with_text(first, "A", "select a from r")
    history.do("typing in A", second, merge=True)
    third = edit.with_text(second, "A", "select b from r")
    history.do("typing in A", third, merge=True)
    assert history.undoable == "typing in A"
    history.undo()
    assert history.sheet is first and history.redoable == "typing in A"
    history.redo()
    assert history.sheet is third and not history.redoable


def test_the_last_good_drawing_stays() -> None:
    sheet = edit.with_text(new_sheet("x", catalog_from_ddl(SCHEMA)), "A", "select a from r")
    broken = edit.with_text(sheet, "A", "select a frm r")
    draft = broken.draft("A")
    assert draft is not None and draft.problems
    assert draft.formulation is sheet.drafts[0].formulation


def test_notes_follow_their_operators() -> None:
    sheet = sheet_with_rewrites(0)
    draft = sheet.draft("A")
    assert draft is not None and draft.formulation is not None
    root = draft.formulation.root
    sheet = edit.with_callout(sheet, "A", root, "the answer")
    offer = next(
        a
        for op in draft.formulation.operators()
        for a in rewrites(draft.formulation, op, sheet.catalog)
        if isinstance(a, Offer) and a.rule.name == "join-to-semi-join"
    )
    after = edit.with_rewrite(sheet, "A", offer)
    assert after.callouts[0].operator in after.drafts[0].formulation.operators()  # type: ignore[union-attr]
