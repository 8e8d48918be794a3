"""A size and how it was made."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from core.algebra.scalars import Attribute
from core.catalog.model import Evidence
from core.size.distribution import Distribution


@dataclass(frozen=True, slots=True)
class Line:
    """One step of a derivation: what is computed, the arithmetic in figures, its value, and what it rests on.

    `formula` can be followed with a pocket calculator: numbers, + - × ÷, min, max, powers and parentheses.
    """

    text: str
    formula: str
    value: float
    evidence: Evidence
    source: str = ""


@dataclass(frozen=True, slots=True)
class Size:
    """Rows and bytes out of an operator.

    `rows` is the estimate. `low`..`high` is guaranteed for every data set that obeys the catalog's exact facts (`high`
    None: nothing bounds it). `measured` is an exact count by an engine, where there is one. `bytes` is rows × width.
    """

    rows: float
    low: int
    high: int | None
    bytes: float
    evidence: Evidence
    derivation: tuple[Line, ...]
    range_reason: str = ""
    measured: int | None = None

    @property
    def best(self) -> float:
        """The measured count where there is one, else the estimate."""
        return self.rows if self.measured is None else float(self.measured)

    @property
    def best_evidence(self) -> Evidence:
        return self.evidence if self.measured is None else Evidence.MEASURED


@dataclass(frozen=True, slots=True)
class Estimate:
    """Rows, the spread of each attribute, and the lines that led there."""

    rows: float
    spread: Mapping[Attribute, Distribution]
    evidence: Evidence
    lines: tuple[Line, ...] = ()


MOST_ROWS = 1e300
"""Larger estimates are written as this: a product of a hundred relations has more rows than a float can count."""


def as_float(rows: int) -> float:
    """A count as a float, whatever its length."""
    return float(min(rows, int(MOST_ROWS)))


def figure(value: float) -> str:
    """A number as it stands in a derivation: enough digits to follow the arithmetic."""
    if value == int(value) and abs(value) < 1e15:
        return str(int(value))
    text = f"{value:.6g}"
    # A share just below one is not one: what is left of it (1 - share) may be all that matters.
    return f"{value:.12g}" if text == "1" else text


_SHOWN = 12
"""Figures that a line writes out: the rest of a long row of them is taken together."""


def product_text(factors: Sequence[float]) -> str:
    """Figures multiplied, as a line writes it."""
    shown = [figure(factor) for factor in factors[:_SHOWN]]
    if len(factors) > _SHOWN:
        shown.append(figure(math.prod(factors[_SHOWN:])))
    return " × ".join(shown)


def sum_text(terms: Sequence[float]) -> str:
    """Figures added, as a line writes it."""
    shown = [figure(term) for term in terms[:_SHOWN]]
    if len(terms) > _SHOWN:
        shown.append(figure(sum(terms[_SHOWN:])))
    return " + ".join(shown)
