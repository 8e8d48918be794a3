"""The share of rows for which a condition is true, and how it was found.

Heavy hitters first, then the histogram, then conditions tried on the values that are known, then the guesses of
System R (Selinger et al., SIGMOD 1979), which are marked as assumed. Different attributes are taken as independent;
conditions on one attribute are taken together.
"""

from __future__ import annotations

import re

from core.algebra.notation import scalar_text
from core.algebra.scalars import (
    MIRRORED,
    And,
    Attribute,
    Call,
    Comparison,
    ComparisonOperator,
    InList,
    IsNull,
    IsTruth,
    Literal,
    Not,
    Or,
    Ref,
    Scalar,
    conjunction,
    conjuncts,
    refs,
)
from core.catalog.model import Evidence
from core.size.distribution import Distribution
from core.size.equalities import Share, Spread, equality_share, pair_line
from core.size.model import Line, figure, product_text, sum_text
from core.size.restrict import bound_of
from core.size.tried import tried, unwrapped
from core.size.values import constant, number, same_value

EQUAL_GUESS = 0.1
RANGE_GUESS = 1 / 3
BETWEEN_GUESS = 0.25
LIKE_GUESS = 0.1
UNKNOWN_GUESS = 1 / 3
_LOWER = (ComparisonOperator.GREATER, ComparisonOperator.AT_LEAST)
_UPPER = (ComparisonOperator.LESS, ComparisonOperator.AT_MOST)


def share_of(condition: Scalar, spread: Spread) -> Share:
    """The share of rows for which the condition is true."""
    terms = tuple(bound for term in conjuncts(condition) for bound in unwrapped(term))
    if not terms:
        return Share(1.0, (), Evidence.MEASURED)
    parts = [*_together(terms, spread)]
    taken = {id(term) for part in parts for term in part[0]}
    left = tuple(term for term in terms if id(term) not in taken)
    parts += [*_ranges(left, spread), *_equalities(left, spread)]
    taken = {id(term) for part in parts for term in part[0]}
    shares = [share for _, share in parts]
    shares += [_term(term, spread) for term in terms if id(term) not in taken]
    return _product(shares)


def _product(shares: list[Share]) -> Share:
    if len(shares) == 1:
        return shares[0]
    value = 1.0
    for share in shares:
        value *= share.value
    evidence = min(share.evidence for share in shares)
    lines = tuple(line for share in shares for line in share.lines)
    formula = product_text([share.value for share in shares])
    both = Line("all conditions together, taken as independent", formula, value, evidence, "System R 1979")
    return Share(value, (*lines, both), evidence)


def _line(text: str, formula: str, value: float, evidence: Evidence, source: str = "") -> Share:
    value = min(1.0, max(0.0, value))
    return Share(value, (Line(f"share of rows with {text}", formula, value, evidence, source),), evidence)


def _together(terms: tuple[Scalar, ...], spread: Spread) -> list[tuple[list[Scalar], Share]]:
    """Terms on one attribute of which every value is known: no independence is needed between them."""
    by_attribute: dict[Attribute, list[Scalar]] = {}
    for term in terms:
        read = refs(term)
        if len(read) == 1:
            by_attribute.setdefault(next(iter(read)), []).append(term)
    found = []
    for several in by_attribute.values():
        whole = conjunction(several)
        share = tried(whole, scalar_text(whole), spread, sample=False) if len(several) > 1 else None
        if share is not None:
            found.append((several, share))
    return found


def _equalities(terms: tuple[Scalar, ...], spread: Spread) -> list[tuple[list[Scalar], Share]]:
    """Equalities between attributes, taken together: they may cover a key, and one may follow from others."""
    found: list[Scalar] = []
    pairs = []
    for term in terms:
        match term:
            case Comparison(operator=ComparisonOperator.EQUAL, left=Ref(attribute=a), right=Ref(attribute=b)):
                if a in spread and b in spread and a != b:
                    found.append(term)
                    pairs.append((a, b))
    return [(found, equality_share(pairs, spread))] if len(pairs) > 1 else []


# --- bounds on one attribute ---------------------------------------------------------------------------------------


def _ranges(terms: tuple[Scalar, ...], spread: Spread) -> list[tuple[list[Scalar], Share]]:
    """Attributes that are bounded from both sides, each with its terms and the share between the bounds."""
    bounds: dict[Attribute, list[tuple[Scalar, ComparisonOperator, Scalar]]] = {}
    for term in terms:
        found = bound_of(term)
        if found is not None:
            bounds.setdefault(found[0], []).append((term, found[1], found[2]))
    result = []
    for attribute, several in bounds.items():
        lower = [b for b in several if b[1] in _LOWER]
        upper = [b for b in several if b[1] in _UPPER]
        if len(lower) == 1 and len(upper) == 1:
            result.append(([lower[0][0], upper[0][0]], _between(attribute, lower[0], upper[0], spread)))
    return result


