"""Duplicates made by a join and removed again above it."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.functions import duplicate_insensitive
from core.algebra.operators import Distinct, Group, Join, JoinKind, Operator, Project, Select
from core.finding.model import Finding, View, key_sides
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if isinstance(operator, Distinct):
            what = "distinct removes"
        elif (
            isinstance(operator, Group)
            and operator.aggregates
            and all(duplicate_insensitive(c.aggregate) for c in operator.aggregates)
        ):
            what = "the grouping counts each value once, which undoes"
        else:
            continue
        join = _fan_out_below(operator.input, view)
        if join is None:
            continue
        offer, why_not = view.mend(join, "join-to-semi-join")
        made = view.rows(operator.input)
        sentence = (
            f"{what} what the joins below create: {rows_text(made)} rows in, {rows_text(view.rows(operator))} out"
        )
        if offer is not None:
            sentence += "; a semi-join gives the same answer"
        yield Finding(
            "duplicates made and then removed", operator, sentence, made, view.evidence(operator.input), offer, why_not
        )


def _fan_out_below(operator: Operator, view: View) -> Join | None:
    while isinstance(operator, (Select, Project)):
        operator = operator.input
    if not isinstance(operator, Join) or operator.kind is not JoinKind.INNER or any(key_sides(operator, view.facts)):
        return None
    return operator if view.rows(operator) >= 2 * view.rows(operator.left) >= 2 else None
