"""A graph fitted to the engine it is written for: what the engine lacks is said in other words, or refused.

sqlglot prints every node in every dialect, but some only by dropping what the dialect has no word for. Where that would
change the meaning, the graph is changed first, by equivalences of the algebra.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from core.algebra.functions import NULL_ON_EMPTY, ORDER_SENSITIVE
from core.algebra.graph import attributes, inputs, postorder, with_inputs, with_scalars
from core.algebra.operators import (
    Column,
    Group,
    Join,
    JoinKind,
    Operator,
    Project,
    SetKind,
    SetOperation,
    Values,
    Window,
    WindowColumn,
)
from core.algebra.scalars import (
    FALSE,
    NULL_LITERAL,
    Aggregate,
    Attribute,
    Call,
    Case,
    Cast,
    Comparison,
    ComparisonOperator,
    IsTruth,
    Literal,
    Node,
    Not,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    equal,
    fresh,
    fresh_like,
    refs,
    renamed,
    transform,
)
from core.algebra.types import BIGINT, BOOLEAN, INTEGER

NO_TRUTH_TEST = frozenset({"snowflake", "trino", "presto", "athena"})
"""Engines without `IS TRUE`; their truth values are values, so that coalesce tells."""

NO_TRUTH_VALUES = frozenset({"tsql", "oracle"})
"""Engines in which a condition is no value."""

NO_FILTER = frozenset({"mysql", "tsql", "snowflake", "bigquery", "oracle", "redshift"})
"""Engines without FILTER in aggregates."""

NO_LENIENT_CAST = frozenset({"postgres", "redshift", "mysql", "sqlite"})
NO_COLUMN_ALIASES = frozenset({"sqlite"})
"""Engines in which the columns of VALUES cannot be named."""

NO_FULL_JOIN = frozenset({"mysql"})
NO_GROUPING_SETS = frozenset({"mysql", "sqlite"})

NO_BAG_DIFFERENCE = frozenset({"bigquery", "tsql", "snowflake", "sqlite", "oracle", "redshift"})
"""Engines without INTERSECT ALL and EXCEPT ALL."""


class WriteError(ValueError):
    """An operator that the asked language cannot express."""


@dataclass(frozen=True, slots=True)
class Fitted:
    root: Operator
    names: Mapping[Operator, str]
    aliases: Mapping[Operator, str]


def fitted(root: Operator, names: Mapping[Operator, str], aliases: Mapping[Operator, str], dialect: str) -> Fitted:
    """The graph as the dialect can say it; what it already can say stays the same object."""
    became: dict[Operator, Operator] = {}
    for operator in postorder(root):
        moved = with_inputs(operator, tuple(became[below] for below in inputs(operator)))
        became[operator] = _fit(moved, dialect)
    return Fitted(
        became[root],
        {became[old]: name for old, name in names.items() if old in became},
        {became[old]: name for old, name in aliases.items() if old in became},
    )


def _fit(operator: Operator, dialect: str) -> Operator:
    match operator:
        case Join(kind=JoinKind.FULL) if dialect in NO_FULL_JOIN:
            return _without_full(operator)
        case Group(sets=sets) if sets is not None and dialect in NO_GROUPING_SETS:
            raise WriteError(f"{dialect} has no grouping sets")
        case SetOperation(kind=SetKind.INTERSECT | SetKind.EXCEPT, distinct=False) if dialect in NO_BAG_DIFFERENCE:
            return _numbered(operator, dialect)
        case Values(attributes=own, rows=rows) if own and rows and dialect in NO_COLUMN_ALIASES:
            return _row_by_row(operator)
        case Join() if _is_membership(operator):
            return operator
    return with_scalars(operator, lambda node: transform(node, lambda part: _fit_scalar(part, dialect)))


def _fit_scalar(node: Node, dialect: str) -> Node:
    match node:
        case IsTruth(term=term, value=value):
            asked = term if value else Not(term)
            if dialect in NO_TRUTH_TEST:
                return Call("coalesce", (asked, FALSE), BOOLEAN)
            if dialect in NO_TRUTH_VALUES:
                one, zero = Literal("1", INTEGER), Literal("0", INTEGER)
                return equal(Case(((asked, one),), zero), one)
        case Aggregate(condition=Node()) if dialect in NO_FILTER:
            return _unfiltered(node, dialect)
        case Cast(lenient=True) if dialect in NO_LENIENT_CAST:
            raise WriteError(f"{dialect} has no cast that gives NULL where a value does not convert")
    return node


_IGNORING_NULLS = frozenset({"count", "string_agg", "group_concat"}) | (NULL_ON_EMPTY - ORDER_SENSITIVE)


def _unfiltered(call: Aggregate, dialect: str) -> Aggregate:
    """`f(x) filter (where p)` as `f(case when p then x end)`, for functions that ignore NULLs."""
    assert call.condition is not None
    if call.name not in _IGNORING_NULLS or (call.arguments and call.distinct and len(call.arguments) > 1):
        raise WriteError(f"{dialect} has no FILTER, and {call.name} cannot be said without it")
    first: Scalar = call.arguments[0] if call.arguments else Literal("1", INTEGER)
    kept = Case(((call.condition, first),), NULL_LITERAL)
    return replace(call, arguments=(kept, *call.arguments[1:]), condition=None)


def _is_membership(join: Join) -> bool:
    """An anti-join that is written NOT IN, whatever the engine's truth tests."""
    match join:
        case Join(
            kind=JoinKind.ANTI,
            condition=Not(term=IsTruth(term=Comparison(ComparisonOperator.EQUAL, left, right), value=False)),
        ):
            own = set(attributes(join.right))
            outer, inner = (right, left) if refs(left) & own else (left, right)
            return isinstance(inner, Ref) and inner.attribute in own and not refs(outer) & own
    return False