def _between(
    attribute: Attribute,
    lower: tuple[Scalar, ComparisonOperator, Scalar],
    upper: tuple[Scalar, ComparisonOperator, Scalar],
    spread: Spread,
) -> Share:
    text = f"{scalar_text(lower[0])} and {scalar_text(upper[0])}"
    found = spread.get(attribute)
    low, high = constant(lower[2]), constant(upper[2])
    assert low is not None and high is not None
    if found is not None and found.evidence > Evidence.ASSUMED:
        above = found.share_below(low, lower[1] is ComparisonOperator.GREATER)
        below = found.share_below(high, upper[1] is ComparisonOperator.AT_MOST)
        if above is not None and below is not None:
            formula = f"max(0, {figure(below)} - {figure(above)})"
            value = max(0.0, below - above)
            return _line(text, formula, value, found.evidence, "histogram and heavy hitters")
    return _line(text, figure(BETWEEN_GUESS), BETWEEN_GUESS, Evidence.ASSUMED, "System R 1979")


# --- single terms --------------------------------------------------------------------------------------------------


def _term(term: Scalar, spread: Spread) -> Share:
    text = scalar_text(term)
    exact = tried(term, text, spread, sample=False)
    if exact is not None:
        return exact
    match term:
        case Literal(text=None):
            return _line(text, "0", 0.0, Evidence.MEASURED)
        case Literal(text=str(truth)):
            value = 1.0 if truth.lower() == "true" else 0.0
            return _line(text, figure(value), value, Evidence.MEASURED)
        case Comparison():
            return _comparison(term, text, spread)
        case InList(term=Ref(attribute=attribute), items=items):
            return _in_list(attribute, items, text, spread)
        case IsNull(term=Ref(attribute=attribute)):
            return _is_null(attribute, text, spread)
        case IsTruth(term=inner, value=value):
            return _term(inner if value else Not(inner), spread)
        case Or(terms=terms):
            return _disjunction(terms, text, spread)
        case And():
            return share_of(term, spread)
        case Not(term=inner):
            return _negation(inner, text, spread)
        case Call(name="like" | "ilike"):
            return _like(term, text, spread)
        case Ref(attribute=attribute):
            found = spread.get(attribute)
            if found is not None and found.heavy:
                share = found.share_of(True)
                return _line(text, figure(share), share, found.evidence, "heavy hitters")
        case _:
            pass
    sampled = tried(term, text, spread)
    if sampled is not None:
        return sampled
    if isinstance(term, IsNull):
        return _line(text, figure(EQUAL_GUESS), EQUAL_GUESS, Evidence.ASSUMED)
    return _line(text, figure(UNKNOWN_GUESS), UNKNOWN_GUESS, Evidence.ASSUMED, "no statistics say anything of this")


def _comparison(term: Comparison, text: str, spread: Spread) -> Share:
    left, right, operator = term.left, term.right, term.operator
    if not isinstance(left, Ref) or (constant(left) is not None):
        left, right, operator = right, left, MIRRORED[operator]
    value = constant(right)
    if isinstance(left, Ref) and left.attribute in spread and value is not None:
        return _against_constant(left.attribute, operator, right, text, spread)
    if isinstance(left, Ref) and isinstance(right, Ref):
        return _two_attributes(left.attribute, right.attribute, operator, text, spread)
    if isinstance(left, Ref) and left.attribute in spread and not refs(right) & set(spread):
        # An outer column or a parameter: some constant, not known which.
        found = spread[left.attribute]
        if operator in (ComparisonOperator.EQUAL, ComparisonOperator.NOT_DISTINCT):
            share = (1 - found.null_share) / max(1.0, found.distinct)
            formula = f"(1 - {figure(found.null_share)}) ÷ {figure(max(1.0, found.distinct))}"
            return _line(text, formula, share, found.evidence, "distinct count")
    sampled = tried(term, text, spread)
    if sampled is not None:
        return sampled
    if operator in (ComparisonOperator.EQUAL, ComparisonOperator.NOT_DISTINCT):
        sides = [_values_of(side, spread) for side in (left, right)]
        if all(sides):
            most = max(1.0, *(side for side in sides if side))
            return _line(text, f"1 ÷ {figure(most)}", 1 / most, Evidence.ASSUMED, "containment of value sets")
        return _line(text, figure(EQUAL_GUESS), EQUAL_GUESS, Evidence.ASSUMED, "System R 1979")
    if operator in (ComparisonOperator.UNEQUAL, ComparisonOperator.DISTINCT):
        return _line(text, f"1 - {figure(EQUAL_GUESS)}", 1 - EQUAL_GUESS, Evidence.ASSUMED, "System R 1979")
    return _line(text, figure(RANGE_GUESS), RANGE_GUESS, Evidence.ASSUMED, "System R 1979")


