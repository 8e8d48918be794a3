"""Runs every `bench_*.py` beside this file, or those named, and prints name, figure, reference and ratio."""

from __future__ import annotations

import importlib
import sys
from collections.abc import Iterable
from pathlib import Path

from tests.bench import Row


def names() -> list[str]:
    return sorted(file.stem.removeprefix("bench_") for file in Path(__file__).parent.glob("bench_*.py"))


def lines(rows: Iterable[Row]) -> list[str]:
    """The rows as a table; the ratio is figure by reference, below 1 is less than the reference."""
    cells = [("name", "figure", "reference", "ratio")]
    for row in rows:
        ratio = f"{row.figure / row.reference:.2f}" if row.reference else "-"
        cells.append((row.name, f"{row.figure:,.1f} {row.unit}", f"{row.reference:,.1f} {row.unit}", ratio))
    widths = [max(len(line[column]) for line in cells) for column in range(4)]
    return [f"{a:<{widths[0]}}  {b:>{widths[1]}}  {c:>{widths[2]}}  {d:>{widths[3]}}" for a, b, c, d in cells]


def main(asked: list[str]) -> int:
    unknown = set(asked) - set(names())
    if unknown:
        print(f"no such benchmark: {', '.join(sorted(unknown))}; there are {', '.join(names())}", file=sys.stderr)
        return 2
    rows: list[Row] = []
    for name in asked or names():
        rows.extend(importlib.import_module(f"tests.bench.bench_{name}").run())
    print("\n".join(lines(rows)))
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
