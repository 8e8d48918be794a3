"""Columns that a derived table of the writer's own making need not list, since nothing reads them."""

from __future__ import annotations

from dataclasses import replace

from core.algebra.functions import volatile
from core.algebra.operators import TableFunction, Unnest, Values
from core.algebra.scalars import Attribute, Node, refs
from core.language.sql.blocks import Block, Item, Nested, Query, SetQuery, SubqueryTerm


def slimmed(block: Block) -> None:
    """Takes from the block's unnamed derived tables the columns that the block does not read.

    A derived table that the text named is its author's: it keeps its columns. One with DISTINCT needs them all.
    """
    wide = [item for item in block.items if _may_shrink(item)]
    if not wide:
        return
    needed = _read(block)
    for item in wide:
        body = item.body
        assert isinstance(body, Block)
        kept = tuple(a for a in body.columns if a in needed or _called(body, a))
        if kept != body.columns:
            item.body = replace(body, columns=kept)


def _may_shrink(item: Item) -> bool:
    return isinstance(item.body, Block) and not item.alias and not item.body.distinct


def _called(block: Block, attribute: Attribute) -> bool:
    """Whether a column calls a function that counts as done even if nobody reads it."""
    definition = block.definitions.get(attribute)
    return isinstance(definition, Node) and volatile(definition)


def _read(block: Block) -> set[Attribute]:
    """Every attribute that is read in the block, in its subqueries and in its lateral items."""
    found: set[Attribute] = set()
    pending: list[tuple[Query, bool]] = [(block, True)]
    while pending:
        query, outermost = pending.pop()
        direct, inner = _direct(query, outermost)
        seen: set[Attribute] = set()
        while direct:
            attribute = direct.pop()
            if attribute in seen:
                continue
            seen.add(attribute)
            definition = query.definitions.get(attribute) if isinstance(query, Block) else None
            if isinstance(definition, SubqueryTerm):
                direct |= refs(definition.condition)
                inner.append(definition.query)
            elif definition is not None:
                direct |= refs(definition)
        found |= seen
        pending.extend((part, False) for part in inner)
    return found


def _direct(query: Query, outermost: bool) -> tuple[set[Attribute], list[Query]]:
    """What a query's clauses read, and the queries inside it that may read a row around them."""
    found = set(query.columns) | refs(*query.order)
    found |= refs(*(scalar for scalar in (query.count, query.offset) if scalar is not None))
    if isinstance(query, SetQuery):
        return found, list(query.inputs)
    inner: list[Query] = []
    for condition in (*query.where, *query.having, *query.qualify):
        if isinstance(condition, SubqueryTerm):
            found |= refs(condition.condition)
            inner.append(condition.query)
        else:
            found |= refs(condition)
    found.update(query.keys or (), *(query.sets or ()))
    items = list(query.items)
    while items:
        item = items.pop()
        found |= refs(item.on)
        match item.body:
            case Nested(items=several):
                items.extend(several)
            case Block() | SetQuery() as body:
                if item.lateral or not outermost:
                    inner.append(body)
            case Unnest(term=term):
                found |= refs(term)
            case TableFunction(call=call):
                found |= refs(call)
            case Values(rows=rows):
                found |= refs(*(value for row in rows for value in row))
            case _:
                pass
    return found, inner
