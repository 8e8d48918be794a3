"""Derived facts held against rows: every operator of a query is run, each claim checked on its rows."""

from __future__ import annotations

import random
from collections.abc import Iterable, Iterator, Sequence
from typing import Any

from core.algebra.formulation import Formulation
from core.algebra.graph import attributes, free, inputs, postorder, replaced, with_inputs, with_scalars
from core.algebra.operators import Fixpoint, Nest, Operator, Recurrence
from core.algebra.scalars import Attribute, Literal, Node, Scalar, substitute
from core.algebra.types import NUMERIC, Family
from core.catalog.model import Catalog
from core.derive.facts import Facts, Properties
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.language.sql.write import WriteError, write_query

Row = tuple[Any, ...]


def broken(formulation: Formulation, catalog: Catalog, engine: DuckEngine, rng: random.Random) -> list[str]:
    """What the facts of a query's operators claim and its rows deny; empty where all is true."""
    facts = Facts(catalog)
    found = []
    for operator in formulation.operators():
        for rows in runs(operator, engine, rng):
            for claim in denied(facts.of(operator), attributes(operator), rows):
                found.append(f"{claim}\n{write_query_or_name(operator)}\n{rows}")
    return found


def write_query_or_name(operator: Operator) -> str:
    try:
        return write_query(operator)
    except WriteError as error:
        return f"{type(operator).__name__}: {error}"


def runs(operator: Operator, engine: DuckEngine, rng: random.Random, outer_rows: int = 3) -> Iterator[list[Row]]:
    """The rows of an operator; of a correlated one, those for a few outer rows. None where it cannot run alone."""
    if unfinished(operator) or any(isinstance(part, Nest) for part in postorder(operator)):
        return
    outer = sorted(free(operator))
    bound = [operator] if not outer else [with_outer(operator, drawn(outer, rng)) for _ in range(outer_rows)]
    for part in bound:
        if part is None:
            continue
        try:
            yield engine.run(write_query(part)).rows
        except (EngineError, WriteError):
            continue


def unfinished(operator: Operator) -> bool:
    """Whether the operator stands inside a fixpoint's step, so that its rows are those of a round."""
    parts = postorder(operator)
    closed = {part.key for part in parts if isinstance(part, Fixpoint)}
    return any(isinstance(part, Recurrence) and part.key not in closed for part in parts)


def drawn(outer: Iterable[Attribute], rng: random.Random) -> dict[Attribute, Scalar]:
    """Values for the outer attributes of a correlated part, NULLs among them."""
    values: dict[Attribute, Scalar] = {}
    for attribute in outer:
        text: str | None = None
        if rng.random() > 0.2:
            if attribute.type.family is Family.BOOLEAN:
                text = rng.choice(["true", "false"])
            elif attribute.type.family is Family.TEXT:
                text = rng.choice(["x", "y", "xy", ""])
            elif attribute.type.family in NUMERIC:
                text = str(rng.randint(0, 3))
        values[attribute] = Literal(text, attribute.type)
    return values


def with_outer(operator: Operator, values: dict[Attribute, Scalar]) -> Operator | None:
    """The correlated part for one outer row; None where an outer attribute is used as more than a scalar."""
    became: dict[Operator, Operator] = {}

    def change(node: Node) -> Node:
        return substitute(node, values)

    for part in postorder(operator):
        became[part] = with_scalars(with_inputs(part, tuple(became[below] for below in inputs(part))), change)
    bound = replaced(became[operator], {})
    return None if free(bound) else bound


def denied(claims: Properties, schema: Sequence[Attribute], rows: Sequence[Row]) -> Iterator[str]:
    """The claims that these rows break."""
    place = {a: i for i, a in enumerate(schema)}

    def values(row: Row, wanted: Iterable[Attribute]) -> Row:
        return tuple(row[place[a]] for a in sorted(wanted))

    for key in claims.keys:
        if key <= place.keys():
            seen = [values(row, key) for row in rows]
            if len(set(seen)) < len(seen):
                yield f"key {sorted(key)} repeats"
        else:
            yield f"key {sorted(key)} is outside the schema"
    for attribute in claims.never_null & place.keys():
        if any(row[place[attribute]] is None for row in rows):
            yield f"{attribute!r} is NULL"
    for attribute in claims.constants & place.keys():
        if len({row[place[attribute]] for row in rows}) > 1:
            yield f"{attribute!r} is not constant"
    for group in claims.same:
        known = group & place.keys()
        if any(len(set(values(row, known))) > 1 for row in rows if known):
            yield f"{sorted(known)} differ"
    for left, right in claims.dependencies:
        right = right & place.keys()
        if not left <= place.keys() or not right:
            continue
        images: dict[Row, Row] = {}
        for row in rows:
            if images.setdefault(values(row, left), values(row, right)) != values(row, right):
                yield f"{sorted(left)} does not determine {sorted(right)}"
                break
    if claims.exactly_one and len(rows) != 1:
        yield f"{len(rows)} rows, not exactly one"
