"""Fan-out join: rows meet several partners and come out several times."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.notation import is_product
from core.algebra.operators import Join, JoinKind
from core.finding.model import Finding, View, condition_of, key_sides
from core.size.numbers import rows_text

LEAST_FACTOR = 2.0


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if (
            not isinstance(operator, Join)
            or operator.kind not in (JoinKind.INNER, JoinKind.LEFT)
            or is_product(operator)
        ):
            continue
        if any(key_sides(operator, view.facts)):
            continue
        left, right, out = view.rows(operator.left), view.rows(operator.right), view.rows(operator)
        if left < 1 or out < LEAST_FACTOR * max(left, min(left, right)) or out < 1000:
            continue
        offer, why_not = view.mend(operator, "join-to-semi-join")
        sentence = (
            f"each of {rows_text(left)} rows meets {out / left:.1f} rows on {condition_of(operator)}, which is a key of neither "
            f"side: {rows_text(out)} rows come out"
        )
        evidence = view.evidence(operator, operator.left)
        yield Finding("fan-out join", operator, sentence, out, evidence, offer, why_not)
