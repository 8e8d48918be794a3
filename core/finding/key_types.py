"""Key types that differ: one side of a join key is converted for every row before it can be compared."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import attributes
from core.algebra.notation import scalar_text
from core.algebra.operators import Join
from core.algebra.scalars import Cast, Comparison, ComparisonOperator, Ref, conjuncts, refs
from core.algebra.types import comparable
from core.algebra.typing import type_of
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Join):
            continue
        left, right = set(attributes(operator.left)), set(attributes(operator.right))
        for term in conjuncts(operator.condition):
            if not isinstance(term, Comparison) or term.operator is not ComparisonOperator.EQUAL:
                continue
            if not (refs(term) & left and refs(term) & right):
                continue
            bare = [s.term if isinstance(s, Cast) else s for s in (term.left, term.right)]
            converted = any(isinstance(s, Cast) for s in (term.left, term.right))
            mixed = not comparable(type_of(bare[0]), type_of(bare[1]))
            rows = view.rows(operator.left) + view.rows(operator.right)
            if not all(isinstance(s, Ref) for s in bare) or not mixed or rows < 1000:
                continue
            types = " with ".join(f"{scalar_text(s)} ({type_of(s)})" for s in bare)
            how = "by a cast for every row" if converted else "by an implicit cast for every row"
            sentence = (
                f"the join compares {types} {how}: neither statistics nor an index of the key help, "
                f"over {rows_text(rows)} rows"
            )
            yield Finding(
                "key types that differ",
                operator,
                sentence,
                rows,
                view.evidence(operator.left, operator.right),
                None,
                "store the key in one type on both sides",
            )
