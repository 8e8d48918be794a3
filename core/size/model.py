"""A size and how it was made."""

from __future__ import annotations

from collections.abc import Mapping
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
    None: nothing bounds it). `measured` is an exact count by an engine, where there is one. `bytes` is rows times width.
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


def figure(value: float) -> str:
    """A number as it stands in a derivation: enough digits to follow the arithmetic."""
    if value == int(value) and abs(value) < 1e15:
        return str(int(value))
    return f"{value:.6g}"