def _without_full(join: Join) -> Operator:
    """A full join as the left join and, beside it, the right rows without a partner."""
    own = attributes(join)
    with_left, first = _again(join)
    second, other = _again(join)
    padded = Join(JoinKind.LEFT, with_left.left, with_left.right, renamed(join.condition, first))
    alone = Join(JoinKind.ANTI, second.right, second.left, renamed(join.condition, other))
    left = set(attributes(join.left))
    missing = {a: fresh_like(a) if a in left else other[a] for a in own}
    columns = tuple(
        Column(missing[a], Cast(Literal(None, a.type), a.type) if a in left else Ref(other[a])) for a in own
    )
    sources = (tuple(first[a] for a in own), tuple(missing[a] for a in own))
    return SetOperation(SetKind.UNION, (padded, Project(alone, columns)), sources, own, False)


def _again(join: Join) -> tuple[Join, dict[Attribute, Attribute]]:
    """The join over renamings of its inputs, and what became of each attribute."""
    mapping = {a: fresh_like(a) for a in attributes(join)}
    left, right = (
        Project(part, tuple(Column(mapping[a], Ref(a)) for a in attributes(part))) for part in (join.left, join.right)
    )
    return replace(join, left=left, right=right), mapping


def _row_by_row(operator: Values) -> Operator:
    """Rows as a union of single rows whose columns have names."""
    parts: list[Operator] = []
    sources = []
    for row in operator.rows:
        own = tuple(fresh_like(a) for a in operator.attributes)
        parts.append(Project(Values((), ((),)), tuple(Column(a, v) for a, v in zip(own, row, strict=True))))
        sources.append(own)
    if len(parts) == 1:
        columns = tuple(Column(a, v) for a, v in zip(operator.attributes, operator.rows[0], strict=True))
        return Project(Values((), ((),)), columns)
    return SetOperation(SetKind.UNION, tuple(parts), tuple(sources), operator.attributes, False)


def _numbered(operator: SetOperation, dialect: str) -> Operator:
    """A bag difference or intersection as one of sets, the copies of each row told apart by a number."""
    parts: list[Operator] = []
    sources = []
    for part, source in zip(operator.inputs, operator.sources, strict=True):
        own = tuple(fresh_like(a) for a in source)
        shown = Project(part, tuple(Column(new, Ref(old)) for new, old in zip(own, source, strict=True)))
        copy = fresh("copy", BIGINT)
        # T-SQL numbers no rows without an order, though here they are all the same.
        order = (SortKey(Ref(own[0])),) if dialect == "tsql" else ()
        call = WindowCall(Aggregate("row_number", (), BIGINT), tuple(Ref(a) for a in own), order)
        parts.append(Window(shown, (WindowColumn(copy, call),)))
        sources.append((*own, copy))
    numbered = (*operator.attributes, fresh("copy", BIGINT))
    sets = SetOperation(operator.kind, tuple(parts), tuple(sources), numbered, True)
    return Project(sets, tuple(Column(a, Ref(a)) for a in operator.attributes))
