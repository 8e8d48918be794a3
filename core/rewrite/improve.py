"""A search for a cheaper formulation: offered rewrites, followed while they pay, as a chain that can be read."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Collection, Iterator, Mapping
from dataclasses import dataclass

from core.algebra.formulation import Formulation
from core.algebra.graph import dependent, inputs, postorder, produced
from core.algebra.notation import qualified, tree_text
from core.algebra.operators import Join, Operator, Relation
from core.catalog.model import Catalog
from core.derive.facts import Facts
from core.rewrite import RULES, attempts
from core.rewrite.context import Context
from core.rewrite.rule import Offer
from core.size import Size, size

_TIDYING = frozenset(
    {"count-distinct-to-count", "drop-distinct", "drop-sort", "union-to-union-all", "drop-identity-projection"}
)

_SETTLING = 1e-6
"""The share by which a total must fall to count as lower."""

_DETOUR = 4
"""The most steps of a detour: rewrites that pay only together, such as a selection pushed past two operators."""


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
    """A chain of rewrites that lowers the total of rows, found step by step; empty where none is found.

    Each step is the best of all offers. Where no single step pays, a detour of a few rewrites that pay together is
    looked for. At the end, what has become needless is dropped. Stops at the time limit, or soon after `cancel` is set.
    """
    search = _Search(Facts(catalog), time.monotonic() + seconds, cancel)
    chain: list[Revision] = []
    current, cost = formulation, search.cost(formulation)
    while not search.over():
        step = search.best_step(current, cost)
        steps = [step] if step is not None else search.best_detour(current, cost)
        if not steps:
            break
        chain += steps
        current, cost = chain[-1].formulation, chain[-1].after
        if progress is not None:
            progress(min(0.99, 1 - search.left() / seconds), f"{len(chain)} rewrites")
    return chain + search.tidied(current, cost) if chain else chain


@dataclass(frozen=True, slots=True)
class _Search:
    """What a search goes by: the facts, and when it has to end."""

    facts: Facts
    ends: float
    cancel: threading.Event | None

    def left(self) -> float:
        """Seconds that remain."""
        return max(0.0, self.ends - time.monotonic())

    def over(self) -> bool:
        return self.left() == 0 or (self.cancel is not None and self.cancel.is_set())

    def cost(self, formulation: Formulation) -> float:
        return total_rows(formulation, size(formulation, self.facts.catalog, facts=self.facts))

    def offered(
        self, current: Formulation, cost: float, places: Collection[Operator] | None = None
    ) -> Iterator[Revision]:
        """Every offer with its total; `places` narrows it to these operators. Ends early when the time is over."""
        context = Context(current, self.facts)
        for operator in current.operators():
            if places is not None and operator not in places:
                continue
            for answer in attempts(context, operator):
                if self.over():
                    return
                if isinstance(answer, Offer):
                    yield Revision(answer, cost, self.cost(answer.after))

    def best_step(self, current: Formulation, cost: float) -> Revision | None:
        """The offer that leaves the lowest total, if that is lower than now."""
        best = min(self.offered(current, cost), key=lambda revision: revision.after, default=None)
        return best if best is not None and best.after < cost * (1 - _SETTLING) else None

    def best_detour(self, current: Formulation, cost: float) -> list[Revision]:
        """A few rewrites that lower the total together though the first does not; empty where there are none."""
        best: list[Revision] = []
        old = frozenset(current.operators())
        for first in self.offered(current, cost):
            steps = self._followed(first, old, _text(current))
            target = best[-1].after if best else cost
            shorter = len(steps) < len(best) and steps[-1].after <= target * (1 + _SETTLING)
            if shorter or steps[-1].after < target * (1 - _SETTLING):
                best = steps
        return best

    def _followed(self, first: Revision, old: Collection[Operator], start: str) -> list[Revision]:
        """A first step and the best ones after it, at what it changed, up to where the total is lowest."""
        steps, seen = [first], {start, _text(first.formulation)}
        while len(steps) < _DETOUR:
            last = steps[-1]
            places = frozenset(last.formulation.operators()).difference(old)
            offers = sorted(self.offered(last.formulation, last.after, places), key=lambda revision: revision.after)
            step = next((revision for revision in offers if _text(revision.formulation) not in seen), None)
            if step is None:
                break
            steps.append(step)
            seen.add(_text(step.formulation))
        lowest = min(range(len(steps)), key=lambda i: steps[i].after)
        return steps[: lowest + 1]

    def tidied(self, current: Formulation, cost: float) -> list[Revision]:
        """What has become needless on the way: rewrites that save work which the total of rows does not show."""
        found: list[Revision] = []
        rules = [rule for rule in RULES if rule.name in _TIDYING]
        while len(found) < 12:
            context = Context(current, self.facts)
            offer = next(
                (a for op in current.operators() for a in attempts(context, op, rules) if isinstance(a, Offer)), None
            )
            if offer is None:
                break
            after = self.cost(offer.after)
            if after > cost * (1 + _SETTLING):
                break
            found.append(Revision(offer, cost, after))
            current, cost = offer.after, after
        return found


def _text(formulation: Formulation) -> str:
    """A text that two formulations share only where they are the same graph with the same identities."""
    everything = [a for operator in postorder(*formulation.roots()) for a in produced(operator)]
    naming = qualified(everything * 2)
    return "\n".join(tree_text(root, naming) for root in formulation.roots())
