"""Correlated rerun: a subquery that is evaluated once for each outer row."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import dependent, postorder
from core.algebra.operators import Join, JoinKind
from core.finding.model import Finding, View
from core.size.numbers import rows_text

_RULES = ("scalar-aggregate-to-join", "lift-correlation")


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Join) or not dependent(operator):
            continue
        runs = view.rows(operator.left)
        inside = sum(view.rows(part) for part in postorder(operator.right))
        if runs < 100:
            continue
        offer, why_not = view.mend(operator, *_RULES)
        if offer is not None and offer.rule.name == "lift-correlation" and operator.kind is not JoinKind.INNER:
            # EXISTS tied by a liftable condition is a semi-join as it stands: nobody runs it row by row.
            continue
        if offer is None and not why_not:
            why_not = "no rule here takes the dependence away"
        names = ", ".join(sorted(a.name for a in dependent(operator)))
        sentence = f"the subquery reads {names} of the outer row: it runs {rows_text(runs)} times over {rows_text(inside)} rows"
        yield Finding(
            "correlated rerun",
            operator,
            sentence,
            runs * max(1.0, inside),
            view.evidence(operator.left),
            offer,
            why_not,
        )
