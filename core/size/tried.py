"""Conditions on one attribute, tried on the values that the catalog knows: heavy hitters exactly, histogram bounds as a
sample of the rest."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, datetime, timedelta

from core.algebra.functions import volatile
from core.algebra.scalars import (
    MIRRORED,
    Attribute,
    Call,
    Cast,
    Comparison,
    ComparisonOperator,
    Literal,
    Ref,
    Scalar,
    refs,
)
from core.algebra.types import DATE, Family
from core.catalog.model import Evidence, Value
from core.size.apply import NotApplied, applied
from core.size.distribution import Distribution
from core.size.equalities import Share, Spread
from core.size.model import Line, figure
from core.size.values import constant

_FEWEST = 20
"""Fewer bounds than this are no sample."""


def tried(term: Scalar, text: str, spread: Spread, sample: bool = True) -> Share | None:
    """The share of rows for which a condition on one attribute is true; None where its values are not known.

    Without `sample` only where every value is a heavy hitter, so that the share is exact.
    """
    read = refs(term)
    if len(read) != 1 or volatile(term):
        return None
    (attribute,) = read
    found = spread.get(attribute)
    if found is None or found.evidence is Evidence.ASSUMED or not (found.heavy or found.samples):
        return None
    rest = found.rest_share if found.rest_distinct >= 0.5 else 0.0
    if rest > 1e-9 and (not sample or len(found.samples) < _FEWEST):
        return None
    try:
        held = [share for value, share in found.heavy if _holds(term, attribute, value)]
        null = found.null_share if found.null_share > 0 and _holds(term, attribute, None) else 0.0
        hits = sum(_holds(term, attribute, value) for value in found.samples) if rest > 1e-9 else 0
    except NotApplied:
        return None
    return _share(text, held, null, rest, hits, found)


def _holds(term: Scalar, attribute: Attribute, value: Value | None) -> bool:
    return applied(term, {attribute: value}) is True


def passing(term: Scalar, spread: Spread) -> tuple[Attribute, list[Value]] | None:
    """The values of its one attribute for which a condition is true, where all values are known; never NULL."""
    read = refs(term)
    if len(read) != 1 or volatile(term):
        return None
    (attribute,) = read
    found = spread.get(attribute)
    if found is None or not found.heavy or found.rest_distinct >= 0.5:
        return None
    try:
        if found.null_share > 0 and _holds(term, attribute, None):
            return None
        return attribute, [value for value, _ in found.heavy if _holds(term, attribute, value)]
    except NotApplied:
        return None


def _share(text: str, held: Sequence[float], null: float, rest: float, hits: int, found: Distribution) -> Share:
    pieces = [figure(share) for share in held] if len(held) <= 6 else [figure(sum(held))]
    value = sum(held) + null
    if null > 0:
        pieces.append(figure(null))
    method = "tried on every value"
    if rest > 1e-9:
        # No hit among so many values: half a hit is taken, since nothing says that there is none at all.
        seen = max(0.5, float(hits))
        value += rest * seen / len(found.samples)
        pieces.append(f"{figure(rest)} × {figure(seen)} ÷ {len(found.samples)}")
        method = "tried on the heavy hitters and on the histogram's bounds"
    formula = f"min(1, {' + '.join(pieces)})" if pieces else "0"
    value = min(1.0, value)
    line = Line(f"share of rows with {text}", formula, value, found.evidence, method)
    return Share(value, (line,), found.evidence)


# --- functions that keep the order -----------------------------------------------------------------------------------


def unwrapped(term: Scalar) -> tuple[Scalar, ...]:
    """A comparison of a day or a year of an attribute with a constant, as bounds on the attribute itself."""
    if not isinstance(term, Comparison):
        return (term,)
    left, right, operator = term.left, term.right, term.operator
    if not refs(left):
        left, right, operator = right, left, MIRRORED[operator]
    value = constant(right)
    match left:
        case Cast(term=Ref(attribute=attribute), type=type_) if type_.family is Family.DATE:
            if (
                attribute.type.family is Family.TIMESTAMP
                and isinstance(value, date)
                and not isinstance(value, datetime)
            ):
                return _between(term, attribute, operator, value, value + timedelta(days=1))
        case Call(name="year", arguments=(Ref(attribute=attribute),)):
            if (
                attribute.type.family in (Family.DATE, Family.TIMESTAMP)
                and isinstance(value, int)
                and 1 <= value < 9999
            ):
                return _between(term, attribute, operator, date(value, 1, 1), date(value + 1, 1, 1))
        case _:
            pass
    return (term,)


def _between(
    term: Scalar, attribute: Attribute, operator: ComparisonOperator, first: date, after: date
) -> tuple[Scalar, ...]:
    """Bounds on the attribute from a comparison with a stretch of days, from `first` to before `after`."""

    def bound(sign: ComparisonOperator, day: date) -> Scalar:
        return Comparison(sign, Ref(attribute), Literal(day.isoformat(), DATE))

    match operator:
        case ComparisonOperator.EQUAL | ComparisonOperator.NOT_DISTINCT:
            return bound(ComparisonOperator.AT_LEAST, first), bound(ComparisonOperator.LESS, after)
        case ComparisonOperator.LESS:
            return (bound(ComparisonOperator.LESS, first),)
        case ComparisonOperator.AT_MOST:
            return (bound(ComparisonOperator.LESS, after),)
        case ComparisonOperator.GREATER:
            return (bound(ComparisonOperator.AT_LEAST, after),)
        case ComparisonOperator.AT_LEAST:
            return (bound(ComparisonOperator.AT_LEAST, first),)
        case _:
            return (term,)
