"""How many pairs of rows an equality between two attributes keeps, and several equalities together.

Heavy hitters meet heavy hitters one by one; the rest by containment of value sets within the range that both share:
1 / max(distinct). Equalities that cover a composite key meet one row of its relation, not a product of shares.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

from core.algebra.operators import Relation
from core.algebra.scalars import Attribute
from core.algebra.types import Family
from core.catalog.model import Evidence, RelationFacts, Value
from core.size.distribution import Distribution
from core.size.model import Line, figure, product_text
from core.size.values import same_value

Spread = Mapping[Attribute, Distribution]
Pair = tuple[Attribute, Attribute]
_SHOWN = 6


@dataclass(frozen=True, slots=True)
class Share:
    """A share of rows, with the lines that say how it was made."""

    value: float
    lines: tuple[Line, ...]
    evidence: Evidence


@dataclass(frozen=True, slots=True)
class Meeting:
    """How two attributes meet: the shares of both sides for each heavy value they share, and the rest."""

    heavy: tuple[tuple[Value, float, float], ...]
    rest_left: float
    rest_right: float
    most: float

    @property
    def rest(self) -> float:
        return self.rest_left * self.rest_right / self.most

    @property
    def share(self) -> float:
        return min(1.0, sum(a * b for _, a, b in self.heavy) + self.rest)

    @property
    def formula(self) -> str:
        products = [f"{figure(a)} × {figure(b)}" for _, a, b in self.heavy]
        if len(products) > _SHOWN:
            products = [figure(sum(a * b for _, a, b in self.heavy))]
        if self.rest > 0:
            left, right = figure(self.rest_left), figure(self.rest_right)
            ones = (self.rest_left == 1) + (self.rest_right == 1)
            top = "1" if ones == 2 else right if self.rest_left == 1 else left if ones else f"{left} × {right}"
            products.append(f"{top} ÷ {figure(self.most)}")
        return f"min(1, {' + '.join(products)})" if len(products) > 1 else products[0] if products else "0"

    @property
    def method(self) -> str:
        return "heavy hitters met one by one, the rest by containment" if self.heavy else "containment of value sets"


def meeting(left: Distribution, right: Distribution) -> Meeting:
    """How the rows of two attributes meet where the attributes are equal."""
    shared: list[tuple[Value, float, float]] = []
    # A heavy value of one side meets the other's heavy value, or an ordinary value's share of its rest.
    for value, share in left.heavy:
        partner = next((s for v, s in right.heavy if same_value(v, value)), None)
        if partner is not None:
            shared.append((value, share, partner))
    met_left, met_right = sum(a for _, a, _ in shared), sum(b for _, _, b in shared)
    rest_left = max(0.0, 1 - left.null_share - met_left)
    rest_right = max(0.0, 1 - right.null_share - met_right)
    inside_left, inside_right = _overlap(left, right)
    values_left = max(0.0, left.values - len(shared)) * inside_left
    values_right = max(0.0, right.values - len(shared)) * inside_right
    if min(values_left, values_right) < 0.5 or rest_left < 1e-12 or rest_right < 1e-12:
        return Meeting(tuple(shared), 0.0, 0.0, 1.0)
    return Meeting(
        tuple(shared), rest_left * inside_left, rest_right * inside_right, max(1.0, values_left, values_right)
    )


def _overlap(left: Distribution, right: Distribution) -> tuple[float, float]:
    """The parts of each side's ordinary values that lie within the range of the other."""
    if left.texts or right.texts or None in (left.low, left.high, right.low, right.high):
        return 1.0, 1.0
    assert left.low is not None and left.high is not None and right.low is not None and right.high is not None
    low, high = max(left.low, right.low), min(left.high, right.high)
    if low > high:
        return 0.0, 0.0
    return _inside(left, low, high), _inside(right, low, high)


def _inside(found: Distribution, low: float, high: float) -> float:
    assert found.low is not None and found.high is not None
    if found.low >= low and found.high <= high:
        return 1.0
    below, up_to = found.fraction_below(low), found.fraction_below(high)
    if below is None or up_to is None:
        return 1.0
    # Never nothing: the bounds themselves are values.
    return min(1.0, max(up_to - below, 1.0 / max(1.0, found.values)))


def pair_share(left: Distribution, right: Distribution) -> float:
    """The share of the product in which two attributes are equal."""
    return meeting(left, right).share


def met(left: Distribution, right: Distribution) -> tuple[tuple[Value, float], ...]:
    """Heavy hitters of the joined attribute: shares multiply, and are taken of what is left."""
    how = meeting(left, right)
    if how.share <= 0:
        return ()
    found = [(value, a * b / how.share) for value, a, b in how.heavy]
    known = [value for value, _, _ in how.heavy]
    for value, share in left.heavy:
        if how.rest > 0 and not any(same_value(value, v) for v in known):
            found.append((value, share * how.rest_right / how.most / how.share))
    scale = max(1.0, sum(share for _, share in found))
    return tuple(sorted(((value, share / scale) for value, share in found), key=lambda pair: -pair[1]))


