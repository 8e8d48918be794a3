"""Which operators of two formulations correspond, for drawing them side by side."""

from __future__ import annotations

from dataclasses import dataclass

from core.algebra.formulation import Formulation
from core.algebra.graph import postorder
from core.algebra.operators import Operator, Relation
from core.compare.parts import kept_key


@dataclass(frozen=True, slots=True)
class Alignment:
    """`same`: operators whose whole sub-plans give the same rows. `matched`: operators that do the same part of the work."""

    same: tuple[tuple[Operator, Operator], ...]
    matched: tuple[tuple[Operator, Operator], ...]


def align(a: Formulation, b: Formulation) -> Alignment:
    """Pairs operators: the same sub-plans first, then those of one kind over the same relations, the root last of all."""
    keys_b: dict[str, list[Operator]] = {}
    for operator in b.operators():
        key = kept_key(operator)
        if key is not None:
            keys_b.setdefault(key, []).append(operator)
    same: list[tuple[Operator, Operator]] = []
    used: set[Operator] = set()
    for operator in a.operators():
        key = kept_key(operator)
        twin = next((o for o in keys_b.get(key or "", ()) if o not in used and type(o) is type(operator)), None)
        twin = twin or next((o for o in keys_b.get(key or "", ()) if o not in used), None)
        if twin is not None:
            same.append((operator, twin))
            used.add(twin)
    taken = {operator for operator, _ in same}
    matched: list[tuple[Operator, Operator]] = []
    by_shape: dict[tuple[object, ...], list[Operator]] = {}
    for operator in b.operators():
        if operator not in used:
            by_shape.setdefault(_shape(operator), []).append(operator)
    for operator in a.operators():
        if operator in taken:
            continue
        found = by_shape.get(_shape(operator))
        if found:
            matched.append((operator, found.pop(0)))
    return Alignment(tuple(same), tuple(matched))


def _shape(operator: Operator) -> tuple[object, ...]:
    relations = sorted(o.name for o in postorder(operator) if isinstance(o, Relation))
    return (type(operator).__name__.replace("Distinct", "Group"), tuple(relations))