def _values_of(scalar: Scalar, spread: Spread) -> float | None:
    """The most distinct values of a computed term; None where it reads something unknown, or nothing."""
    read = refs(scalar)
    if not read or not read <= spread.keys():
        return None
    product = 1.0
    for attribute in read:
        product = min(product * max(1.0, spread[attribute].values), 1e15)
    return product


def _against_constant(
    attribute: Attribute, operator: ComparisonOperator, right: Scalar, text: str, spread: Spread
) -> Share:
    found, value = spread[attribute], constant(right)
    assert value is not None
    if operator in (ComparisonOperator.EQUAL, ComparisonOperator.NOT_DISTINCT):
        share = found.share_of(value)
        return _line(text, *_equal_formula(found, value, share), found.evidence, _equal_source(found))
    if operator in (ComparisonOperator.UNEQUAL, ComparisonOperator.DISTINCT):
        equal = found.share_of(value)
        null = found.null_share if operator is ComparisonOperator.UNEQUAL else 0.0
        formula = f"max(0, 1 - {figure(null)} - {figure(equal)})"
        return _line(text, formula, 1 - null - equal, found.evidence, _equal_source(found))
    place = number(value)
    if found.normal is not None and place is not None:
        return _of_normal(found, operator in _UPPER, place, text)
    inclusive = operator in (ComparisonOperator.AT_MOST, ComparisonOperator.GREATER)
    below = found.share_below(value, inclusive) if found.evidence > Evidence.ASSUMED else None
    if below is None:
        return _line(text, figure(RANGE_GUESS), RANGE_GUESS, Evidence.ASSUMED, "System R 1979")
    if operator in _UPPER:
        return _line(text, figure(below), below, found.evidence, "histogram and heavy hitters")
    formula = f"max(0, 1 - {figure(found.null_share)} - {figure(below)})"
    value = 1 - found.null_share - below
    return _line(text, formula, value, found.evidence, "histogram and heavy hitters")


def _of_normal(found: Distribution, upper: bool, place: float, text: str) -> Share:
    """The share of a computed figure below (or above) a place, the figure taken as normal.

    Page's formula for the pocket calculator, Applied Statistics 26(1) 1977: 1 / (1 + e^-(1.5976 z + 0.07056 z^3)).
    """
    assert found.normal is not None
    mean, deviation = found.normal
    if deviation <= 0:
        value = float(mean < place if upper else mean > place)
        return _line(text, figure(value), value, found.evidence, f"every group has {figure(mean)}")
    sign = 1 if upper else -1
    z = min(6.0, max(-6.0, sign * (place - mean) / deviation))
    inner = f"({figure(place)} - {figure(mean)})" if upper else f"({figure(mean)} - {figure(place)})"
    distance = Line("deviations from the mean", f"min(6, max(-6, {inner} ÷ {figure(deviation)}))", z, found.evidence)
    value = 1 / (1 + 2.718282 ** -(1.5976 * z + 0.07056 * z**3))
    shown = f"({figure(z)})" if z < 0 else figure(z)
    formula = f"1 ÷ (1 + 2.718282 ^ (0 - 1.5976 × {shown} - 0.07056 × {shown} ^ 3))"
    share = _line(text, formula, value, found.evidence, "taken as normal; Page 1977")
    return Share(share.value, (distance, *share.lines), share.evidence)


def _equal_formula(found: Distribution, value: object, share: float) -> tuple[str, float]:
    if any(same_value(known, value) for known, _ in found.heavy):  # type: ignore[arg-type]
        return figure(share), share
    if share == 0:
        return "0", 0.0
    rest, distinct = figure(found.rest_share), figure(max(1.0, found.rest_distinct))
    return f"{rest} ÷ {distinct}", share


def _equal_source(found: Distribution) -> str:
    return "heavy hitters" if found.heavy else "distinct count"


def _two_attributes(
    left: Attribute, right: Attribute, operator: ComparisonOperator, text: str, spread: Spread
) -> Share:
    a, b = spread.get(left), spread.get(right)
    known = [d for d in (a, b) if d is not None]
    evidence = min((d.evidence for d in known), default=Evidence.ASSUMED)
    if operator is ComparisonOperator.EQUAL and a is not None and b is not None and left != right:
        line = pair_line(left, right, spread)
        return Share(line.value, (line,), line.evidence)
    if operator in (ComparisonOperator.EQUAL, ComparisonOperator.NOT_DISTINCT) and known:
        most = max(1.0, *(d.distinct for d in known))
        present = 1.0
        for d in known:
            present *= 1 - d.null_share
        formula = f"{figure(present)} ÷ {figure(most)}"
        return _line(text, formula, present / most, evidence, "containment of value sets")
    if operator in (ComparisonOperator.UNEQUAL, ComparisonOperator.DISTINCT) and known:
        most = max(1.0, *(d.distinct for d in known))
        return _line(text, f"1 - 1 ÷ {figure(most)}", 1 - 1 / most, evidence, "containment of value sets")
    return _line(text, figure(RANGE_GUESS), RANGE_GUESS, Evidence.ASSUMED, "System R 1979")


