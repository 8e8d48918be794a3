"""What the operators above need of an operator: which attributes they read, whether duplicates or order matter to them."""

from __future__ import annotations

from dataclasses import dataclass, field

from core.algebra.formulation import Formulation
from core.algebra.functions import duplicate_insensitive, order_sensitive, volatile
from core.algebra.graph import attributes, free, inputs, parents, read_here, scalars
from core.algebra.operators import (
    Distinct,
    Divide,
    Fixpoint,
    Group,
    Join,
    JoinKind,
    Limit,
    Nest,
    Operator,
    Project,
    Select,
    SetOperation,
    Sort,
    Unnest,
    Window,
)
from core.algebra.scalars import Aggregate, Attribute, refs
from core.derive.facts import Facts


@dataclass
class Context:
    """A formulation seen from above, with the facts that hold in it."""

    formulation: Formulation
    facts: Facts
    needed: dict[Operator, frozenset[Attribute]] = field(default_factory=dict)
    duplicates_matter: dict[Operator, bool] = field(default_factory=dict)
    order_matters: dict[Operator, bool] = field(default_factory=dict)
    readers: dict[Operator, list[Operator]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.readers = parents(*self.formulation.roots())
        order = self.formulation.operators()
        needed: dict[Operator, set[Attribute]] = {operator: set() for operator in order}
        duplicates = dict.fromkeys(order, False)
        ordered = dict.fromkeys(order, False)
        for output in self.formulation.outputs:
            needed[output.operator].update(a for a, _ in output.columns)
            duplicates[output.operator] = True
            ordered[output.operator] = True
        for operator in reversed(order):
            for i, below in enumerate(inputs(operator)):
                needed[below] |= _read_from(operator, i, needed[operator])
                duplicates[below] = duplicates[below] or _duplicates_matter(operator, i, duplicates[operator])
                ordered[below] = ordered[below] or _order_matters(operator, ordered[operator])
        self.needed = {operator: frozenset(found) for operator, found in needed.items()}
        self.duplicates_matter, self.order_matters = duplicates, ordered


def _read_from(operator: Operator, place: int, above: set[Attribute]) -> set[Attribute]:
    """The attributes of an input that the operator reads or passes on to someone who does."""
    below = inputs(operator)[place]
    own = set(attributes(below))
    match operator:
        case Project(columns=columns):
            # A column that nobody above reads is still computed, so what it reads is still needed.
            read = {a for c in columns for a in refs(c.value)}
        case SetOperation(sources=sources) | Fixpoint(sources=sources):
            read = set(sources[place])
        case Distinct() | Divide():
            read = own
        case _:
            read = set(read_here(operator)) | above
    if isinstance(operator, Join) and place == 0:
        read |= free(operator.right)
    return read & own


def _duplicates_matter(operator: Operator, place: int, above: bool) -> bool:
    match operator:
        case Distinct() | Divide():
            return False
        case Group(aggregates=aggregates):
            return not all(duplicate_insensitive(c.aggregate) for c in aggregates)
        case SetOperation(distinct=distinct) | Fixpoint(distinct=distinct):
            return not distinct
        case Join(kind=kind):
            if place == 1 and kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK):
                return False
            return True if place == 1 and kind is JoinKind.SINGLE else above
        case Select() | Sort():
            return above or volatile(*scalars(operator))
        case Project():
            return above or volatile(*scalars(operator))
        case _:
            return True


def _order_matters(operator: Operator, above: bool) -> bool:
    match operator:
        case Limit() | Window() | Nest():
            return True
        case Group(aggregates=aggregates):
            return any(_reads_order(c.aggregate) for c in aggregates)
        case Select() | Project() | Unnest():
            return above
        case _:
            return False


def _reads_order(call: Aggregate) -> bool:
    return order_sensitive(call) and not call.order
