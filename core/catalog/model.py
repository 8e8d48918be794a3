"""What is known of the base relations: attributes, types, constraints, statistics; each with its evidence.

Missing figures are allowed everywhere (None); whoever needs one assumes something and says so. *Exact* figures are
those that hold for the data as it is, and only they may enter a guaranteed range.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time
from decimal import Decimal
from enum import IntEnum
from types import MappingProxyType

from core.algebra.types import Type

Value = bool | int | float | Decimal | str | date | datetime | time
"""A data value as Python holds it. NULL never appears in statistics: nulls are counted apart."""


class Evidence(IntEnum):
    """How good a number is; a derived number is as good as the worst it rests on."""

    ASSUMED = 0
    DECLARED = 1
    PROFILED = 2
    SAMPLED = 3
    MEASURED = 4

    @property
    def word(self) -> str:
        return self.name.lower()


@dataclass(frozen=True, slots=True)
class HeavyHitter:
    """A value and the number of rows that hold it."""

    value: Value
    rows: int


@dataclass(frozen=True, slots=True)
class Statistics:
    """Figures of one attribute.

    `distinct` counts non-null values, `nulls` rows, `width` is the average number of bytes of a non-null value.
    `heavy` lists the most frequent values, most frequent first. `histogram` holds the bounds of buckets with equal
    numbers of rows, lowest and highest value included, NULLs and heavy hitters left out. `largest_group` is the largest
    number of rows that share one non-null value. `exact` names the figures that hold to the row; `declared` those that
    a person wrote.
    """

    distinct: int | None = None
    nulls: int | None = None
    low: Value | None = None
    high: Value | None = None
    heavy: tuple[HeavyHitter, ...] = ()
    histogram: tuple[Value, ...] = ()
    width: float | None = None
    largest_group: int | None = None
    exact: frozenset[str] = frozenset()
    declared: frozenset[str] = frozenset()
    evidence: Evidence = Evidence.DECLARED
    source: str = ""
    as_of: date | None = None


@dataclass(frozen=True, slots=True)
class AttributeFacts:
    """One attribute of a base relation. `inferred` marks an attribute known only from its use in a query."""

    name: str
    type: Type
    nullable: bool = True
    statistics: Statistics | None = None
    inferred: bool = False


@dataclass(frozen=True, slots=True)
class ForeignKey:
    """Every non-null combination of `attributes` occurs in `target`'s attributes (which are unique there)."""

    attributes: tuple[str, ...]
    relation: str
    target: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Joint:
    """Figures of several attributes taken together: distinct combinations, and the largest number of rows sharing one."""

    attributes: tuple[str, ...]
    distinct: int
    largest_group: int | None = None
    exact: bool = False
    evidence: Evidence = Evidence.PROFILED


@dataclass(frozen=True, slots=True)
class RelationFacts:
    """One base relation.

    `keys` are declared primary and unique keys, the primary first (`primary` says whether there is one). A unique key
    over nullable attributes admits any number of rows with a NULL in it, as in SQL. `checks` are SQL conditions.
    """

    name: str
    attributes: tuple[AttributeFacts, ...]
    primary: tuple[str, ...] | None = None
    unique: tuple[tuple[str, ...], ...] = ()
    foreign_keys: tuple[ForeignKey, ...] = ()
    checks: tuple[str, ...] = ()
    rows: int | None = None
    rows_exact: bool = False
    rows_evidence: Evidence = Evidence.ASSUMED
    bytes: int | None = None
    joint: tuple[Joint, ...] = ()
    source: str = ""
    as_of: date | None = None
    location: str = ""

    def attribute(self, name: str) -> AttributeFacts | None:
        """The attribute with this name, in any case of letters."""
        folded = name.lower()
        return next((a for a in self.attributes if a.name.lower() == folded), None)

    @property
    def keys(self) -> tuple[tuple[str, ...], ...]:
        return (() if self.primary is None else (self.primary,)) + self.unique


@dataclass(frozen=True)
class Catalog:
    """Relations by name. Names are looked up without regard to case; a dotted name also by its last part."""

    relations: Mapping[str, RelationFacts] = field(default_factory=dict)

    def __post_init__(self) -> None:
        folded = {name.lower(): facts for name, facts in self.relations.items()}
        object.__setattr__(self, "relations", MappingProxyType(folded))

    def __iter__(self) -> Iterator[RelationFacts]:
        return iter(self.relations.values())

    def __len__(self) -> int:
        return len(self.relations)

    def __getstate__(self) -> dict[str, object]:
        return {"relations": dict(self.relations)}

    def __setstate__(self, state: dict[str, Mapping[str, RelationFacts]]) -> None:
        object.__setattr__(self, "relations", MappingProxyType(dict(state["relations"])))

    def relation(self, name: str) -> RelationFacts | None:
        """The facts of a relation, or None where nothing is known of it."""
        folded = name.lower()
        found = self.relations.get(folded)
        if found is None and "." in folded:
            found = self.relations.get(folded.rpartition(".")[2])
        return found


def catalog_of(relations: Iterable[RelationFacts]) -> Catalog:
    return Catalog({facts.name: facts for facts in relations})