def _in_list(attribute: Attribute, items: tuple[Scalar, ...], text: str, spread: Spread) -> Share:
    found = spread.get(attribute)
    values = {constant(item) for item in items} - {None}
    if found is None or found.evidence is Evidence.ASSUMED:
        share = min(0.5, len(values) * EQUAL_GUESS)
        return _line(text, f"min(0.5, {len(values)} × {EQUAL_GUESS})", share, Evidence.ASSUMED, "System R 1979")
    shares = [found.share_of(value) for value in sorted(values, key=str) if value is not None]
    return _line(text, f"min(1, {sum_text(shares) or 0})", sum(shares), found.evidence, _equal_source(found))


def _is_null(attribute: Attribute, text: str, spread: Spread) -> Share:
    found = spread.get(attribute)
    if found is None or found.evidence is Evidence.ASSUMED:
        return _line(text, figure(EQUAL_GUESS), EQUAL_GUESS, Evidence.ASSUMED)
    return _line(text, figure(found.null_share), found.null_share, found.evidence, "null share")


def _disjunction(terms: tuple[Scalar, ...], text: str, spread: Spread) -> Share:
    shares = [_term(term, spread) for term in terms]
    equal_only = {next(iter(refs(term))) for term in terms if _is_equality(term)}
    lines = tuple(line for share in shares for line in share.lines)
    evidence = min(share.evidence for share in shares)
    if len(equal_only) == 1 and all(_is_equality(term) for term in terms):
        value = min(1.0, sum(share.value for share in shares))
        formula = f"min(1, {sum_text([share.value for share in shares])})"
        total = Line(f"share of rows with {text}: the values exclude each other", formula, value, evidence)
        return Share(value, (*lines, total), evidence)
    rest = 1.0
    for share in shares:
        rest *= 1 - share.value
    formula = f"1 - {product_text([1 - share.value for share in shares])}"
    if len(shares) <= 6:
        formula = "1 - " + " × ".join(f"(1 - {figure(share.value)})" for share in shares)
    total = Line(f"share of rows with {text}, taken as independent", formula, 1 - rest, evidence, "System R 1979")
    return Share(1 - rest, (*lines, total), evidence)


def _is_equality(term: Scalar) -> bool:
    return (
        isinstance(term, Comparison)
        and term.operator is ComparisonOperator.EQUAL
        and isinstance(term.left, Ref)
        and constant(term.right) is not None
    )


def _negation(inner: Scalar, text: str, spread: Spread) -> Share:
    share = _term(inner, spread)
    null = 0.0
    if not isinstance(inner, (IsNull, IsTruth)):
        read = refs(inner)
        if len(read) == 1:
            found = spread.get(next(iter(read)))
            null = found.null_share if found is not None else 0.0
    value = max(0.0, 1 - null - share.value)
    formula = f"max(0, 1 - {figure(null)} - {figure(share.value)})"
    line = Line(f"share of rows with {text}", formula, value, share.evidence)
    return Share(value, (*share.lines, line), share.evidence)


def _like(term: Call, text: str, spread: Spread) -> Share:
    """LIKE over an attribute: a prefix by the histogram, another pattern tried on the known values, else a guess."""
    subject, pattern = term.arguments[0], constant(term.arguments[1]) if len(term.arguments) > 1 else None
    found = spread.get(subject.attribute) if isinstance(subject, Ref) else None
    if found is not None and isinstance(pattern, str):
        prefix, rest = _prefix(pattern)
        if prefix and rest == "%" and term.name == "like" and found.texts:
            low, high = found.share_below(prefix, False), found.share_below(prefix + "\U0010ffff", False)
            if low is not None and high is not None:
                # A prefix that falls within one bucket may hold anything up to that bucket: half of it is taken.
                least = 0.5 * found.rest_share / (len(found.texts) - 1) if found.heavy_share < high else 0.0
                value = max(least, high - low)
                formula = f"max({figure(least)}, {figure(high)} - {figure(low)})"
                return _line(text, formula, value, found.evidence, "histogram of the prefix")
    sampled = tried(term, text, spread)
    return sampled or _line(text, figure(LIKE_GUESS), LIKE_GUESS, Evidence.ASSUMED)


def _prefix(pattern: str) -> tuple[str, str]:
    """The text before the first wildcard of a LIKE pattern, and the rest."""
    prefix = re.split(r"[%_]", pattern, maxsplit=1)[0]
    return prefix, pattern[len(prefix) :]
