"""Guaranteed ranges: bounds on rows that hold for every data set with the catalog's exact facts.

Row counts, keys, foreign keys over attributes that are never NULL, the largest number of rows a value has (degrees:
Cai, Balazinska, Suciu, SIGMOD 2019), distinct counts, limits.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from core.algebra.functions import volatile
from core.algebra.graph import attributes, free
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
    Recurrence,
    Relation,
    Select,
    SetKind,
    SetOperation,
    Sort,
    TableFunction,
    Unnest,
    Values,
    Window,
)
from core.algebra.scalars import (
    FALSE,
    TRUE,
    Attribute,
    Comparison,
    ComparisonOperator,
    Literal,
    Ref,
    Scalar,
    conjuncts,
    refs,
)
from core.algebra.typing import type_of
from core.catalog.model import Catalog
from core.derive.comparing import decides, one_value
from core.derive.facts import Facts
from core.derive.lineage import base_of


@dataclass(frozen=True, slots=True)
class Bounds:
    """`low`..`high` rows (None: unbounded). `degree`: the most rows that share a non-null value of an attribute.
    `distinct`: the most distinct values of an attribute, NULL counted as one. `reason` says what decided `high`."""

    low: int
    high: int | None
    degree: Mapping[Attribute, int] = field(default_factory=dict)
    distinct: Mapping[Attribute, int] = field(default_factory=dict)
    reason: str = ""


def least(*values: int | None) -> int | None:
    """The smallest bound; None is no bound."""
    known = [value for value in values if value is not None]
    return min(known) if known else None


def times(left: int | None, right: int | None) -> int | None:
    if left == 0 or right == 0:
        return 0
    return None if left is None or right is None else left * right


def plus(values: Iterable[int | None]) -> int | None:
    total = 0
    for value in values:
        if value is None:
            return None
        total += value
    return total


def bounds(operator: Operator, below: list[Bounds], facts: Facts) -> Bounds:
    """The bounds of an operator from those of its inputs. In a correlated part they hold for each outer row."""
    found = _own(operator, below, facts)
    properties = facts.of(operator)
    high, reason = found.high, found.reason
    if frozenset() in properties.keys and (high is None or high > 1):
        high, reason = 1, "at most one row"
    for key in properties.keys:
        product: int | None = 1
        for attribute in key:
            product = times(product, found.distinct.get(attribute))
        if key and product is not None and (high is None or product < high):
            high, reason = product, f"distinct values of the key ({', '.join(sorted(a.name for a in key))})"
    if properties.exactly_one:
        return Bounds(1, 1, found.degree, found.distinct, "exactly one row")
    low = found.low if high is None else min(found.low, high)
    degree = {a: d if high is None else min(d, high) for a, d in found.degree.items()}
    distinct = {a: d if high is None else min(d, high) for a, d in found.distinct.items()}
    for attribute in attributes(operator):
        if frozenset({attribute}) in properties.keys:
            degree[attribute] = 1
    return Bounds(low, high, degree, distinct, reason)


def _own(operator: Operator, below: list[Bounds], facts: Facts) -> Bounds:
    match operator:
        case Relation():
            return _relation(operator, facts.catalog)
        case Values(rows=rows):
            return Bounds(len(rows), len(rows), reason="written out")
        case TableFunction() | Recurrence():
            return Bounds(0, None, reason="nothing bounds it")
        case Select(condition=condition):
            return _select(below[0], condition, facts, operator)
        case Project(columns=columns):
            names = {c.attribute: c.value.attribute for c in columns if isinstance(c.value, Ref)}
            return _moved(below[0], names)
        case Join():
            return _join(operator, below[0], below[1], facts)
        case SetOperation():
            return _set_operation(operator, below)
        case Distinct():
            return _grouped(operator, below[0], attributes(operator))
        case Group(keys=keys, sets=sets):
            if sets is not None:
                return _grouping_sets(below[0], sets)
            return Bounds(1, 1, reason="one group") if not keys else _grouped(operator, below[0], keys)
        case Nest(keys=keys):
            return _grouped(operator, below[0], keys)
        case Divide(dividend=_):
            return Bounds(0, below[0].high, distinct=below[0].distinct, reason="no more than the dividend")
        case Window() | Sort():
            return below[0]
        case Limit():
            return _limit(operator, below[0])
        case Unnest(keep_empty=keep):
            return Bounds(below[0].low if keep else 0, None, reason="lists of unknown length")
        case Fixpoint():
            low = min(1, below[0].low) if operator.distinct else below[0].low
            return Bounds(low, None, reason="it may grow without bound")


def _relation(operator: Relation, catalog: Catalog) -> Bounds:
    facts = catalog.relation(operator.name)
    if facts is None or facts.rows is None or not facts.rows_exact:
        return Bounds(0, None, reason="no exact row count")
    degree, distinct = {}, {}
    for attribute in operator.attributes:
        known = facts.attribute(attribute.name)
        statistics = None if known is None else known.statistics
        if statistics is None:
            continue
        if statistics.largest_group is not None and "largest_group" in statistics.exact:
            degree[attribute] = statistics.largest_group
        if statistics.distinct is not None and "distinct" in statistics.exact:
            distinct[attribute] = statistics.distinct + (0 if known is not None and not known.nullable else 1)
    return Bounds(facts.rows, facts.rows, degree, distinct, "exact row count")


def _select(below: Bounds, condition: Scalar, facts: Facts, operator: Select) -> Bounds:
    if condition == TRUE:
        return below
    if condition == FALSE or (isinstance(condition, Literal) and condition.text is None):
        return Bounds(0, 0, below.degree, below.distinct, "the condition is never true")
    high, reason = below.high, below.reason
    distinct = dict(below.distinct)
    for term in conjuncts(condition):
        match term:
            case Comparison(operator=ComparisonOperator.EQUAL, left=left, right=right):
                own = set(attributes(operator.input))
                for side, other in ((left, right), (right, left)):
                    if not isinstance(side, Ref) or side.attribute not in own or _reads(other, own):
                        continue
                    if decides(type_of(other), side.attribute.type) and not volatile(other):
                        distinct[side.attribute] = 1
                        degree = below.degree.get(side.attribute)
                        if degree is not None and (high is None or degree < high):
                            high, reason = degree, f"the most rows one value of {side.attribute.name} has"
    return Bounds(0, high, below.degree, distinct, reason)


def _reads(scalar: Scalar, own: set[Attribute]) -> bool:
    return bool(refs(scalar) & own)


def _moved(below: Bounds, names: Mapping[Attribute, Attribute]) -> Bounds:
    degree = {new: below.degree[old] for new, old in names.items() if old in below.degree}
    distinct = {new: below.distinct[old] for new, old in names.items() if old in below.distinct}
    return Bounds(below.low, below.high, degree, distinct, below.reason)


def equalities(condition: Scalar, left: set[Attribute], right: set[Attribute]) -> list[tuple[Attribute, Attribute]]:
    """The pairs of attributes (left, right) that a join condition equates, value for value."""
    pairs = []
    for term in conjuncts(condition):
        match term:
            case Comparison(operator=ComparisonOperator.EQUAL, left=Ref(attribute=a), right=Ref(attribute=b)):
                if not one_value(a.type, b.type):
                    continue
                if a in left and b in right:
                    pairs.append((a, b))
                elif b in left and a in right:
                    pairs.append((b, a))
    return pairs


def _join(operator: Join, left: Bounds, right: Bounds, facts: Facts) -> Bounds:
    kind = operator.kind
    if kind in (JoinKind.SEMI, JoinKind.ANTI):
        if kind is JoinKind.SEMI and left.high is not None and always_matched(operator, facts):
            return left
        return Bounds(0, left.high, left.degree, left.distinct, left.reason)
    if kind is JoinKind.MARK:
        return left
    if kind is JoinKind.SINGLE:
        return Bounds(left.low, left.high, left.degree, {**left.distinct}, left.reason)
    to_right, to_left = _partners(operator, left, right, facts)
    inner = _inner(operator, left, right, to_right, to_left, facts)
    if kind is JoinKind.INNER:
        return inner
    padded = {a: d + 1 for a, d in {**left.distinct, **right.distinct}.items()}
    reason = "matched rows, and the rows kept without a partner"
    if kind is JoinKind.LEFT:
        high, degree = _kept(left, right, to_right, to_left)
        return Bounds(max(inner.low, left.low), high, degree, padded, reason)
    if kind is JoinKind.RIGHT:
        high, degree = _kept(right, left, to_left, to_right)
        return Bounds(max(inner.low, right.low), high, degree, padded, reason)
    high = plus((_kept(left, right, to_right, to_left)[0], right.high))
    return Bounds(max(inner.low, left.low, right.low), high, {}, padded, reason)


def _kept(
    side: Bounds, other: Bounds, partners: int | None, back: int | None
) -> tuple[int | None, dict[Attribute, int]]:
    """Rows of a join that keeps one side: each of its rows comes once, or once for each partner."""
    most = None if partners is None else max(1, partners)
    high = least(times(side.high, most), plus((times(other.high, back), side.high)))
    degree = {} if most is None else {a: d * most for a, d in side.degree.items()}
    if back is not None:
        degree.update({a: d * back for a, d in other.degree.items()})
    return high, degree


def _partners(operator: Join, left: Bounds, right: Bounds, facts: Facts) -> tuple[int | None, int | None]:
    """The most right rows that one left row meets, and the most left rows that one right row meets."""
    pairs = equalities(operator.condition, set(attributes(operator.left)), set(attributes(operator.right)))
    to_right, to_left = right.high, left.high
    for mine, theirs in pairs:
        to_right = least(to_right, right.degree.get(theirs))
        to_left = least(to_left, left.degree.get(mine))
    if facts.is_key(operator.right, [*(t for _, t in pairs), *_fixed(facts, operator.right)]):
        to_right = least(to_right, 1)
    # A dependent right side is another relation for each left row: nothing follows for the way back.
    if free(operator.right):
        return to_right, left.high
    if facts.is_key(operator.left, [*(m for m, _ in pairs), *_fixed(facts, operator.left)]):
        to_left = least(to_left, 1)
    return to_right, to_left


def _inner(
    operator: Join, left: Bounds, right: Bounds, partners_right: int | None, partners_left: int | None, facts: Facts
) -> Bounds:
    high, reason = times(left.high, right.high), "the product of both sides"
    for count, partners, text in (
        (left.high, partners_right, "each left row meets at most {} right rows"),
        (None if free(operator.right) else right.high, partners_left, "each right row meets at most {} left rows"),
    ):
        product = times(count, partners)
        if product is not None and (high is None or product < high):
            high, reason = product, text.format(partners)
    degree = {x: d * partners_right for x, d in left.degree.items()} if partners_right is not None else {}
    if partners_left is not None and not free(operator.right):
        degree.update({x: d * partners_left for x, d in right.degree.items()})
    low = left.low if always_matched(operator, facts) else 0
    if low == 0 and operator.condition == TRUE:
        low = left.low * right.low
    return Bounds(low, high, degree, {**left.distinct, **right.distinct}, reason)


def _fixed(facts: Facts, operator: Operator) -> frozenset[Attribute]:
    return facts.of(operator).constants


def always_matched(operator: Join, facts: Facts) -> bool:
    """Whether a declared foreign key gives every left row a partner: the right side is all of the relation it names."""
    whole = _whole_relation(operator.right)
    if whole is None:
        return False
    relation, names = whole
    a, b = set(attributes(operator.left)), set(attributes(operator.right))
    pairs = equalities(operator.condition, a, b)
    if not pairs or len(pairs) != len(conjuncts(operator.condition)):
        return False
    bases = base_of(operator.left)
    sure = facts.of(operator.left).never_null
    origins = [(bases.get(mine), names.get(theirs)) for mine, theirs in pairs]
    if any(origin is None or target is None for origin, target in origins) or not {m for m, _ in pairs} <= sure:
        return False
    relations = {origin[0] for origin, _ in origins if origin is not None}
    if len(relations) != 1:
        return False
    source = facts.catalog.relation(next(iter(relations)).name)
    wanted = {(o[1].name.lower(), t.name.lower()) for o, t in origins if o is not None and t is not None}
    for key in source.foreign_keys if source is not None else ():
        declared = {(m.lower(), t.lower()) for m, t in zip(key.attributes, key.target, strict=True)}
        if key.relation.lower() == relation.name.lower() and declared == wanted:
            return True
    return False


def _whole_relation(operator: Operator) -> tuple[Relation, dict[Attribute, Attribute]] | None:
    """A relation with all its rows, perhaps projected or renamed; and what its attributes are called."""
    names: dict[Attribute, Attribute] | None = None
    while isinstance(operator, (Project, Sort)):
        if isinstance(operator, Project):
            step = {c.attribute: c.value.attribute for c in operator.columns if isinstance(c.value, Ref)}
            names = step if names is None else {new: step[old] for new, old in names.items() if old in step}
        operator = operator.input
    if not isinstance(operator, Relation):
        return None
    return operator, names if names is not None else {a: a for a in operator.attributes}


def _set_operation(operator: SetOperation, below: list[Bounds]) -> Bounds:
    lows, highs = [b.low for b in below], [b.high for b in below]
    match operator.kind, operator.distinct:
        case SetKind.UNION, False:
            found = Bounds(sum(lows), plus(highs), reason="the sum of the inputs")
        case SetKind.UNION, True:
            found = Bounds(min(1, max(lows)), plus(highs), reason="the sum of the inputs")
        case SetKind.INTERSECT, _:
            found = Bounds(0, least(*highs), reason="the smaller input")
        case SetKind.EXCEPT, False:
            sure = 0 if highs[1] is None else max(0, lows[0] - highs[1])
            found = Bounds(sure, highs[0], reason="no more than the left input")
        case _:
            found = Bounds(0, highs[0], reason="no more than the left input")
    distinct: dict[Attribute, int] = {}
    for i, attribute in enumerate(operator.attributes):
        counts = [b.distinct.get(source[i]) for b, source in zip(below, operator.sources, strict=True)]
        total = plus(counts) if operator.kind is SetKind.UNION else counts[0]
        if total is not None:
            distinct[attribute] = total
    return Bounds(found.low, found.high, {}, distinct, found.reason)


def _grouped(operator: Operator, below: Bounds, keys: tuple[Attribute, ...]) -> Bounds:
    product: int | None = 1
    for key in keys:
        product = times(product, below.distinct.get(key))
    high, reason = below.high, "no more groups than rows"
    if product is not None and (high is None or product < high):
        high, reason = product, "the product of the keys' distinct values"
    distinct = {key: below.distinct[key] for key in keys if key in below.distinct}
    degree = {key: below.degree[key] for key in keys if key in below.degree}
    return Bounds(min(1, below.low), high, degree, distinct, reason)


def _grouping_sets(below: Bounds, sets: tuple[tuple[Attribute, ...], ...]) -> Bounds:
    whole = sum(1 for part in sets if not part)
    return Bounds(whole, plus(1 if not part else below.high for part in sets), reason="groups of every grouping set")


def _limit(operator: Limit, below: Bounds) -> Bounds:
    count = _whole_number(operator.count)
    offset = _whole_number(operator.offset) if operator.offset is not None else 0
    low = 0 if offset is None else max(0, below.low - offset)
    high = below.high if offset is None or below.high is None else max(0, below.high - offset)
    if operator.count is None:
        return Bounds(low, high, below.degree, below.distinct, below.reason)
    if count is None:
        return Bounds(0, high, below.degree, below.distinct, below.reason)
    reason = "the limit" if high is None or count < high else below.reason
    limited = high if operator.with_ties else least(count, high)
    return Bounds(min(low, count), limited, below.degree, below.distinct, reason)


def _whole_number(scalar: Scalar | None) -> int | None:
    if isinstance(scalar, Literal) and scalar.text is not None and scalar.text.isdigit():
        return int(scalar.text)
    return None
