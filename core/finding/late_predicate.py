"""Predicate applied late: rows are grouped, compared or computed first and dropped afterwards."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import inputs
from core.algebra.operators import Distinct, Group, Operator, Project, Select, SetOperation, Window
from core.algebra.scalars import Ref, Scalar, conjuncts, refs, substitute
from core.finding.model import Finding, View
from core.size.numbers import rows_text

_DIRECT = (
    "push-selection-below-grouping",
    "push-selection-below-window",
    "push-selection-below-distinct-or-sort",
    "push-selection-below-set-operation",
)
_ON_THE_WAY = ("push-selection-below-projection", "merge-selections")
LEAST_FACTOR = 1.5


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Select):
            continue
        worker = _worker_below(operator)
        if worker is None or not _could_go_below(operator, worker):
            continue
        before, after = view.rows(operator.input), view.rows(operator)
        offer, _ = view.mend(operator, *(_DIRECT if worker is operator.input else _ON_THE_WAY))
        if offer is None or before < LEAST_FACTOR * max(after, 1):
            continue
        work = sum(view.rows(part) for part in inputs(worker))
        sentence = (
            f"{rows_text(before - after)} of {rows_text(before)} rows are dropped only after {rows_text(work)} rows "
            "have been worked on"
        )
        yield Finding("predicate applied late", operator, sentence, work, view.evidence(worker), offer)


def _worker_below(select: Select) -> Operator | None:
    """The grouping, distinct, window or set operation whose rows the selection sees, columns and conditions between."""
    below: Operator = select.input
    while isinstance(below, (Project, Select)):
        below = below.input
    return below if isinstance(below, (Group, Distinct, Window, SetOperation)) else None


def _could_go_below(select: Select, worker: Operator) -> bool:
    """Whether a term of the condition reads only what exists below the worker already."""
    terms: list[Scalar] = list(conjuncts(select.condition))
    below: Operator = select.input
    while below is not worker:
        if isinstance(below, Project):
            values = {c.attribute: c.value for c in below.columns}
            terms = [substitute(term, values) for term in terms]
        assert isinstance(below, (Project, Select))
        below = below.input
    if isinstance(worker, Group):
        return worker.sets is None and any(refs(term) and refs(term) <= set(worker.keys) for term in terms)
    if isinstance(worker, Window):
        shared = [{p.attribute for p in column.call.partition if isinstance(p, Ref)} for column in worker.columns]
        keys = set.intersection(*shared) if shared else set()
        return any(refs(term) and refs(term) <= keys for term in terms)
    return True
