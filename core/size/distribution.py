"""How the values of one attribute are spread, and how operators change it."""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, replace

from core.algebra.types import Family, Type, assumed_bytes
from core.catalog.model import AttributeFacts, Evidence, Value
from core.size.values import number, same_value


@dataclass(frozen=True, slots=True)
class Distribution:
    """`distinct` counts non-null values; `null_share` and the shares of `heavy` values are of all rows.

    `bounds` are histogram bounds on the number line (`texts` for text, which has no line), each bucket holding the same
    number of the remaining rows.
    """

    distinct: float
    null_share: float = 0.0
    heavy: tuple[tuple[Value, float], ...] = ()
    bounds: tuple[float, ...] = ()
    texts: tuple[str, ...] = ()
    low: float | None = None
    high: float | None = None
    width: float = 8.0
    evidence: Evidence = Evidence.ASSUMED

    @property
    def heavy_share(self) -> float:
        return sum(share for _, share in self.heavy)

    @property
    def rest_share(self) -> float:
        """The share of rows that are neither NULL nor a heavy hitter."""
        return max(0.0, 1.0 - self.null_share - self.heavy_share)

    @property
    def rest_distinct(self) -> float:
        return max(0.0, self.distinct - len(self.heavy))

    def share_of(self, value: Value) -> float:
        """The share of rows that hold a value."""
        for known, share in self.heavy:
            if same_value(known, value):
                return share
        if self.rest_distinct < 0.5:
            return 0.0
        place = number(value)
        if place is not None and not isinstance(value, str):
            if (self.low is not None and place < self.low) or (self.high is not None and place > self.high):
                return 0.0
        return self.rest_share / max(1.0, self.rest_distinct)

    def share_below(self, value: Value, inclusive: bool) -> float | None:
        """The share of rows with a value below (or up to) this one; None where nothing is known of the order."""
        place = number(value)
        if place is None:
            return None
        found = 0.0
        for known, share in self.heavy:
            other = number(known)
            if isinstance(known, str) and isinstance(value, str):
                below = known < value or (inclusive and known == value)
            else:
                below = other is not None and (other < place or (inclusive and other == place))
            found += share if below else 0.0
        if self.rest_share <= 0:
            return found
        fraction = _text_fraction(self.texts, value) if isinstance(value, str) else self._fraction_below(place)
        if fraction is None:
            return None
        inside = self.rest_share / max(1.0, self.rest_distinct) if inclusive and 0 < fraction < 1 else 0.0
        return min(found + self.rest_share * fraction + inside * 0.5, 1.0 - self.null_share)

    def _fraction_below(self, place: float) -> float | None:
        if len(self.bounds) >= 2:
            return _histogram_fraction(self.bounds, place)
        if self.low is not None and self.high is not None and self.high > self.low:
            return min(1.0, max(0.0, (place - self.low) / (self.high - self.low)))
        if self.rest_distinct < 0.5:
            return 0.0
        return None


def _text_fraction(bounds: Sequence[str], value: str) -> float | None:
    """The part of an equi-depth histogram of texts below a text; the middle of a bucket where it falls inside one."""
    if len(bounds) < 2:
        return None
    if value <= bounds[0]:
        return 0.0
    if value > bounds[-1]:
        return 1.0
    return (bisect_left(bounds, value) - 0.5) / (len(bounds) - 1)


def _histogram_fraction(bounds: Sequence[float], place: float) -> float:
    """The part of an equi-depth histogram below a place, by straight lines within buckets."""
    buckets = len(bounds) - 1
    if place <= bounds[0]:
        return 0.0
    if place >= bounds[-1]:
        return 1.0
    i = bisect_right(bounds, place) - 1
    first = bisect_left(bounds, bounds[i])
    width = bounds[i + 1] - bounds[i]
    inside = (place - bounds[i]) / width if width > 0 else 1.0
    return (max(i, first) + inside) / buckets


def base_distribution(facts: AttributeFacts | None, type_: Type, rows: float) -> Distribution:
    """The distribution that the catalog describes; System R's guesses where it is silent."""
    known = None if facts is None else facts.statistics
    if known is None:
        return Distribution(max(1.0, rows / 10), width=float(assumed_bytes(type_)))
    total = max(1.0, rows)
    distinct = float(known.distinct) if known.distinct is not None else max(1.0, rows / 10)
    places = [number(bound) for bound in known.histogram]
    return Distribution(
        distinct=distinct,
        null_share=min(1.0, (known.nulls or 0) / total),
        heavy=tuple((hitter.value, min(1.0, hitter.rows / total)) for hitter in known.heavy),
        bounds=() if type_.family is Family.TEXT else tuple(place for place in places if place is not None),
        texts=tuple(bound for bound in known.histogram if isinstance(bound, str)),
        low=number(known.low),
        high=number(known.high),
        width=known.width if known.width is not None else float(assumed_bytes(type_)),
        evidence=known.evidence if known.distinct is not None else Evidence.ASSUMED,
    )


def remaining_distinct(distinct: float, rows: float, share: float) -> float:
    """Distinct values left when a share of the rows is kept at random: D(1-(1-q)^(N/D)) (Cardenas, CACM 1975)."""
    if distinct <= 0 or rows <= 0 or share <= 0:
        return 0.0
    if share >= 1:
        return distinct
    left = distinct * (1.0 - (1.0 - share) ** (rows / max(distinct, 1e-9)))
    return max(min(1.0, rows * share), float(left))


def thinned(found: Distribution, rows: float, share: float) -> Distribution:
    """The distribution after a selection on other attributes kept this share of the rows."""
    return replace(found, distinct=remaining_distinct(found.distinct, rows, share))


def groups(combinations: float, rows: float) -> float:
    """Non-empty groups when rows fall on combinations at random: m(1-(1-1/m)^n) (Cardenas, CACM 1975)."""
    if combinations <= 1:
        return min(1.0, rows)
    if combinations > 1e12:
        return min(rows, combinations)
    return float(combinations * (1.0 - (1.0 - 1.0 / combinations) ** rows))