def joined(left: Distribution, right: Distribution) -> tuple[Distribution, Distribution]:
    """Both attributes after a join or selection that equates them."""
    heavy = met(left, right)
    fewer, domain = min(left.distinct, right.distinct), min(left.values, right.values)
    low = max((v for v in (left.low, right.low) if v is not None), default=None)
    high = min((v for v in (left.high, right.high) if v is not None), default=None)

    def narrowed(own: Distribution, other: Distribution) -> Distribution:
        # The histogram of the side with fewer values is the one that is left.
        source = own if own.values <= other.values or not other.bounds else other
        return replace(
            own,
            distinct=fewer,
            domain=domain,
            null_share=0.0,
            heavy=heavy,
            bounds=source.bounds,
            texts=source.texts,
            samples=source.samples,
            low=low,
            high=high,
        )

    return narrowed(left, right), narrowed(right, left)


# --- several equalities together -------------------------------------------------------------------------------------


class _Classes:
    """Attributes that equalities make one (union by a map to the first)."""

    def __init__(self) -> None:
        self._head: dict[Attribute, Attribute] = {}

    def head(self, attribute: Attribute) -> Attribute:
        while self._head.get(attribute, attribute) != attribute:
            attribute = self._head[attribute]
        return attribute

    def unite(self, a: Attribute, b: Attribute) -> bool:
        """Whether they were apart until now."""
        first, second = self.head(a), self.head(b)
        if first == second:
            return False
        self._head[second] = first
        return True


def equality_share(pairs: Sequence[Pair], spread: Spread) -> Share:
    """The share of rows in which all the pairs are equal."""
    united, lines, value, level = _Classes(), [], 1.0, Evidence.MEASURED
    factors: list[float] = []
    for line, covered in _composites(pairs, spread):
        for a, b in covered:
            united.unite(a, b)
        lines.append(line)
    for a, b in pairs:
        if united.unite(a, b):
            lines.append(pair_line(a, b, spread))
    for line in lines:
        value *= line.value
        level = min(level, line.evidence)
        factors.append(line.value)
    if len(lines) > 1:
        lines.append(Line("the equalities together, taken as independent", product_text(factors), value, level))
    return Share(value, tuple(lines), level)


def pair_line(a: Attribute, b: Attribute, spread: Spread) -> Line:
    """The share of pairs in which two attributes of known distribution are equal."""
    left, right = spread[a], spread[b]
    how, level = meeting(left, right), min(left.evidence, right.evidence)
    return Line(f"share of pairs with {a.name} = {b.name}", how.formula, how.share, level, how.method)


def _composites(pairs: Sequence[Pair], spread: Spread) -> Iterable[tuple[Line, list[Pair]]]:
    """Groups of pairs that cover a composite key of one relation by attributes of another."""
    classes: dict[Attribute, set[Attribute]] = {}
    heads = _Classes()
    for a, b in pairs:
        heads.unite(a, b)
    for attribute in dict.fromkeys(a for pair in pairs for a in pair):
        classes.setdefault(heads.head(attribute), set()).add(attribute)
    owners: dict[Relation, RelationFacts] = {}
    holds: dict[tuple[Relation, str], Attribute] = {}
    for attribute in dict.fromkeys(a for pair in pairs for a in pair):
        origin = spread[attribute].origin
        if origin is not None:
            owners[origin.relation] = origin.facts
            holds.setdefault((origin.relation, origin.name.lower()), attribute)
    used = _Classes()
    for keyed, facts in owners.items():
        for names in facts.keys:
            own = [holds.get((keyed, name.lower())) for name in names]
            if len(names) < 2 or not facts.rows or None in own:
                continue
            for other in owners:
                covered = _covered([a for a in own if a is not None], other, keyed, classes, heads, spread)
                if covered is not None and all(used.head(a) != used.head(b) for a, b in covered):
                    line = _composite_line(facts, covered, spread)
                    if line is not None:
                        for a, b in covered:
                            used.unite(a, b)
                        yield line, covered


def _covered(
    own: Sequence[Attribute],
    other: Relation,
    keyed: Relation,
    classes: Mapping[Attribute, set[Attribute]],
    heads: _Classes,
    spread: Spread,
) -> list[Pair] | None:
    """For each key attribute the one of the other relation that is equated with it; None where one is missing."""
    if other is keyed:
        return None
    found = []
    for attribute in own:
        partners = sorted(
            a
            for a in classes[heads.head(attribute)]
            if (origin := spread[a].origin) is not None and origin.relation is other
        )
        if not partners:
            return None
        found.append((attribute, partners[0]))
    return found


def _composite_line(facts: RelationFacts, covered: Sequence[Pair], spread: Spread) -> Line | None:
    rows = float(facts.rows or 1)
    apart, level = 1.0, facts.rows_evidence
    present = 1.0
    for mine, theirs in covered:
        apart *= pair_share(spread[mine], spread[theirs])
        present *= 1 - spread[theirs].null_share
        level = min(level, spread[theirs].evidence)
    share = present / rows
    if share <= apart:
        return None
    names = ", ".join(mine.name for mine, _ in covered)
    text = f"share of pairs that agree on the key ({names}) of {facts.name}: one row of it has each"
    return Line(text, f"{figure(present)} ÷ {figure(rows)}", share, level, "key of the relation")


def ordered(attribute: Attribute) -> bool:
    """Whether values of the attribute's type have a place on the number line that histograms can use."""
    return attribute.type.family not in (Family.TEXT, Family.BINARY, Family.NESTED, Family.OTHER)
