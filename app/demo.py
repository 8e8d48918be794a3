"""`make run`: the demo sheet in the window; with no screen, drawn to files and printed."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable, Mapping
from pathlib import Path

from core.algebra.operators import Operator
from core.size import Size
from core.size.numbers import rows_text


def has_screen() -> bool:
    """Whether a window can be shown: always on desktops other than X11 and Wayland, there where one is running."""
    if os.environ.get("QT_QPA_PLATFORM") == "offscreen":
        return False
    if not sys.platform.startswith("linux"):
        return True
    return bool(os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY"))


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(
        prog="planimeter-demo", description="Opens the demo sheet, or draws it where there is no screen."
    )
    parser.add_argument(
        "--scale", type=float, default=1.0, help="how much data the demo has (1: about half a million rows)"
    )
    parser.add_argument("--out", type=Path, default=Path("build"), help="where the drawings go when there is no screen")
    asked = parser.parse_args(arguments)
    if has_screen():
        from app.window import run

        return run([])
    return draw(asked.scale, asked.out)


def draw(scale: float, out: Path) -> int:
    """Draws the demo's story to PNG and SVG, and prints sizes, findings and verdict."""
    os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
    from dataclasses import replace

    from app.demo_sheet import demo
    from app.export.files import export
    from app.model import Workbench
    from app.window import application
    from core.algebra.notation import tree_text
    from core.compare import compare
    from core.drawing.page import CAUTION
    from core.drawing.palette import PALETTES
    from core.engine.duckdb_engine import DuckEngine
    from core.engine.measure import measure
    from core.rewrite.improve import improve
    from core.sheet import edit

    print("No screen: the demo sheet is drawn to files.\n")
    application()
    sheet = demo(scale=scale)
    first = sheet.drafts[0].formulation
    assert first is not None
    chain = improve(first, sheet.catalog, 5.0)
    sheet = edit.with_copy(sheet, "A", "B")
    for step in chain:
        sheet = edit.with_rewrite(sheet, "B", step.offer)
    engine = DuckEngine.over_folder(sheet.data)
    counts = {}
    for draft in sheet.drafts:
        if draft.formulation is not None:
            counts.update(measure(draft.formulation, engine)[0])
    engine.close()
    second = sheet.drafts[1].formulation
    assert second is not None
    verdict = compare(first, second, sheet.catalog, 10.0)
    bench = Workbench(replace(sheet, measured=counts, verdict=verdict.sentence))
    for draft in bench.sheet.drafts:
        assert draft.formulation is not None
        sizes = bench.sizes(draft.formulation)

        print(f"{draft.name}  {draft.subtitle}\n{tree_text(draft.formulation.root, facts=_facts(sizes))}\n")
    print("Findings")
    for number, letter, _, text in bench.callouts():
        print(f"  {number}  {letter}  {text}")
    print("\nRewrites of B")
    for i, step in enumerate(chain, 1):
        print(f"  B{i}  {step.offer.rule.title}: {step.offer.what}")
    print(f"\nVerdict: {verdict.sentence}\n")
    out.mkdir(parents=True, exist_ok=True)
    page = bench.page()
    for name, palette in (
        ("demo.svg", "print"),
        ("demo.png", "light"),
        ("demo-dark.png", "dark"),
        ("demo.pdf", "print"),
    ):
        export(page, PALETTES[palette], out / name, bench.payload())
        print(f"drawn: {out / name}")
    print(f"\n{CAUTION}")
    return 0


def _facts(sizes: Mapping[Operator, Size]) -> Callable[[Operator], str]:
    """What is printed beside an operator of the tree."""

    def text(operator: Operator) -> str:
        size = sizes[operator]
        return f"[{rows_text(size.best)} rows, {size.best_evidence.word}; estimate {rows_text(size.rows)}]"

    return text


if __name__ == "__main__":
    sys.exit(main())
