"""Outer join undone by a filter: the rows it pads with NULLs are dropped right above."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.operators import Join, JoinKind, Select
from core.finding.model import Finding, View


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Select) or not isinstance(operator.input, Join):
            continue
        join = operator.input
        if join.kind not in (JoinKind.LEFT, JoinKind.RIGHT, JoinKind.FULL):
            continue
        offer, _ = view.mend(operator, "simplify-outer-join")
        if offer is None:
            continue
        sentence = f"the condition above the {join.kind.value} join drops every row it pads with NULLs: it is {offer.what.split(':')[0].replace('a plain ', 'a ')}"
        yield Finding("outer join undone by a filter", operator, sentence, view.rows(join), view.evidence(join), offer)
