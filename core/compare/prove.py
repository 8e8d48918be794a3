"""Proof of equality: both sides brought to a normal form by tested rewrites, then compared as canonical texts."""

from __future__ import annotations

import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

from core.algebra.formulation import Formulation
from core.algebra.operators import Sort
from core.catalog.model import Catalog
from core.compare.canonical import NoForm, canonical
from core.compare.settled import unsettled
from core.compare.simplify import simplified
from core.derive.facts import Facts
from core.rewrite import Offer, attempts, rule_named
from core.rewrite.context import Context
from core.rewrite.rule import Rule

# In order of use. Each one takes something away or moves a selection down, so the chain ends.
NORMALISING = tuple(
    rule_named(name)
    for name in (
        "contradiction-to-empty",
        "drop-tautology",
        "mark-to-half-join",
        "not-in-to-not-exists",
        "simplify-outer-join",
        "null-test-to-anti-join",
        "narrow-projection",
        "drop-idle-aggregates",
        "drop-sort",
        "drop-distinct",
        "eliminate-join",
        "join-to-semi-join",
        "scalar-aggregate-to-join",
        "single-to-left-join",
        "count-distinct-to-count",
        "group-on-key",
        "union-to-union-all",
        "flatten-union",
        "set-operation-to-half-join",
        "push-selection-below-grouping",
        "push-selection-below-set-operation",
        "push-selection-below-window",
        "push-selection-below-distinct-or-sort",
        "merge-projections",
    )
)
"""Joins keep the conditions above them: the canonical text gathers both."""

PUSHING = (
    *NORMALISING[:6],
    rule_named("push-selection-below-projection"),
    rule_named("push-selection-below-join"),
    *NORMALISING[6:],
)
"""The same with selections moved into the inputs of joins first, so that a filtered input may turn out to filter only."""

_MOST_STEPS = 150


@dataclass(frozen=True, slots=True)
class ProofStep:
    """One step of a proof: which side, the rule's title and law, and what it did, in words."""

    side: str
    title: str
    law: str
    what: str


@dataclass(frozen=True, slots=True)
class Normal:
    """A normal form with the steps that led to it; `text` None where there is no canonical text, `why` says so."""

    formulation: Formulation
    text: str | None
    steps: tuple[ProofStep, ...]
    why: str = ""


def normal_pair(
    formulations: tuple[Formulation, Formulation],
    catalog: Catalog,
    names: tuple[str, str] = ("A", "B"),
    seconds: float = 5.0,
    cancel: threading.Event | None = None,
) -> tuple[Normal, Normal, bool]:
    """Normal forms of both sides and whether they are one: each side is tried in two ways, and any two may meet."""
    tried: tuple[list[Normal], list[Normal]] = ([], [])
    ends = time.monotonic() + seconds
    for rules in (NORMALISING, PUSHING):
        left = ends - time.monotonic()
        if rules is PUSHING and (left <= 0 or (cancel is not None and cancel.is_set())):
            break
        for found, formulation, side in zip(tried, formulations, names, strict=True):
            found.append(normal_form(formulation, catalog, side, max(left, 0.1) / 2, cancel, rules))
        for first in tried[0]:
            for second in tried[1]:
                if first.text is not None and first.text == second.text:
                    return first, second, True
    return tried[0][0], tried[1][0], False


def normal_form(
    formulation: Formulation,
    catalog: Catalog,
    side: str,
    seconds: float = 5.0,
    cancel: threading.Event | None = None,
    rules: Sequence[Rule] = NORMALISING,
) -> Normal:
    """Brings a formulation to its normal form. Order by the answer itself is left to the caller: the text is of a bag."""
    facts = Facts(catalog)
    ends = time.monotonic() + seconds
    steps: list[ProofStep] = []
    current = _simplified(formulation, facts, steps, side)
    while len(steps) < _MOST_STEPS and time.monotonic() < ends and not (cancel is not None and cancel.is_set()):
        offer = _next(current, facts, rules)
        if offer is None:
            simpler = _simplified(current, facts, steps, side)
            if simpler is current:
                break
            current = simpler
            continue
        steps.append(ProofStep(side, offer.rule.title, offer.rule.law, offer.what))
        current = offer.after
    output = current.outputs[-1]
    root = output.operator
    while isinstance(root, Sort):
        root = root.input
    try:
        why = unsettled(root, facts)
        if why is not None:
            return Normal(current, None, tuple(steps), why)
        text = canonical(root, [a for a, _ in output.columns])
    except NoForm as reason:
        return Normal(current, None, tuple(steps), str(reason))
    except RecursionError:
        return Normal(current, None, tuple(steps), "it is nested too deeply")
    return Normal(current, text, tuple(steps))


def _simplified(formulation: Formulation, facts: Facts, steps: list[ProofStep], side: str) -> Formulation:
    """The formulation with simpler expressions; a step is added where that changed something."""
    output = formulation.outputs[-1]
    root = simplified(output.operator, facts)
    if root is output.operator:
        return formulation
    what = "expressions simplified: what can only be true, what cannot be NULL, and common factors"
    steps.append(ProofStep(side, "simplify expressions", "laws of three-valued logic", what))
    # The names of steps point into the old graph; a proof reads the answer alone.
    return replace(formulation, outputs=(replace(output, operator=root),), names={}, aliases={}, spans={})


def _next(current: Formulation, facts: Facts, rules: Sequence[Rule]) -> Offer | None:
    context = Context(current, facts)
    operators = current.operators()
    for rule in rules:
        for operator in operators:
            for answer in attempts(context, operator, [rule]):
                if isinstance(answer, Offer):
                    return answer
    return None
