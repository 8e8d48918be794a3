"""Product by accident: no condition anywhere joins two inputs."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import attributes, dependent
from core.algebra.notation import is_product
from core.algebra.operators import Join, JoinKind, Operator, Select
from core.algebra.scalars import conjuncts, refs
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Join) or not is_product(operator) or dependent(operator):
            continue
        left, right = view.rows(operator.left), view.rows(operator.right)
        if min(left, right) <= 1 or _joined_above(operator, view):
            continue
        sentence = f"no condition joins the two inputs: {rows_text(left)} × {rows_text(right)} rows"
        yield Finding(
            "product by accident",
            operator,
            sentence,
            view.rows(operator),
            view.evidence(operator),
            None,
            "a condition is missing: only the author knows which",
        )


def _joined_above(product: Join, view: View) -> bool:
    """Whether conditions above link the two sides, directly or by way of other inputs of the same block."""
    left, right = set(attributes(product.left)), set(attributes(product.right))
    links: list[set[object]] = []
    pending: list[Operator] = [product]
    while pending:
        current = pending.pop()
        for reader in view.context.readers[current]:
            if isinstance(reader, Select) or (isinstance(reader, Join) and reader.kind is JoinKind.INNER):
                links += [set(refs(t)) for t in conjuncts(reader.condition)]
                if isinstance(reader, Join):
                    links += [set(attributes(side)) for side in (reader.left, reader.right) if side is not current]
                pending.append(reader)
    reached: set[object] = set(left)
    growing = True
    while growing:
        growing = False
        for link in links:
            if link & reached and not link <= reached:
                reached |= link
                growing = True
    return bool(reached & right)
