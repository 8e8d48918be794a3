"""A size and how it was made."""

from __future__ import annotations

from dataclasses import dataclass

from core.catalog.model import Evidence


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
