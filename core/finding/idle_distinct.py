"""Duplicates removed where there are none."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.operators import Distinct, SetOperation
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if isinstance(operator, Distinct):
            offer, _ = view.mend(operator, "drop-distinct")
            what = "distinct over rows that have a key"
        elif isinstance(operator, SetOperation):
            offer, _ = view.mend(operator, "union-to-union-all")
            what = "UNION over inputs that share no row and have no duplicates"
        else:
            continue
        if offer is None or view.rows(operator) < 100:
            continue
        sentence = f"{what}: {rows_text(view.rows(operator))} rows are compared with each other for nothing"
        yield Finding(
            "no duplicates to remove", operator, sentence, view.rows(operator), view.evidence(operator), offer
        )
