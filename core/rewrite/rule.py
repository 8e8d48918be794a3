"""What a rewrite rule is, and what it answers at an operator."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from core.algebra.formulation import Formulation
from core.algebra.operators import Operator
from core.rewrite.context import Context

HOLDS, REFUTED, UNPROVED = "holds", "refuted", "unproved"


@dataclass(frozen=True, slots=True)
class Check:
    """A named side condition at one place: whether it holds, in a sentence, and what catalog fact would make it hold."""

    name: str
    outcome: str
    sentence: str
    cure: str = ""

    @property
    def passed(self) -> bool:
        return self.outcome == HOLDS


def check(name: str, holds: bool, sentence: str, otherwise: str, cure: str = "", proof: bool = True) -> Check:
    """A check that holds with one sentence or fails with another; `proof` False: its failure only means "not proved"."""
    if holds:
        return Check(name, HOLDS, sentence)
    return Check(name, REFUTED if proof else UNPROVED, otherwise, cure)


@dataclass(frozen=True, slots=True)
class Attempt:
    """A rule whose shape matches at an operator: its checks, and how to build the result if they hold."""

    checks: tuple[Check, ...]
    build: Callable[[], Operator | Mapping[Operator, Operator]]
    what: str
    cautions: tuple[str, ...] = ()


Binder = Callable[[Operator, Context], "list[Attempt] | Attempt | None"]


@dataclass(frozen=True, slots=True)
class Rule:
    """An equivalence. `name` is stable (documents hold it); `law` is in algebra notation; `source` is where it is published."""

    name: str
    title: str
    law: str
    source: str
    family: str
    bind: Binder


@dataclass(frozen=True, slots=True)
class Offer:
    """A legal rewrite at an operator, with its result ready. `became` says what stands for the operator afterwards.

    `choice` is its number among what the rule offers at the operator, so that a document can name it.
    """

    rule: Rule
    operator: Operator
    checks: tuple[Check, ...]
    what: str
    after: Formulation
    became: Operator
    cautions: tuple[str, ...] = ()
    choice: int = 0


@dataclass(frozen=True, slots=True)
class Refusal:
    """A rewrite whose shape fits but which is not legal here, or not known to be."""

    rule: Rule
    operator: Operator
    checks: tuple[Check, ...]
    what: str
    cautions: tuple[str, ...] = field(default=())

    @property
    def failed(self) -> tuple[Check, ...]:
        return tuple(c for c in self.checks if not c.passed)

    @property
    def reason(self) -> str:
        return "; ".join(c.sentence for c in self.failed)

    @property
    def cure(self) -> str:
        return "; ".join(c.cure for c in self.failed if c.cure)


class RuleFault(RuntimeError):
    """A rule built something illegal: a fault of the rule, named by it."""
