"""A search for a cheaper formulation: offered rewrites, followed while they pay, as a chain that can be read."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from core.algebra.formulation import Formulation
from core.algebra.graph import dependent, inputs, postorder
from core.algebra.notation import qualified, tree_text
from core.algebra.operators import Join, Operator, Relation
from core.algebra.scalars import Attribute
from core.catalog.model import Catalog
from core.derive.facts import Facts
from core.rewrite import RULES, attempts
from core.rewrite.context import Context
from core.rewrite.rule import Offer
from core.size import Size, size

_IDLE = frozenset(
    {
        "split-selection",
        "commute-join",
        "distinct-to-group",
        "group-to-distinct",
        "semi-join-to-join",
        "selection-out-of-join",
    }
)
"""Rules that only make room for others; the search does not take them on their own."""

_TIDYING = frozenset(
    {"count-distinct-to-count", "drop-distinct", "drop-sort", "union-to-union-all", "drop-identity-projection"}
)

_SETTLING = 1e-6


@dataclass(frozen=True, slots=True)
class Revision:
    """One step of a chain: the rewrite applied, and the total of rows before and after it."""

    offer: Offer
    before: float
    after: float

    @property
    def formulation(self) -> Formulation:
        return self.offer.after


def total_rows(formulation: Formulation, sizes: Mapping[Operator, Size]) -> float:
    """Rows out of all operators but the base relations (C_out: Cluet, Moerkotte, ICDT 1995).

    What runs once for each outer row counts as often, base relations included: they are read again each time. Measured
    counts are used where there are any.
    """
    times: dict[Operator, float] = {}
    for operator in reversed(formulation.operators()):
        times.setdefault(operator, 1.0)
        for i, below in enumerate(inputs(operator)):
            runs = times[operator]
            if i == 1 and isinstance(operator, Join) and dependent(operator):
                runs *= max(1.0, sizes[operator.left].best)
            times[below] = max(times.get(below, 0.0), runs)
    return sum(
        sizes[operator].best * times[operator]
        for operator in formulation.operators()
        if not isinstance(operator, Relation) or times[operator] > 1
    )


def improve(
    formulation: Formulation,
    catalog: Catalog,
    seconds: float = 5.0,
    cancel: threading.Event | None = None,
    progress: Callable[[float, str], None] | None = None,
) -> list[Revision]:
    """The chain of rewrites that lowers the total of rows most, found step by step; empty where none does.

    Each step takes the best of all offers; steps that only tidy are taken where they cost nothing, and dropped from the
    end where nothing follows. Stops at the time limit, or soon after `cancel` is set.
    """
    facts = Facts(catalog)
    ends = time.monotonic() + seconds
    chain: list[Revision] = []
    current, cost = formulation, total_rows(formulation, size(formulation, catalog, facts=facts))
    seen = {_text(current)}
    while time.monotonic() < ends and not (cancel is not None and cancel.is_set()):
        best = _best_step(current, cost, facts, seen, ends, cancel)
        if best is None:
            break
        chain.append(best)
        current, cost = best.formulation, best.after
        seen.add(_text(current))
        if progress is not None:
            progress(min(0.99, 1 - max(0.0, ends - time.monotonic()) / seconds), f"{len(chain)} rewrites")
    while chain and chain[-1].after >= chain[-1].before * (1 - _SETTLING):
        chain.pop()
    return chain + _tidied(chain[-1].formulation if chain else formulation, cost, facts) if chain else chain


def _tidied(current: Formulation, cost: float, facts: Facts) -> list[Revision]:
    """What has become needless on the way: rewrites that save work which the total of rows does not show."""
    found: list[Revision] = []
    rules = [rule for rule in RULES if rule.name in _TIDYING]
    while len(found) < 12:
        context = Context(current, facts)
        offer = next(
            (a for op in current.operators() for a in attempts(context, op, rules) if isinstance(a, Offer)), None
        )
        if offer is None:
            break
        after = total_rows(offer.after, size(offer.after, facts.catalog, facts=facts))
        if after > cost * (1 + _SETTLING):
            break
        found.append(Revision(offer, cost, after))
        current, cost = offer.after, after
    return found


def _best_step(
    current: Formulation, cost: float, facts: Facts, seen: set[str], ends: float, cancel: threading.Event | None
) -> Revision | None:
    context = Context(current, facts)
    rules = [rule for rule in RULES if rule.name not in _IDLE]
    best: Revision | None = None
    for operator in current.operators():
        if time.monotonic() > ends or (cancel is not None and cancel.is_set()):
            break
        for answer in attempts(context, operator, rules):
            if not isinstance(answer, Offer):
                continue
            after = total_rows(answer.after, size(answer.after, facts.catalog, facts=facts))
            if after > cost * (1 + _SETTLING) or (best is not None and after >= best.after):
                continue
            if _text(answer.after) not in seen:
                best = Revision(answer, cost, after)
    return best


def _text(formulation: Formulation) -> str:
    """A text that two formulations share only where they are the same graph with the same identities."""
    everything = [a for operator in postorder(*formulation.roots()) for a in _own(operator)]
    naming = qualified(everything * 2)
    return "\n".join(tree_text(root, naming) for root in formulation.roots())


def _own(operator: Operator) -> tuple[Attribute, ...]:
    from core.algebra.graph import produced

    return produced(operator)
