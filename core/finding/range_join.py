"""Range join: the sides meet by inequalities only, so every pair has to be tried."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import attributes, dependent
from core.algebra.notation import scalar_text
from core.algebra.operators import Join, JoinKind
from core.algebra.scalars import Comparison, ComparisonOperator, conjuncts, refs
from core.finding.model import Finding, View
from core.size.guarantee import equalities
from core.size.numbers import rows_text

_RANGES = (ComparisonOperator.LESS, ComparisonOperator.AT_MOST, ComparisonOperator.GREATER, ComparisonOperator.AT_LEAST)
_LEAST_PAIRS = 100_000


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Join) or operator.kind is JoinKind.SINGLE or dependent(operator):
            continue
        left, right = set(attributes(operator.left)), set(attributes(operator.right))
        if equalities(operator.condition, left, right):
            continue
        ranges = [
            t
            for t in conjuncts(operator.condition)
            if isinstance(t, Comparison) and t.operator in _RANGES and refs(t) & left and refs(t) & right
        ]
        pairs = view.rows(operator.left) * view.rows(operator.right)
        if not ranges or pairs < _LEAST_PAIRS:
            continue
        sentence = (
            f"{' and '.join(scalar_text(t) for t in ranges[:2])}: no equality joins the sides, so "
            f"{rows_text(view.rows(operator.left))} × {rows_text(view.rows(operator.right))} pairs are tried"
        )
        yield Finding(
            "range join",
            operator,
            sentence,
            pairs,
            view.evidence(operator.left, operator.right),
            None,
            "an equality beside the range (a day, a bucket) would let rows be matched by key",
        )
