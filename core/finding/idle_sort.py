"""A sort that nobody needs."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.operators import Sort
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if isinstance(operator, Sort):
            offer, _ = view.mend(operator, "drop-sort")
            if offer is not None and view.rows(operator) >= 100:
                sentence = f"{rows_text(view.rows(operator))} rows are sorted, and nothing above depends on the order"
                yield Finding(
                    "sort nobody needs", operator, sentence, view.rows(operator), view.evidence(operator), offer
                )
