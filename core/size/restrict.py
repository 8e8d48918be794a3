"""What a condition does to the distributions: attributes it speaks of are narrowed, the others are thinned out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

from core.algebra.scalars import (
    MIRRORED,
    And,
    Attribute,
    Comparison,
    ComparisonOperator,
    InList,
    IsNull,
    Or,
    Ref,
    Scalar,
    conjuncts,
    disjuncts,
)
from core.catalog.model import Value
from core.derive.reject import rejects_null_each
from core.size.distribution import Distribution, narrowed_between, narrowed_to, present, remaining_distinct
from core.size.equalities import joined, ordered
from core.size.tried import passing, unwrapped
from core.size.values import constant, number

_EQUAL = (ComparisonOperator.EQUAL, ComparisonOperator.NOT_DISTINCT)
_BELOW = (ComparisonOperator.LESS, ComparisonOperator.AT_MOST)
_ABOVE = (ComparisonOperator.GREATER, ComparisonOperator.AT_LEAST)
_MOST_TERMS = 200


def restricted(
    spread: Mapping[Attribute, Distribution], condition: Scalar, rows: float, share: float
) -> dict[Attribute, Distribution]:
    """The distributions of the rows for which the condition is true: this share of so many rows."""
    terms = tuple(bound for term in conjuncts(condition) for bound in unwrapped(term))
    narrowed: dict[Attribute, Distribution] = {}
    for term in terms[:_MOST_TERMS]:
        for attribute, found in _narrowed(term, {**spread, **narrowed} if narrowed else spread):
            narrowed[attribute] = found
    sure = rejects_null_each(condition) if len(terms) <= _MOST_TERMS else frozenset[Attribute]()
    result = {}
    for attribute, old in spread.items():
        new = narrowed.get(attribute, old)
        if attribute in sure:
            new = present(new)
        result[attribute] = _thinned(old, new, rows, share)
    return result


def _thinned(old: Distribution, new: Distribution, rows: float, share: float) -> Distribution:
    """The narrowed distribution, with no more values than the rows that are left can hold."""
    own = _kept(old, new)
    left = remaining_distinct(new.distinct, rows * own, min(1.0, share / own) if own > 0 else 0.0)
    return replace(new, distinct=left, domain=new.values)


def _kept(old: Distribution, new: Distribution) -> float:
    """The share of rows that narrowing this attribute kept, by its own figures."""
    if new is old or old.distinct <= 0:
        return 1.0
    if new.heavy and old.rest_distinct < 0.5:
        return min(1.0, sum(old.share_of(value) for value, _ in new.heavy))
    return min(1.0, (1 - old.null_share) * new.distinct / old.distinct) or 1.0


def _narrowed(term: Scalar, spread: Mapping[Attribute, Distribution]) -> Sequence[tuple[Attribute, Distribution]]:
    """The attributes that one term of a conjunction narrows."""
    match term:
        case Comparison(operator=ComparisonOperator.EQUAL, left=Ref(attribute=a), right=Ref(attribute=b)):
            if a in spread and b in spread and a != b:
                return tuple(zip((a, b), joined(spread[a], spread[b]), strict=True))
        case IsNull(term=Ref(attribute=a)) if a in spread:
            return ((a, _only_null(spread[a])),)
        case _:
            pass
    values = _values(term)
    if values is not None and values[0] in spread:
        return ((values[0], narrowed_to(spread[values[0]], values[1])),)
    bound = bound_of(term)
    if bound is not None and bound[0] in spread and ordered(bound[0]):
        place = number(constant(bound[2]))
        if bound[1] in _BELOW:
            return ((bound[0], narrowed_between(spread[bound[0]], None, place)),)
        return ((bound[0], narrowed_between(spread[bound[0]], place, None)),)
    held = passing(term, spread)
    if held is not None:
        return ((held[0], narrowed_to(spread[held[0]], held[1])),)
    return _alternatives(term, spread) if isinstance(term, Or) else ()


def _only_null(found: Distribution) -> Distribution:
    return replace(found, distinct=0.0, domain=None, null_share=1.0, heavy=(), bounds=(), texts=(), samples=())


def _values(term: Scalar) -> tuple[Attribute, list[Value]] | None:
    """The constants that a term leaves to an attribute."""
    match term:
        case Comparison(operator=operator, left=left, right=right) if operator in _EQUAL:
            for side, other in ((left, right), (right, left)):
                value = constant(other)
                if isinstance(side, Ref) and value is not None:
                    return side.attribute, [value]
        case InList(term=Ref(attribute=a), items=items):
            known = [value for item in items if (value := constant(item)) is not None]
            return a, list(dict.fromkeys(known))
        case _:
            pass
    return None


def _alternatives(term: Or, spread: Mapping[Attribute, Distribution]) -> list[tuple[Attribute, Distribution]]:
    """Attributes that every branch of a disjunction leaves to some constants."""
    allowed: dict[Attribute, list[Value]] | None = None
    for branch in disjuncts(term):
        own: dict[Attribute, list[Value]] = {}
        for part in conjuncts(branch) if isinstance(branch, And) else (branch,):
            found = _values(part)
            if found is not None:
                own.setdefault(found[0], found[1])
        allowed = own if allowed is None else {a: [*v, *own[a]] for a, v in allowed.items() if a in own}
        if not allowed:
            return []
    return [
        (a, narrowed_to(spread[a], list(dict.fromkeys(values)))) for a, values in (allowed or {}).items() if a in spread
    ]


def bound_of(term: Scalar) -> tuple[Attribute, ComparisonOperator, Scalar] | None:
    """An inequality between an attribute and a constant, attribute first."""
    if not isinstance(term, Comparison) or term.operator not in (*_BELOW, *_ABOVE):
        return None
    if isinstance(term.left, Ref) and constant(term.right) is not None:
        return term.left.attribute, term.operator, term.right
    if isinstance(term.right, Ref) and constant(term.left) is not None:
        return term.right.attribute, MIRRORED[term.operator], term.left
    return None
