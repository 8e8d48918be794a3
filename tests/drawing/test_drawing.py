"""Drawings: widths that Qt agrees with, texts that do not overlap, palettes that can be read, trees that are tidy."""

from __future__ import annotations

import random
import xml.etree.ElementTree as ET
from itertools import combinations, pairwise
from pathlib import Path

import pytest
from PySide6.QtGui import QFontMetricsF, QGuiApplication
from pytestqt.qtbot import QtBot

from app.export.files import carried, export
from app.fonts import font
from app.model import Workbench
from core.catalog.ddl import catalog_from_ddl
from core.drawing.metrics import FACES, cut, faces, width, wrapped
from core.drawing.palette import PALETTES, contrast
from core.drawing.svg import to_svg
from core.drawing.tidy import Node, lay_out
from core.sheet import edit
from core.sheet.document import new_sheet
from core.size.numbers import bytes_text, ratio_text, rows_text
from tests.data import demo, tpch


def bench_of(texts: list[str], ddl: str) -> Workbench:
    sheet = new_sheet("A sheet", catalog_from_ddl(ddl))
    for letter, text in zip("AB", texts, strict=False):
        sheet = edit.with_text(sheet, letter, text)
    return Workbench(sheet)


QUERIES = [("tpch", n, t) for n, t in tpch.queries().items()] + [("demo", n, t) for n, t in demo.queries().items()]


@pytest.mark.parametrize(("source", "name", "text"), QUERIES, ids=[f"{s}-{n}" for s, n, _ in QUERIES])
def test_texts_never_overlap_or_leave_the_frame(qtbot: QtBot, source: str, name: str, text: str) -> None:
    bench = bench_of([text], tpch.schema() if source == "tpch" else demo.schema())
    for display in (bench.draw().display, bench.page()):
        boxes = [(t.text, t.box) for t in display.texts() if t.text.strip()]
        left, top, right, bottom = display.bounds()
        for words, (a, b, c, d) in boxes:
            assert left <= a and top <= b and c <= right + 0.01 and d <= bottom + 0.01, words
        for (one, p), (other, q) in combinations(boxes, 2):
            apart = p[2] <= q[0] + 0.6 or q[2] <= p[0] + 0.6 or p[3] <= q[1] + 0.6 or q[3] <= p[1] + 0.6
            assert apart, f"{one!r} meets {other!r}"


def test_edges_never_cross_plates(qtbot: QtBot) -> None:
    from core.drawing.display import Line

    for source, _, text in QUERIES:
        drawn = bench_of([text], tpch.schema() if source == "tpch" else demo.schema()).draw()
        plates = [drawn.display.boxes[o] for o in drawn.operators]
        for item in drawn.display.items:
            if isinstance(item, Line) and not item.owner:
                for (x1, y1), (x2, y2) in zip(item.points, item.points[1:], strict=False):
                    for left, top, right, bottom in plates:
                        inside = max(min(x1, x2), left) < min(max(x1, x2), right) and max(min(y1, y2), top) < min(
                            max(y1, y2), bottom
                        )
                        assert not inside or (x1 == x2 and y1 == y2)


def test_qt_measures_what_the_core_computed(qtbot: QtBot) -> None:
    """Advance widths shipped as data equal Qt's, without hinting and kerning, within 0.15 %."""
    assert QGuiApplication.instance() is not None
    sample = "count(distinct parcel_id) 0123456789 WAVE To. fi"
    for face in FACES:
        own = "σπγδ⋈⟕⟖⟗⋉▷∪∩−≡→" if face == "math" else sample
        measured = QFontMetricsF(font(face, 100)).horizontalAdvance(own)
        assert measured == pytest.approx(width(own, face, 100), rel=0.0015), face


def test_every_sign_of_the_algebra_has_a_glyph() -> None:
    for character in "σπρ⋈⟕⟖⟗⋉▷×∪∩−÷δγνμωτλ≡≢→≤≥≠…·∞":
        assert any(character in face.widths for face in faces().values()), character


def test_texts_are_cut_and_wrapped_to_measure() -> None:
    text = "delivered_at > promised_at and parcel_id = notices.parcel_id"
    for most in range(20, 400, 17):
        assert width(cut(text, "mono", 11.5, most), "mono", 11.5) <= max(most, width("…", "mono", 11.5))
        assert all(
            width(
                line,
                "sans",
                12,
            )
            <= most
            or " " not in line
            for line in wrapped(text, "sans", 12, most)
        )


@pytest.mark.parametrize("name", PALETTES)
def test_text_can_be_read(name: str) -> None:
    """WCAG 2.2 AA: 4.5:1 for text, 3:1 for lines that carry meaning."""
    palette = PALETTES[name]
    for ground in ("paper", "wash", "panel", "field"):
        for role in ("ink", "soft"):
            assert contrast(palette[role], palette[ground]) >= 4.5, (role, ground)
    for ground in ("paper", "wash"):
        assert contrast(palette["accent"], palette[ground]) >= 4.5, ground
    for role in ("word", "text", "number"):
        assert contrast(palette[role], palette["field"]) >= 4.5, role


