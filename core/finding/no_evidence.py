"""Estimate resting on nothing: the largest number of the plan is a guess."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.operators import Relation
from core.catalog.model import Evidence
from core.finding.model import Finding, View
from core.size.numbers import rows_text


def find(view: View) -> Iterator[Finding]:
    inner = [o for o in view.formulation.operators() if not isinstance(o, Relation)]
    if not inner:
        return
    largest = max(inner, key=view.rows)
    size = view.sizes[largest]
    if size.best_evidence is not Evidence.ASSUMED or size.best < 1000:
        return
    guess = next((line for line in size.derivation if line.evidence is Evidence.ASSUMED), None)
    reason = f" ({guess.text})" if guess is not None else ""
    sentence = f"the largest size of the plan, {rows_text(size.best)} rows, rests on a guess{reason}: profile the data or measure it"
    yield Finding("estimate resting on nothing", largest, sentence, size.best, Evidence.ASSUMED)
