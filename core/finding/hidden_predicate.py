"""Predicate hidden in a function: statistics, indexes and file footers cannot help with f(attribute) = constant."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.notation import scalar_text
from core.algebra.operators import Relation, Select
from core.algebra.scalars import Arithmetic, Call, Cast, Comparison, InList, Ref, Scalar, conjuncts, refs
from core.finding.model import Finding, View
from core.size.numbers import rows_text
from core.size.values import constant


def find(view: View) -> Iterator[Finding]:
    bases = {a for o in view.formulation.operators() if isinstance(o, Relation) for a in o.attributes}
    for operator in view.formulation.operators():
        if not isinstance(operator, Select):
            continue
        for term in conjuncts(operator.condition):
            hidden = _hidden(term)
            if hidden is None or not refs(hidden) <= bases or view.rows(operator.input) < 1000:
                continue
            names = ", ".join(sorted(a.name for a in refs(hidden)))
            sentence = (
                f"{scalar_text(term)} hides {names} in a function: all {rows_text(view.rows(operator.input))} rows must be read "
                "and computed, and no statistics say how many remain"
            )
            yield Finding(
                "predicate hidden in a function",
                operator,
                sentence,
                view.rows(operator.input),
                view.evidence(operator.input),
                None,
                f"write a range of {names} instead, where the function allows it",
            )


def _hidden(term: Scalar) -> Scalar | None:
    """The computed side of a comparison with a constant."""
    if isinstance(term, InList) and isinstance(term.term, (Call, Cast)) and refs(term.term):
        return term.term
    if not isinstance(term, Comparison):
        return None
    for side, other in ((term.left, term.right), (term.right, term.left)):
        if isinstance(side, (Call, Cast, Arithmetic)) and refs(side) and constant(other) is not None:
            inner = (
                side.arguments
                if isinstance(side, Call)
                else (side.term,)
                if isinstance(side, Cast)
                else (side.left, side.right)
            )
            if any(isinstance(part, Ref) for part in inner) and len(refs(side)) == 1:
                return side
    return None
