"""Predicate applied late: rows are grouped, compared or computed first and dropped afterwards."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.operators import Distinct, Group, Select, SetOperation, Window
from core.size.numbers import rows_text
from core.finding.model import Finding, View

_RULES = (
    "push-selection-below-grouping",
    "push-selection-below-window",
    "push-selection-below-distinct-or-sort",
    "push-selection-below-set-operation",
)


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Select) or not isinstance(operator.input, (Group, Distinct, Window, SetOperation)):
            continue
        before, after = view.rows(operator.input), view.rows(operator)
        offer, _ = view.mend(operator, *_RULES)
        if offer is None or before < 1.5 * max(after, 1):
            continue
        below = operator.input.inputs if isinstance(operator.input, SetOperation) else (operator.input.input,)
        work = sum(view.rows(part) for part in below)
        sentence = (
            f"{rows_text(before - after)} of {rows_text(before)} rows are dropped only after {rows_text(work)} rows have been worked on"
        )
        yield Finding("predicate applied late", operator, sentence, work, view.evidence(operator.input), offer)
