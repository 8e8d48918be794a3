"""Subqueries become joins: a condition of WHERE a semi- or anti-join, a truth value a mark join, a value a single join.

A correlated subquery's plan reads attributes of the plan it is joined to; the join is then dependent.
"""

from __future__ import annotations

from typing import cast

from sqlglot import exp

from core.algebra.operators import Join, JoinKind, Operator, Project, Values
from core.algebra.scalars import (
    NEGATED,
    TRUE,
    Comparison,
    ComparisonOperator,
    IsTruth,
    Not,
    Ref,
    Scalar,
    conjunction,
)
from core.language.sql import expressions
from core.language.sql.reading import Block, truth_mark
from core.language.sql.scope import Result


def in_query(node: exp.In) -> exp.Expression | None:
    """The query of `x IN (query)`; None for a list of values."""
    query = node.args.get("query")
    if query is None and len(node.expressions) == 1 and isinstance(node.expressions[0], (exp.Query, exp.Values)):
        query = node.expressions[0]
    return query


def has_subquery(node: exp.Expression) -> bool:
    return any(True for _ in node.find_all(exp.Query, exp.Values))


def _read(query: exp.Expression, block: Block) -> Result:
    return block.reading.read_query(query, block.environment, block)


def _without_columns(plan: Operator) -> Operator:
    """For EXISTS the columns do not matter, so a projection on top says nothing."""
    while isinstance(plan, Project):
        plan = plan.input
    return plan


def attach(block: Block, kind: JoinKind, right: Operator, condition: Scalar, node: exp.Expression) -> Join:
    """Joins a subquery's plan to the block's."""
    join = Join(kind, block.plan, right, condition, truth_mark(kind))
    block.reading.mark(join, node)
    block.plan = join
    return join


def filter_by(term: exp.Expression, block: Block) -> bool:
    """Applies a condition of WHERE that is a bare (negated) EXISTS, IN or quantified comparison; else says False."""
    inner, positive = term, True
    while isinstance(inner, (exp.Paren, exp.Not)):
        positive = positive != isinstance(inner, exp.Not)
        inner = inner.this
    kind = JoinKind.SEMI if positive else JoinKind.ANTI
    if isinstance(inner, exp.Exists):
        attach(block, kind, _without_columns(_read(inner.this, block).plan), TRUE, term)
        return True
    if isinstance(inner, exp.In) and in_query(inner) is not None:
        condition, result = _membership(inner, block)
        attach(block, kind, result.plan, condition if positive else Not(IsTruth(condition, False)), term)
        return True
    if isinstance(inner, exp.Binary) and positive and type(inner) in expressions._COMPARISONS:
        quantifier = inner.args["expression"]
        if isinstance(quantifier, (exp.Any, exp.All)) and _query_of(quantifier) is not None:
            comparison, result = _quantified(expressions._COMPARISONS[type(inner)], inner.this, quantifier, block)
            if isinstance(quantifier, exp.Any):
                attach(block, JoinKind.SEMI, result.plan, comparison, term)
            else:
                attach(block, JoinKind.ANTI, result.plan, Not(IsTruth(comparison, True)), term)
            return True
    return False


def _membership(node: exp.In, block: Block) -> tuple[Scalar, Result]:
    terms = node.this.expressions if isinstance(node.this, exp.Tuple) else [node.this]
    left = [expressions.read_scalar(term, block) for term in terms]
    query = in_query(node)
    assert query is not None
    result = _read(query, block)
    if len(result.columns) != len(left):
        raise block.reading.refuse(
            f"{len(left)} value{'s' if len(left) > 1 else ''} cannot be in a query of {len(result.columns)} columns",
            node,
        )
    equal = ComparisonOperator.EQUAL
    pairs = zip(left, result.columns, strict=True)
    return conjunction(expressions.compare(equal, value, Ref(column)) for value, (column, _) in pairs), result


def mark_in(node: exp.In, block: Block) -> Scalar:
    condition, result = _membership(node, block)
    return _mark(attach(block, JoinKind.MARK, result.plan, condition, node))


def mark_exists(node: exp.Expression, block: Block) -> Scalar:
    plan = _without_columns(_read(node.this, block).plan)
    return _mark(attach(block, JoinKind.MARK, plan, TRUE, node))


def _mark(join: Join) -> Scalar:
    assert join.mark is not None
    return Ref(join.mark)


def _query_of(quantifier: exp.Expression) -> exp.Expression | None:
    inner = quantifier.this
    while isinstance(inner, exp.Paren):
        inner = inner.this
    return cast(exp.Expression, inner) if isinstance(inner, (exp.Query, exp.Values)) else None


def _quantified(
    operator: ComparisonOperator, left: exp.Expression, quantifier: exp.Expression, block: Block
) -> tuple[Comparison, Result]:
    value = expressions.read_scalar(left, block)
    query = _query_of(quantifier)
    assert query is not None
    result = _read(query, block)
    if len(result.columns) != 1:
        raise block.reading.refuse(f"one value compared with a query of {len(result.columns)} columns", quantifier)
    return expressions.compare(operator, value, Ref(result.columns[0][0])), result


def quantified(operator: ComparisonOperator, left: exp.Expression, right: exp.Expression, block: Block) -> Scalar:
    """`x op ANY (query)` as a truth value; `x op ALL (query)` is `not (x negated-op ANY (query))`."""
    if _query_of(right) is None:
        raise block.reading.refuse("ANY and ALL over an array", right)
    every = isinstance(right, exp.All)
    comparison, result = _quantified(NEGATED[operator] if every else operator, left, right, block)
    mark = _mark(attach(block, JoinKind.MARK, result.plan, comparison, right))
    return Not(mark) if every else mark


def scalar_value(node: exp.Expression, block: Block) -> Scalar:
    """A subquery in place of a value: at most one row, NULL where there is none."""
    result = _read(node, block)
    if len(result.columns) != 1:
        raise block.reading.refuse(f"a subquery of {len(result.columns)} columns stands for one value", node)
    attribute = result.columns[0][0]
    plan = result.plan
    constant = _constant(plan)
    if constant is not None:
        return constant
    attach(block, JoinKind.SINGLE, plan, TRUE, node)
    return Ref(attribute)


def _constant(plan: Operator) -> Scalar | None:
    """The value of `(SELECT 1)`: a projection of one row that reads nothing."""
    if isinstance(plan, Project) and isinstance(plan.input, Values) and len(plan.input.rows) == 1:
        return plan.columns[0].value if len(plan.columns) == 1 else None
    return None
