"""The same work done twice: two parts of a formulation that give the same rows."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import postorder
from core.algebra.operators import Operator, Relation, Values
from core.compare.parts import kept_key
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    seen: dict[str, Operator] = {}
    inside: set[Operator] = set()
    for operator in reversed(view.formulation.operators()):
        if operator in inside or isinstance(operator, (Relation, Values)) or len(postorder(operator)) < 3:
            continue
        key = kept_key(operator)
        if key is None:
            continue
        first = seen.setdefault(key, operator)
        if first is operator or operator in postorder(first):
            continue
        inside.update(postorder(operator))
        work = sum(view.rows(part) for part in postorder(operator))
        if work < 1000:
            continue
        sentence = f"this part gives the same rows as another one: {rows_text(work)} rows are worked on twice"
        yield Finding(
            "the same work done twice",
            operator,
            sentence,
            work,
            view.evidence(operator),
            None,
            "write it once as a step (WITH ...) and use it twice",
        )
