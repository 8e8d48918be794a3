"""Sum over a fan-out: a value is added up once for each partner its row meets."""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.graph import attributes
from core.algebra.notation import is_product, scalar_text
from core.algebra.operators import Group, Join, JoinKind, Operator, Project, Select
from core.algebra.scalars import refs
from core.finding.model import Finding, View, condition_of, key_sides


def find(view: View) -> Iterator[Finding]:
    for operator in view.formulation.operators():
        if not isinstance(operator, Group):
            continue
        for column in operator.aggregates:
            call = column.aggregate
            if call.name not in ("sum", "avg") or call.distinct:
                continue
            join = _multiplying(operator.input, frozenset(refs(call)), operator, view)
            if join is None:
                continue
            side = join.left if refs(call) <= set(attributes(join.left)) else join.right
            factor = view.rows(join) / max(1.0, view.rows(side))
            often = f" ({factor:.1f} times on average)" if factor > 1.05 else ""
            sentence = (
                f"{scalar_text(call)} adds a value once for each row it meets on {condition_of(join)}{often}: "
                "where there are several, the total is not what is meant"
            )
            yield Finding(
                "sum over a fan-out",
                operator,
                sentence,
                view.rows(join),
                view.evidence(join),
                None,
                "sum before joining, or join only what is unique",
            )


def _multiplying(operator: Operator, read: frozenset[object], group: Group, view: View) -> Join | None:
    """A join below that repeats the rows the summed value stands in."""
    while isinstance(operator, (Select, Project)) or (
        isinstance(operator, Join) and operator.kind in (JoinKind.SEMI, JoinKind.ANTI)
    ):
        operator = operator.left if isinstance(operator, Join) else operator.input
    if not isinstance(operator, Join) or operator.kind not in (JoinKind.INNER, JoinKind.LEFT) or not read:
        return None
    left, right = set(attributes(operator.left)), set(attributes(operator.right))
    side = operator.left if read <= left else operator.right if read <= right else None
    if side is None or is_product(operator):
        return None
    keys = key_sides(operator, view.facts)
    repeats = not keys[1] if side is operator.left else not keys[0]
    # A price looked up for each parcel is meant to be repeated: the groups are then of parcels, not of prices. Where the
    # value's own row decides its group, each repetition is one too many.
    decides = set(group.keys) <= view.facts.determined(
        group.input, set(attributes(side)) & set(attributes(group.input))
    )
    if repeats and decides:
        return operator
    return _multiplying(side, read, group, view)
