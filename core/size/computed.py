"""The distributions of computed columns."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import date

from core.algebra.functions import STRICT, volatile
from core.algebra.scalars import (
    And,
    Arithmetic,
    Attribute,
    Call,
    Case,
    Cast,
    Comparison,
    InList,
    IsNull,
    IsTruth,
    Negative,
    Not,
    Or,
    Ref,
    Scalar,
    refs,
)
from core.algebra.types import Family, assumed_bytes
from core.algebra.typing import type_of
from core.catalog.model import Evidence, Value
from core.size.apply import NotApplied, applied
from core.size.distribution import Distribution
from core.size.values import constant, number

Spread = Mapping[Attribute, Distribution]
_PARTS_OF_DATES = {"month": 12, "quarter": 4, "day": 31, "hour": 24, "minute": 60, "second": 60, "dayofweek": 7}


def computed(value: Scalar, spread: Spread, rows: float) -> Distribution:
    """How the values of a scalar over rows of these distributions are spread."""
    width = float(assumed_bytes(type_of(value)))
    if isinstance(value, Ref) and value.attribute in spread:
        return spread[value.attribute]
    fixed = constant(value)
    if fixed is not None:
        place = number(fixed)
        return Distribution(1.0, heavy=((fixed, 1.0),), low=place, high=place, width=width, evidence=Evidence.MEASURED)
    exact = _by_values(value, spread, width)
    if exact is not None:
        return exact
    read = [spread[a] for a in refs(value) if a in spread]
    most = 1.0
    for found in read:
        most = min(most * max(1.0, found.distinct), 1e15)
    bound = _bound(value, spread)
    if bound is not None:
        most = min(most, bound)
    present = 1.0
    for found in read:
        present *= 1 - found.null_share
    strict = isinstance(value, (Arithmetic, Negative, Cast)) or (isinstance(value, Call) and value.name in STRICT)
    evidence = (
        min((found.evidence for found in read), default=Evidence.ASSUMED) if bound is not None else Evidence.ASSUMED
    )
    nulls = 1 - present if strict and evidence > Evidence.ASSUMED else 0.0
    distinct = max(1.0, min(most, max(1.0, rows)))
    return Distribution(distinct, null_share=nulls, width=width, evidence=evidence)


def _by_values(value: Scalar, spread: Spread, width: float) -> Distribution | None:
    """Exact where the scalar reads one attribute of which every value is known."""
    read = refs(value)
    if len(read) != 1 or volatile(value):
        return None
    (attribute,) = read
    found = spread.get(attribute)
    if found is None or not found.heavy or found.rest_distinct >= 0.5 or found.evidence is Evidence.ASSUMED:
        return None
    shares: dict[Value | None, float] = {}
    try:
        held: list[tuple[Value | None, float]] = [*found.heavy]
        if found.null_share > 0:
            held.append((None, found.null_share))
        for known, share in held:
            result = applied(value, {attribute: known})
            shares[result] = shares.get(result, 0.0) + share
    except NotApplied:
        return None
    null = shares.pop(None, 0.0)
    heavy = tuple(sorted(((v, s) for v, s in shares.items() if v is not None), key=lambda pair: -pair[1]))
    places = [place for v, _ in heavy if (place := number(v)) is not None]
    return Distribution(
        float(len(heavy)),
        null_share=null,
        heavy=heavy,
        low=min(places, default=None),
        high=max(places, default=None),
        width=width,
        evidence=found.evidence,
    )


def _bound(value: Scalar, spread: Spread) -> float | None:
    """The most values that a function can have, whatever its arguments; None where nothing is known."""
    match value:
        case Call(name="year", arguments=(Ref(attribute=a),)) if a in spread:
            return _years(spread[a])
        case Call(name=name) if name in _PARTS_OF_DATES:
            return float(_PARTS_OF_DATES[name])
        case Cast(term=Ref(attribute=a), type=type_) if type_.family is Family.DATE and a in spread:
            low, high = spread[a].low, spread[a].high
            return None if low is None or high is None else max(1.0, int(high) - int(low) + 1)
        case Comparison() | And() | Or() | Not() | IsNull() | IsTruth() | InList():
            return 2.0
        case Case(branches=branches, otherwise=otherwise):
            arms = {v for _, v in branches} | {otherwise}
            if all(not refs(arm) for arm in arms):
                return float(len(arms))
    return None


def _years(found: Distribution) -> float | None:
    if found.low is None or found.high is None or not 1 <= found.low <= found.high <= date.max.toordinal():
        return None
    return float(date.fromordinal(int(found.high)).year - date.fromordinal(int(found.low)).year + 1)
