"""Null trap: NOT IN over a column that may be NULL gives nothing as soon as one NULL is there."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import attributes
from core.algebra.operators import Join, JoinKind
from core.algebra.scalars import IsTruth, Not, refs
from core.finding.model import Finding, View


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Join) or operator.kind is not JoinKind.ANTI:
            continue
        match operator.condition:
            case Not(term=IsTruth(term=inner, value=False)):
                pass
            case _:
                continue
        loose = sorted(
            a.name for a in refs(inner) & set(attributes(operator.right)) - view.facts.never_null(operator.right)
        )
        if not loose:
            continue
        offer, why_not = view.mend(operator, "not-in-to-not-exists")
        sentence = f"NOT IN: a single NULL in {', '.join(loose)} empties the answer; NOT EXISTS would keep the rows"
        yield Finding(
            "null trap", operator, sentence, view.rows(operator.left), view.evidence(operator.left), offer, why_not
        )