def test_contrast_of_known_colours() -> None:
    """WCAG 2.2: black on white 21:1, #777777 on white 4.48:1, #767676 4.54:1."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.005)
    assert contrast("#767676", "#ffffff") == pytest.approx(4.54, abs=0.005)


def simulated(colour: str, matrix: tuple[tuple[float, float, float], ...]) -> tuple[float, ...]:
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    return tuple(sum(m * c for m, c in zip(row, channels, strict=True)) for row in matrix)


def test_the_accent_stands_out_for_every_eye() -> None:
    """Machado, Oliveira, Fernandes, IEEE TVCG 15(6) 2009, full severity: protanopia, deuteranopia, tritanopia."""
    matrices = (
        ((0.152286, 1.052583, -0.204868), (0.114503, 0.786281, 0.099216), (-0.003882, -0.048116, 1.051998)),
        ((0.367322, 0.860646, -0.227968), (0.280085, 0.672501, 0.047413), (-0.011820, 0.042940, 0.968881)),
        ((1.255528, -0.076749, -0.178779), (-0.078411, 0.930809, 0.147602), (0.004733, 0.691367, 0.303900)),
    )
    for palette in PALETTES.values():
        for matrix in matrices:
            accent, ink = simulated(palette["accent"], matrix), simulated(palette["ink"], matrix)
            assert sum((a - b) ** 2 for a, b in zip(accent, ink, strict=True)) ** 0.5 > 0.15


def random_tree(rng: random.Random, count: int) -> list[Node]:
    nodes = [Node(rng.uniform(5, 80), rng.uniform(5, 200), rng.uniform(20, 90)) for _ in range(count)]
    for i in range(1, count):
        nodes[rng.randint(max(0, i - 12), i - 1)].children.append(nodes[i])
    return nodes


def test_trees_never_overlap() -> None:
    rng = random.Random(3)
    for _ in range(120):
        nodes = random_tree(rng, rng.randint(1, 60))
        lay_out(nodes[0])
        by_level: dict[float, list[Node]] = {}
        for node in nodes:
            by_level.setdefault(node.y, []).append(node)
        for level in by_level.values():
            level.sort(key=lambda n: n.x)
            for left, right in pairwise(level):
                assert left.x + left.after <= right.x - right.before + 1e-6
        for node in nodes:
            xs = [child.x for child in node.children]
            assert xs == sorted(xs)
            assert all(child.y > node.y for child in node.children)


def test_deep_trees_are_laid_out() -> None:
    chain = [Node(10, 10, 20) for _ in range(10_000)]
    for above, below in pairwise(chain):
        above.children.append(below)
    lay_out(chain[0])
    assert len({round(node.x, 6) for node in chain}) == 1


def test_svg_is_well_formed_and_speaks(qtbot: QtBot) -> None:
    bench = bench_of([demo.queries()["01-late-parcels-by-depot.a"]], demo.schema())
    page = bench.page()
    root = ET.fromstring(to_svg(page, PALETTES["print"], 0, b"{}"))
    space = "{http://www.w3.org/2000/svg}"
    assert root.find(f"{space}title").text == "A sheet"  # type: ignore[union-attr]
    assert "Formulation A" in (root.find(f"{space}desc").text or "")  # type: ignore[union-attr]
    assert len(root.findall(f".//{space}text")) >= len([t for t in page.texts() if t.text.strip()])


@pytest.mark.parametrize("ending", [".svg", ".pdf", ".png"])
def test_exports_carry_the_sheet(qtbot: QtBot, tmp_path: Path, ending: str) -> None:
    bench = bench_of([demo.queries()["08-one-timeline"]], demo.schema())
    target = tmp_path / f"x{ending}"
    export(bench.page(), PALETTES["print"], target, bench.payload())
    assert carried(target) == bench.payload()
    export(bench.page(), PALETTES["print"], target)
    assert carried(target) is None


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0, "0"),
        (0.3, "0.3"),
        (1, "1"),
        (412, "412"),
        (4861.4, "4861"),
        (70_200_000, "70.2M"),
        (741e6, "741M"),
        (1.2e9, "1.2G"),
        (999_600, "1M"),
        (52e6, "52M"),
        (6.912e11, "691G"),
    ],
)
def test_rows(value: float, text: str) -> None:
    assert rows_text(value) == text


def test_ratios_and_bytes() -> None:
    assert ratio_text(741e6, 4.71e6) == "÷ 157"
    assert ratio_text(10, 32) == "× 3.2"
    assert ratio_text(5, 5) == "="
    assert bytes_text(41.6e9) == "41.6 GB"
    assert bytes_text(912) == "912 B"


SHARED = (
    "with x as (select a, b from t where h > 0) select p.a, q.b from x p join x q on p.a = q.b join x z on z.a = q.a"
)


def test_shared_parts_are_drawn_once_as_a_graph(qtbot: QtBot) -> None:
    """Graphviz runs in a process of its own; every operator has one plate, and an edge from everyone who reads it."""
    import sys

    from core.algebra.graph import inputs
    from core.drawing.display import Line
    from tests.generate.queries import SCHEMA

    bench = bench_of([SHARED], SCHEMA)
    drawn = bench.draw()
    formulation = bench.sheet.drafts[0].formulation
    assert formulation is not None
    assert len(drawn.operators) == len(formulation.operators())
    edges = [item for item in drawn.display.items if isinstance(item, Line) and not item.owner and item.weight >= 1.2]
    assert len(edges) >= sum(len(inputs(op)) for op in formulation.operators())
    assert "pygraphviz" not in sys.modules


def test_without_graphviz_a_shared_part_is_named_at_its_second_place(
    qtbot: QtBot, monkeypatch: pytest.MonkeyPatch
) -> None:
    from tests.generate.queries import SCHEMA

    monkeypatch.setattr("core.drawing.plan.place", lambda *_: None)
    texts = [t.text for t in bench_of([SHARED], SCHEMA).draw().display.texts()]
    assert any("drawn beside" in text for text in texts)
