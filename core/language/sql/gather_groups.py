"""Grouping and nesting taken into SELECT blocks."""

from __future__ import annotations

import itertools

from core.algebra.graph import attributes
from core.algebra.operators import (
    AggregateColumn,
    Fixpoint,
    Group,
    Nest,
    Operator,
    Project,
    SetOperation,
)
from core.algebra.scalars import (
    Aggregate,
    Attribute,
    Cast,
    Comparison,
    ComparisonOperator,
    Literal,
    Ref,
    fresh,
    fresh_like,
    refs,
    renamed,
)
from core.algebra.types import BIGINT
from core.language.sql.blocks import (
    Block,
    Query,
    Stage,
    SubqueryTerm,
    derived,
)
from core.language.sql.building import (
    NESTING_DIALECTS,
    Gathering,
    add_condition,
    define,
    leaves,
    meaning_of,
    opened,
    reads_any,
    too_heavy,
    unique_names,
)
from core.language.sql.write_dialect import WriteError
from core.language.sql.write_scalars import list_of_rows


def group(operator: Group, below: Query) -> Block:
    """The block with GROUP BY, its keys and aggregates in place of its columns."""
    block = opened(below, Stage.WHERE)
    used = [column.aggregate for column in operator.aggregates]
    terms = any(isinstance(meaning_of(block, key), SubqueryTerm) for key in operator.keys)
    constant = any(key in block.definitions and not leaves(block, [Ref(key)]) for key in operator.keys)
    if (
        terms
        or constant
        or _entangled(block, operator)
        or too_heavy(block, [*used, *(Ref(key) for key in operator.keys)])
        or reads_any(block, used)
    ):
        block = derived(block)
    block, used = _with_own_arguments(block, used, operator.keys)
    for column, aggregate in zip(operator.aggregates, used, strict=True):
        define(block, column.attribute, aggregate)
    kept = set(operator.keys if operator.sets is None else itertools.chain.from_iterable(operator.sets))
    block.keys = tuple(key for key in operator.keys if key in kept)
    block.sets = operator.sets
    block.columns = tuple(a for a in attributes(operator) if a not in operator.keys or a in kept)
    block.stage = Stage.GROUP
    if len(kept) < len(operator.keys):
        # A key that is in no grouping set is NULL in every row.
        block = derived(block)
        for key in operator.keys:
            if key not in kept:
                block.definitions[key] = Cast(Literal(None, key.type), key.type)
        block.columns = attributes(operator)
    return block


def _entangled(block: Block, operator: Group) -> bool:
    """Whether keys of grouping sets are computed from the same columns: engines tell them apart by their text."""
    if operator.sets is None or not any(key in block.definitions for key in operator.keys):
        return False
    read = [leaves(block, [Ref(key)]) for key in operator.keys]
    return sum(map(len, read)) > len(set[Attribute]().union(*read))


def _with_own_arguments(
    block: Block, used: list[Aggregate], keys: tuple[Attribute, ...]
) -> tuple[Block, list[Aggregate]]:
    """A block whose aggregates and keys read no row around it.

    SQL takes an aggregate over outer columns alone as one of the outer query (ISO/IEC 9075-2), so such values are
    computed in a derived table first.
    """
    own = {a for item in block.items for a in Block([item]).hidden()}
    outer = leaves(block, [*used, *(Ref(key) for key in keys)]).difference(own)
    if not outer:
        return block, used
    direct = sorted(refs(*used).difference(own, block.definitions))
    inside = {attribute: fresh_like(attribute) for attribute in direct}
    block.definitions.update({new: Ref(old) for old, new in inside.items()})
    block.columns = (*block.columns, *inside.values())
    return derived(block), [renamed(aggregate, inside) for aggregate in used]


def nest(operator: Nest, below: Query, gathering: Gathering) -> Block:
    """A list of rows for each group."""
    if gathering.dialect not in NESTING_DIALECTS:
        raise WriteError(f"a nested relation has no form in {gathering.dialect}")
    names = gathering.fields[operator.into]
    gathered = Aggregate(
        "array_agg", tuple(Ref(a) for a in operator.nested), operator.into.type, form=list_of_rows(names)
    )
    block = group(Group(operator.input, operator.keys, (AggregateColumn(operator.into, gathered),)), below)
    if not operator.keys:
        # Without keys SQL makes a group of no rows; nesting makes none.
        rows = fresh("rows", BIGINT)
        block.definitions[rows] = Aggregate("count", (), BIGINT)
        add_condition(block, [Comparison(ComparisonOperator.GREATER, Ref(rows), Literal("0", BIGINT))])
    return block


def note_fields(operator: Operator, gathering: Gathering) -> None:
    """Remembers what a nested relation's attributes are called, wherever it is handed on."""
    fields = gathering.fields
    match operator:
        case Nest(nested=nested, into=into):
            fields[into] = tuple(unique_names(nested).values())
        case Project(columns=columns):
            for column in columns:
                if isinstance(column.value, Ref) and column.value.attribute in fields:
                    fields[column.attribute] = fields[column.value.attribute]
        case SetOperation(sources=(first, *_), attributes=own) | Fixpoint(sources=(first, *_), attributes=own):
            fields.update({new: fields[old] for old, new in zip(first, own, strict=True) if old in fields})
        case _:
            pass
