"""Operators gathered into SELECT blocks, the shape of SQL, before anything has a name.

A block absorbs operators from the inside out as long as SQL's order of clauses allows; where it does not, the block
becomes a derived table and a new one begins.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import IntEnum

from core.algebra.operators import (
    JoinKind,
    Relation,
    SetKind,
    TableFunction,
    Unnest,
    Values,
)
from core.algebra.scalars import (
    TRUE,
    Aggregate,
    Attribute,
    Scalar,
    SortKey,
    WindowCall,
)


class Stage(IntEnum):
    """How far through SQL's clauses a block has come."""

    FROM = 0
    WHERE = 1
    GROUP = 2
    HAVING = 3
    WINDOW = 4
    QUALIFY = 5
    DISTINCT = 6
    ORDER = 7
    LIMIT = 8


@dataclass(slots=True)
class StepUse:
    """One use of a common table expression, or of a base relation under other attributes.

    `columns` are its columns' names by attribute.
    """

    name: str
    columns: dict[Attribute, str]
    alias: str = ""
    base: bool = False


@dataclass(slots=True)
class Nested:
    """Joined items in parentheses."""

    items: list[Item]


@dataclass(slots=True)
class SubqueryTerm:
    """A subquery that stands for a condition or a value: EXISTS, IN, NOT IN, a truth value, one value."""

    kind: JoinKind
    query: Query
    condition: Scalar
    attribute: Attribute | None = None


Definition = Scalar | Aggregate | WindowCall | SubqueryTerm
Condition = Scalar | SubqueryTerm


@dataclass(slots=True)
class Item:
    """An item of FROM. `kind` says how it joins what stands before it; the first item's says nothing."""

    body: Relation | StepUse | Nested | Values | TableFunction | Unnest | Block | SetQuery
    attributes: tuple[Attribute, ...]
    alias: str = ""
    kind: JoinKind = JoinKind.INNER
    on: Scalar = TRUE
    lateral: bool = False
    fields: tuple[str, ...] = ()
    """For an unnested relation: what its elements call the attributes."""


@dataclass(slots=True)
class Block:
    """One SELECT. `definitions` give the attributes that are computed in it; the others come from its items."""

    items: list[Item] = field(default_factory=list)
    columns: tuple[Attribute, ...] = ()
    definitions: dict[Attribute, Definition] = field(default_factory=dict)
    weights: dict[Attribute, int] = field(default_factory=dict)
    where: list[Condition] = field(default_factory=list)
    keys: tuple[Attribute, ...] | None = None
    sets: tuple[tuple[Attribute, ...], ...] | None = None
    having: list[Condition] = field(default_factory=list)
    qualify: list[Condition] = field(default_factory=list)
    distinct: bool = False
    order: tuple[SortKey, ...] = ()
    count: Scalar | None = None
    offset: Scalar | None = None
    ties: bool = False
    stage: Stage = Stage.FROM
    alias: str = ""

    def hidden(self) -> set[Attribute]:
        """Every attribute that means something inside the block."""
        found = set(self.definitions)
        for item in self.items:
            found.update(_inner(item))
        return found


def _inner(item: Item) -> set[Attribute]:
    if isinstance(item.body, Nested):
        return {a for inner in item.body.items for a in _inner(inner)}
    return set(item.attributes)


@dataclass(slots=True)
class SetQuery:
    """A set operation over queries, whose columns correspond by position."""

    kind: SetKind
    distinct: bool
    inputs: list[Query]
    columns: tuple[Attribute, ...]
    order: tuple[SortKey, ...] = ()
    count: Scalar | None = None
    offset: Scalar | None = None
    ties: bool = False
    stage: Stage = Stage.DISTINCT
    alias: str = ""


Query = Block | SetQuery


@dataclass(slots=True)
class StepDefinition:
    """A common table expression to be written. `parts` holds base and step of a recursive one."""

    name: str
    query: Query
    columns: dict[Attribute, str]
    recursive: bool = False


def derived(query: Query, alias: str = "") -> Block:
    """A new block that selects from the query as a derived table."""
    item = Item(query, query.columns, alias or query.alias)
    return Block([item], query.columns)
