"""Sizes: estimates with their derivations, guaranteed ranges, measured counts."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from dataclasses import replace
from types import ModuleType

from core.algebra.formulation import Formulation
from core.algebra.graph import inputs, postorder
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.derive.facts import Facts
from core.size.estimate import estimate, width_of
from core.size.guarantee import Bounds, bounds
from core.size.model import Estimate, Line, Size, as_float, figure

__all__ = ["Line", "Size", "size"]


def size(
    query: Formulation | Operator,
    catalog: Catalog,
    measured: Mapping[Operator, int] | None = None,
    facts: Facts | None = None,
) -> dict[Operator, Size]:
    """The size of every operator of a formulation (or of a graph).

    In a correlated part a size is for one outer row. `measured` are exact counts by operator, from
    `core.engine.measure`.
    """
    known = facts if facts is not None else Facts(catalog)
    roots = query.roots() if isinstance(query, Formulation) else (query,)
    estimates: dict[Operator, Estimate] = {}
    ranges: dict[Operator, Bounds] = {}
    sizes: dict[Operator, Size] = {}
    order = postorder(*roots)
    for operator in order:
        below = [estimates[part] for part in inputs(operator)]
        found = estimate(operator, below, known, estimates)
        limits = bounds(operator, [ranges[part] for part in inputs(operator)], known)
        found, clamped = _clamped(found, limits)
        estimates[operator], ranges[operator] = found, limits
        lines = found.lines if clamped is None else (*found.lines, clamped)
        count = None if measured is None else measured.get(operator)
        sizes[operator] = Size(
            found.rows,
            limits.low,
            limits.high,
            found.rows * width_of(found, operator),
            found.evidence,
            lines,
            limits.reason,
            count,
        )
    return sizes


def _clamped(found: Estimate, limits: Bounds) -> tuple[Estimate, Line | None]:
    """An estimate never leaves its guaranteed range."""
    low = as_float(limits.low)
    if found.rows < low:
        formula = f"max({figure(found.rows)}, {figure(low)})"
        line = Line("no fewer than is guaranteed", formula, low, found.evidence, limits.reason)
        return replace(found, rows=low), line
    high = None if limits.high is None else as_float(limits.high)
    if high is not None and found.rows > high:
        formula = f"min({figure(found.rows)}, {figure(high)})"
        line = Line("no more than is guaranteed", formula, high, found.evidence, limits.reason)
        return replace(found, rows=high), line
    return found, None


class _Room(ModuleType):
    """The library's `core.size(...)` has the name of this package, so the package answers to a call."""

    def __call__(
        self, query: Formulation | Operator, catalog: Catalog, measured: Mapping[Operator, int] | None = None
    ) -> dict[Operator, Size]:
        return size(query, catalog, measured)


sys.modules[__name__].__class__ = _Room
