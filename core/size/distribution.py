"""How the values of one attribute are spread, and how operators change it."""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

from core.algebra.operators import Relation
from core.algebra.types import Family, Type, assumed_bytes
from core.catalog.model import AttributeFacts, Evidence, RelationFacts, Value
from core.size.values import number, same_value


@dataclass(frozen=True, slots=True)
class Origin:
    """The base attribute whose values an attribute holds."""

    relation: Relation
    name: str
    facts: RelationFacts


@dataclass(frozen=True, slots=True)
class Distribution:
    """`distinct` counts non-null values; `null_share` and the shares of `heavy` values are of all rows.

    `bounds` are histogram bounds on the number line (`texts` for text, which has no line), each bucket holding the same
    number of the remaining rows; `samples` are the same bounds as values. `domain` counts the values before selections
    on other attributes thinned them out (None: none did): two relations of which such selections left few rows each
    still meet as rarely as their whole domains do. `normal` is mean and deviation of a computed figure.
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
    domain: float | None = None
    origin: Origin | None = None
    samples: tuple[Value, ...] = ()
    normal: tuple[float, float] | None = None

    @property
    def values(self) -> float:
        """The distinct values that rows could hold, had no selection on other attributes been made."""
        return self.distinct if self.domain is None else max(self.domain, self.distinct)

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
        fraction = _text_fraction(self.texts, value) if isinstance(value, str) else self.fraction_below(place)
        if fraction is None:
            return None
        inside = self.rest_share / max(1.0, self.rest_distinct) if inclusive and 0 < fraction < 1 else 0.0
        return min(found + self.rest_share * fraction + inside * 0.5, 1.0 - self.null_share)

    def fraction_below(self, place: float) -> float | None:
        """The part of the values that are no heavy hitters below a place."""
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
        samples=known.histogram,
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
    return replace(found, distinct=remaining_distinct(found.distinct, rows, share), domain=found.values)


def groups(combinations: float, rows: float) -> float:
    """Non-empty groups when rows fall on combinations at random: m(1-(1-1/m)^n) (Cardenas, CACM 1975)."""
    if combinations <= 1:
        return min(1.0, rows)
    if combinations > 1e12:
        return min(rows, combinations)
    return float(combinations * (1.0 - (1.0 - 1.0 / combinations) ** rows))


def moments(found: Distribution) -> tuple[float, float] | None:
    """Mean and variance of the values that are not NULL; None where too little is known of them.

    Heavy hitters at their values, each bucket of the histogram as evenly filled, no histogram as one bucket.
    """
    pieces: list[tuple[float, float, float]] = []
    for value, share in found.heavy:
        place = None if isinstance(value, str) else number(value)
        if place is None:
            return None
        pieces.append((share, place, place))
    if found.rest_distinct >= 0.5 and found.rest_share > 0:
        bounds = found.bounds
        if len(bounds) < 2:
            if found.low is None or found.high is None:
                return None
            bounds = (found.low, found.high)
        each = found.rest_share / (len(bounds) - 1)
        pieces.extend((each, a, b) for a, b in pairwise(bounds))
    total = sum(share for share, _, _ in pieces)
    if total <= 0:
        return None
    mean = sum(share * (a + b) / 2 for share, a, b in pieces) / total
    variance = sum(share * (((a + b) / 2 - mean) ** 2 + (b - a) ** 2 / 12) for share, a, b in pieces) / total
    return mean, variance


# --- narrowing by conditions on the attribute itself -----------------------------------------------------------------


def present(found: Distribution) -> Distribution:
    """The distribution of the rows that are not NULL."""
    if found.null_share <= 0:
        return found
    kept = 1.0 - found.null_share
    if kept <= 0:
        return replace(found, distinct=0.0, null_share=0.0, heavy=(), bounds=(), texts=(), samples=())
    return replace(found, null_share=0.0, heavy=tuple((value, share / kept) for value, share in found.heavy))


def padded(found: Distribution, share: float) -> Distribution:
    """The distribution when this share of the rows is NULL because an outer join found no partner."""
    kept = max(0.0, 1.0 - share)
    heavy = tuple((value, part * kept) for value, part in found.heavy)
    return replace(found, null_share=min(1.0, share + found.null_share * kept), heavy=heavy)


def narrowed_to(found: Distribution, values: Sequence[Value]) -> Distribution:
    """The distribution of the rows that hold one of these values."""
    shares = [(value, found.share_of(value)) for value in values]
    total = sum(share for _, share in shares)
    heavy = tuple((value, share / total) for value, share in shares if share > 0) if total > 0 else ()
    places = [place for value, _ in heavy if (place := number(value)) is not None]
    return replace(
        found,
        distinct=float(len(heavy)),
        domain=None,
        null_share=0.0,
        heavy=tuple(sorted(heavy, key=lambda pair: -pair[1])),
        bounds=(),
        texts=(),
        samples=(),
        low=min(places, default=None),
        high=max(places, default=None),
    )


def narrowed_between(found: Distribution, low: float | None, high: float | None) -> Distribution:
    """The distribution of the rows between two places on the number line (None: no bound there)."""
    first = found.low if low is None else low if found.low is None else max(low, found.low)
    last = found.high if high is None else high if found.high is None else min(high, found.high)
    below = 0.0 if low is None else found.fraction_below(low)
    up_to = 1.0 if high is None else found.fraction_below(high)
    if below is None or up_to is None:
        return present(found)
    part = max(0.0, up_to - below)
    heavy = [(v, s) for v, s in found.heavy if (place := number(v)) is not None and _within(place, low, high)]
    rest = found.rest_share * part
    total = sum(share for _, share in heavy) + rest
    if total <= 0:
        return replace(found, distinct=0.0, domain=None, null_share=0.0, heavy=(), bounds=(), samples=())
    bounds = found.bounds
    if len(bounds) >= 2 and part > 0:
        count = max(1, round((len(bounds) - 1) * part))
        bounds = tuple(_place_at(found.bounds, below + part * i / count) for i in range(count + 1))
    return replace(
        found,
        distinct=len(heavy) + found.rest_distinct * part,
        domain=None if found.domain is None else len(heavy) + max(0.0, found.domain - len(found.heavy)) * part,
        null_share=0.0,
        heavy=tuple((value, share / total) for value, share in heavy),
        bounds=bounds if part > 0 else (),
        samples=tuple(v for v in found.samples if (place := number(v)) is not None and _within(place, low, high)),
        low=first,
        high=last,
    )


def _within(place: float, low: float | None, high: float | None) -> bool:
    return (low is None or place >= low) and (high is None or place <= high)


def _place_at(bounds: Sequence[float], fraction: float) -> float:
    """The place below which this part of an equi-depth histogram lies."""
    position = min(1.0, max(0.0, fraction)) * (len(bounds) - 1)
    i = min(int(position), len(bounds) - 2)
    return bounds[i] + (bounds[i + 1] - bounds[i]) * (position - i)
