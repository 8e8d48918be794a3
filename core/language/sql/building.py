"""What every operator needs on its way into a SELECT block: stages, definitions, what they read."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from core.algebra.functions import volatile
from core.algebra.operators import (
    Operator,
)
from core.algebra.scalars import (
    Aggregate,
    Attribute,
    Node,
    Ref,
    Scalar,
    WindowCall,
    fresh_like,
    refs,
    walk,
)
from core.language.sql.blocks import (
    Block,
    Condition,
    Definition,
    Query,
    SetQuery,
    Stage,
    StepDefinition,
    SubqueryTerm,
    derived,
)

HEAVY = 60
"""An inlined expression of more nodes than this is computed in a derived table instead."""

TIES_DIALECTS = frozenset({"postgres", "trino", "oracle"})
"""Engines with FETCH FIRST ... WITH TIES."""

NESTING_DIALECTS = frozenset({"duckdb"})
"""Engines for which lists of rows are written and opened."""

LATERAL_DIALECTS = frozenset({"duckdb", "postgres", "snowflake", "spark", "databricks", "trino", "mysql", "oracle"})
"""Engines with LEFT JOIN LATERAL."""

QUALIFY_DIALECTS = frozenset({"duckdb", "snowflake", "bigquery", "databricks", "teradata", "clickhouse", "redshift"})


@dataclass(slots=True)
class Gathering:
    """What is known while a graph is turned into blocks."""

    dialect: str
    names: Mapping[Operator, str]
    aliases: Mapping[Operator, str]
    steps: list[StepDefinition] = field(default_factory=list)
    taken: set[str] = field(default_factory=set)
    recurring: dict[int, tuple[str, tuple[Attribute, ...]]] = field(default_factory=dict)
    fields: dict[Attribute, tuple[str, ...]] = field(default_factory=dict)
    """What the attributes of a nested relation are called, by the attribute that holds it."""


def unique_names(columns: Sequence[Attribute]) -> dict[Attribute, str]:
    """Column names for attributes: their own, numbered where two are the same."""
    found: dict[Attribute, str] = {}
    taken: set[str] = set()
    for attribute in columns:
        name, number = attribute.name or "value", 1
        while name.lower() in taken:
            number += 1
            name = f"{attribute.name}_{number}"
        taken.add(name.lower())
        found[attribute] = name
    return found


def opened(query: Query, highest: Stage) -> Block:
    """The query as a block that has not come further than `highest`; else a new block over it."""
    if isinstance(query, Block) and query.stage <= highest:
        return query
    return derived(query)


def with_columns(query: Query, columns: tuple[Attribute, ...]) -> Query:
    """The query with these columns; one that is asked for twice becomes two of the same value."""
    if query.columns == columns:
        return query
    if isinstance(query, SetQuery) or query.distinct:
        query = derived(query)
    shown: list[Attribute] = []
    for attribute in columns:
        again = attribute
        if attribute in shown:
            again = fresh_like(attribute)
            query.definitions[again] = Ref(attribute)
        shown.append(again)
    query.columns = tuple(shown)
    return query


def add_condition(block: Block, terms: Sequence[Condition]) -> None:
    """Adds conditions to the clause that the block has come to: WHERE, HAVING or QUALIFY."""
    if block.stage >= Stage.WINDOW:
        block.qualify.extend(terms)
        block.stage = Stage.QUALIFY
    elif block.stage >= Stage.GROUP:
        block.having.extend(terms)
        block.stage = Stage.HAVING
    else:
        block.where.extend(terms)
        block.stage = Stage.WHERE


def too_heavy(block: Block, scalars: Sequence[Node]) -> bool:
    """Whether writing these over the block would repeat much text, or call a volatile function again."""
    used = [a for scalar in scalars for a in (node.attribute for node in walk(scalar) if isinstance(node, Ref))]
    for attribute in set(used):
        definition = block.definitions.get(attribute)
        if definition is None:
            continue
        if isinstance(definition, Node) and volatile(definition):
            return True
        if block.weights.get(attribute, 1) > HEAVY and used.count(attribute) > 1:
            return True
    return False


def _weight(block: Block, scalar: Node) -> int:
    total = 0
    for node in walk(scalar):
        total += block.weights.get(node.attribute, 1) if isinstance(node, Ref) else 1
    return total


def define(block: Block, attribute: Attribute, value: Scalar | Aggregate | WindowCall) -> None:
    """Makes an attribute mean a value in the block."""
    if value == Ref(attribute):
        return
    block.weights[attribute] = _weight(block, value)
    block.definitions[attribute] = value


def leaves(block: Block, scalars: Sequence[Node]) -> set[Attribute]:
    """The attributes that scalars read when the block's definitions are put in their place."""
    pending, seen, found = list(refs(*scalars)), set[Attribute](), set[Attribute]()
    while pending:
        attribute = pending.pop()
        if attribute in seen:
            continue
        seen.add(attribute)
        definition = block.definitions.get(attribute)
        if definition is None or isinstance(definition, (Aggregate, WindowCall, SubqueryTerm)):
            found.add(attribute)
        else:
            pending.extend(refs(definition))
    return found


def meaning_of(block: Block, attribute: Attribute) -> Definition | None:
    """What an attribute stands for in a block, mere names seen through."""
    definition = block.definitions.get(attribute)
    while isinstance(definition, Ref):
        definition = block.definitions.get(definition.attribute)
    return definition


def reads_aggregates(block: Block) -> bool:
    """Whether a column of the block is computed from an aggregate."""
    return reads_any(block, [Ref(a) for a in block.columns], (Aggregate,))


def reads_terms(block: Block | None, condition: Node) -> bool:
    """Whether a condition reads a subquery's value through the block's definitions."""
    return block is not None and reads_any(block, [condition])


def reads_any(block: Block, scalars: Sequence[Node], kinds: tuple[type, ...] = (SubqueryTerm,)) -> bool:
    """Whether a scalar reads a subquery's value (or another kind) through the block's definitions."""
    pending = list(refs(*scalars))
    seen: set[Attribute] = set()
    while pending:
        attribute = pending.pop()
        if attribute in seen:
            continue
        seen.add(attribute)
        definition = block.definitions.get(attribute)
        if isinstance(definition, kinds):
            return True
        if definition is not None and not isinstance(definition, SubqueryTerm):
            pending.extend(refs(definition))
    return False
