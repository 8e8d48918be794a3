"""Count of what may be NULL: count(x) leaves those rows out, which may not be what was meant."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.notation import scalar_text
from core.algebra.operators import Group
from core.algebra.scalars import Ref
from core.derive.lineage import base_of
from core.derive.reject import can_be_null
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    bases = {a: origin for root in view.formulation.roots() for a, origin in base_of(root).items()}
    for operator in view.formulation.operators():
        if not isinstance(operator, Group):
            continue
        sure = view.facts.never_null(operator.input)
        for column in operator.aggregates:
            call = column.aggregate
            if (
                call.name != "count"
                or call.distinct
                or len(call.arguments) != 1
                or not isinstance(call.arguments[0], Ref)
            ):
                continue
            origin = bases.get(call.arguments[0].attribute)
            if origin is None or not can_be_null(call.arguments[0], sure):
                continue
            facts = view.facts.catalog.relation(origin[0].name)
            known = None if facts is None else facts.attribute(origin[1].name)
            nulls = known.statistics.nulls if known is not None and known.statistics is not None else None
            if facts is None or not facts.rows or not nulls:
                continue
            share = nulls / facts.rows
            sentence = f"{scalar_text(call)} leaves out rows without {origin[1].name}: {share:.0%} of {facts.name} ({rows_text(nulls)} rows)"
            yield Finding(
                "count of what may be null",
                operator,
                sentence,
                float(nulls),
                view.evidence(operator.input),
                None,
                "count(*) counts every row, if that is what is meant",
            )
