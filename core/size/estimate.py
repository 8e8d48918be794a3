"""Estimates of every operator's rows and of the values in its columns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from core.algebra.graph import attributes, dependent, inputs
from core.algebra.notation import name_of
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
    Attribute,
    Comparison,
    ComparisonOperator,
    Literal,
    Ref,
    Scalar,
    conjunction,
    conjuncts,
)
from core.algebra.types import assumed_bytes
from core.algebra.typing import type_of
from core.catalog.model import Catalog, Evidence, Value
from core.size.distribution import Distribution, base_distribution, groups, remaining_distinct, thinned
from core.size.guarantee import equalities
from core.size.model import Line
from core.size.selectivity import RANGE_GUESS, Share, figure, share_of

ASSUMED_ROWS = 1000.0
"""Rows of a relation of which nothing is known."""

Spread = dict[Attribute, Distribution]


@dataclass(frozen=True, slots=True)
class Estimate:
    """Rows, the spread of each attribute, and the lines that led there."""

    rows: float
    spread: Mapping[Attribute, Distribution]
    evidence: Evidence
    lines: tuple[Line, ...] = ()


def estimate(operator: Operator, below: list[Estimate], catalog: Catalog, known: Mapping[Operator, Estimate]) -> Estimate:
    """The estimate of an operator from those of its inputs. In a correlated part it is for one outer row.

    `known` holds the estimates of everything below.
    """
    match operator:
        case Relation():
            return _relation(operator, catalog)
        case Values(rows=rows):
            count = float(len(rows))
            return Estimate(count, _fresh_spread(operator, count), Evidence.MEASURED, (_line("rows written out", figure(count), count),))
        case TableFunction() | Recurrence():
            line = Line(f"rows of a {name_of(operator)}: nothing is known", figure(ASSUMED_ROWS), ASSUMED_ROWS, Evidence.ASSUMED)
            return Estimate(ASSUMED_ROWS, _fresh_spread(operator, ASSUMED_ROWS), Evidence.ASSUMED, (line,))
        case Select(condition=condition):
            return _selected(below[0], share_of(condition, below[0].spread), "rows in")
        case Project():
            return _project(operator, below[0])
        case Join():
            return _join(operator, below[0], below[1], known)
        case SetOperation():
            return _set_operation(operator, below)
        case Distinct():
            return _grouped(operator, attributes(operator), below[0])
        case Group(keys=keys):
            return _group(operator, keys, below[0])
        case Nest(keys=keys):
            return _grouped(operator, keys, below[0])
        case Divide():
            return _divide(operator, below)
        case Window():
            spread = {**below[0].spread, **_fresh_spread(operator, below[0].rows, only=tuple(c.attribute for c in operator.columns))}
            return Estimate(below[0].rows, spread, below[0].evidence, (_same(below[0]),))
        case Sort():
            return replace(below[0], lines=(_same(below[0]),))
        case Limit():
            return _limit(operator, below[0])
        case Unnest():
            return _unnest(operator, below[0])
        case Fixpoint():
            return _fixpoint(operator, below)


def _line(text: str, formula: str, value: float, evidence: Evidence = Evidence.MEASURED, source: str = "") -> Line:
    return Line(text, formula, value, evidence, source)


def _same(found: Estimate) -> Line:
    return Line("as many rows as come in", figure(found.rows), found.rows, found.evidence)


def _fresh_spread(operator: Operator, rows: float, only: tuple[Attribute, ...] | None = None) -> Spread:
    """Distributions of attributes of which nothing is known."""
    own = attributes(operator) if only is None else only
    return {a: Distribution(max(1.0, rows / 10), width=float(assumed_bytes(a.type))) for a in own}


def _relation(operator: Relation, catalog: Catalog) -> Estimate:
    facts = catalog.relation(operator.name)
    if facts is None or facts.rows is None:
        text = f"{operator.name}: no row count in the catalog"
        line = Line(text, figure(ASSUMED_ROWS), ASSUMED_ROWS, Evidence.ASSUMED)
        spread = {a: base_distribution(None if facts is None else facts.attribute(a.name), a.type, ASSUMED_ROWS) for a in operator.attributes}
        return Estimate(ASSUMED_ROWS, spread, Evidence.ASSUMED, (line,))
    rows = float(facts.rows)
    when = f", {facts.as_of.isoformat()}" if facts.as_of is not None else ""
    line = Line(f"rows of {operator.name}", figure(rows), rows, facts.rows_evidence, f"{facts.source}{when}")
    spread = {a: base_distribution(facts.attribute(a.name), a.type, rows) for a in operator.attributes}
    return Estimate(rows, spread, facts.rows_evidence, (line,))


def _selected(below: Estimate, share: Share, text: str) -> Estimate:
    rows = below.rows * share.value
    evidence = min(below.evidence, share.evidence)
    total = Line(f"{text} × share kept", f"{figure(below.rows)} × {figure(share.value)}", rows, evidence)
    spread = {a: thinned(d, below.rows, share.value) for a, d in below.spread.items()}
    return Estimate(rows, spread, evidence, (*share.lines, total))


def _project(operator: Project, below: Estimate) -> Estimate:
    spread: Spread = {}
    for column in operator.columns:
        if isinstance(column.value, Ref) and column.value.attribute in below.spread:
            spread[column.attribute] = below.spread[column.value.attribute]
        elif isinstance(column.value, Literal):
            spread[column.attribute] = Distribution(1.0, width=float(assumed_bytes(type_of(column.value))))
        else:
            read = [below.spread[a].distinct for a in _refs(column.value) if a in below.spread]
            product = 1.0
            for count in read:
                product = min(product * max(1.0, count), 1e15)
            most = min(product if read else 1.0, max(1.0, below.rows))
            spread[column.attribute] = Distribution(most, width=float(assumed_bytes(type_of(column.value))))
    return Estimate(below.rows, spread, below.evidence, (_same(below),))


def _refs(value: object) -> frozenset[Attribute]:
    from core.algebra.scalars import Node, refs

    return refs(value) if isinstance(value, Node) else frozenset()


# --- joins ---------------------------------------------------------------------------------------------------------


def pair_share(left: Distribution, right: Distribution) -> float:
    """The share of the product in which two attributes are equal.

    Heavy hitters meet heavy hitters exactly; the rest by containment of value sets: 1 / max(distinct).
    """
    both = 0.0
    right_heavy = list(right.heavy)
    met_left = met_right = 0.0
    from core.size.values import same_value

    for value, share in left.heavy:
        partner = next((s for v, s in right_heavy if same_value(v, value)), None)
        if partner is not None:
            both += share * partner
            met_left += share
            met_right += partner
    rest_left, rest_right = 1 - left.null_share - met_left, 1 - right.null_share - met_right
    matched = sum(1 for v, _ in left.heavy if any(same_value(v, w) for w, _ in right_heavy))
    most = max(left.distinct, right.distinct) - matched
    if most >= 0.5 and rest_left > 0 and rest_right > 0:
        both += rest_left * rest_right / max(1.0, most) * _overlap(left, right)
    return min(1.0, both)


def _overlap(left: Distribution, right: Distribution) -> float:
    """How much of the side with fewer values lies within the other's range: 1 unless the ranges are known to part."""
    if None in (left.low, left.high, right.low, right.high):
        return 1.0
    assert left.low is not None and left.high is not None and right.low is not None and right.high is not None
    if left.high < right.low or right.high < left.low:
        return 0.0
    return 1.0


def _equal_share(operator: Join, left: Estimate, right: Estimate) -> tuple[Share | None, list[tuple[Attribute, Attribute]]]:
    pairs = equalities(operator.condition, set(attributes(operator.left)), set(attributes(operator.right)))
    if not pairs:
        return None, pairs
    lines, value, evidence = [], 1.0, Evidence.MEASURED
    for mine, theirs in pairs:
        a, b = left.spread[mine], right.spread[theirs]
        share = pair_share(a, b)
        level = min(a.evidence, b.evidence)
        evidence = min(evidence, level)
        value *= share
        simple = not a.heavy or not b.heavy
        present = (1 - a.null_share) * (1 - b.null_share)
        formula = f"{figure(present)} ÷ {figure(max(1.0, a.distinct, b.distinct))}" if simple else figure(share)
        if simple and abs(present / max(1.0, a.distinct, b.distinct) - share) > 1e-9 * max(share, 1e-300):
            formula = figure(share)
        method = "containment of value sets" if simple else "heavy hitters met one by one, the rest by containment"
        lines.append(Line(f"share of pairs with {mine.name} = {theirs.name}", formula, share, level, method))
    if len(pairs) > 1:
        floor = 1 / max(1.0, left.rows, right.rows)
        if value < floor:
            # Several equalities are mostly one composite key: independence would make almost nothing of it.
            text = "several equalities together: no rarer than one partner a row"
            lines.append(Line(text, f"1 ÷ {figure(max(1.0, left.rows, right.rows))}", floor, evidence))
            value = floor
        else:
            formula = " × ".join(figure(line.value) for line in lines)
            lines.append(Line("the equalities together, taken as independent", formula, value, evidence))
    return Share(value, tuple(lines), evidence), pairs


def _join(operator: Join, left: Estimate, right: Estimate, known: Mapping[Operator, Estimate]) -> Estimate:
    spread: Spread = {**left.spread, **right.spread}
    equal, pairs = _equal_share(operator, left, right)
    equated = {frozenset(pair) for pair in pairs}
    others = [t for t in conjuncts(operator.condition) if not _is_pair(t, equated)]
    rest = share_of(conjunction(others), spread) if others else None
    shares = [share for share in (equal, rest) if share is not None]
    value, evidence = 1.0, min(left.evidence, right.evidence)
    for share in shares:
        value *= share.value
        evidence = min(evidence, share.evidence)
    lines = tuple(line for share in shares for line in share.lines)
    kind = operator.kind
    if kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK, JoinKind.SINGLE):
        return _half_join(operator, left, right, pairs, value, evidence, lines, known)
    product = left.rows * right.rows
    formula = " × ".join([figure(left.rows), figure(right.rows), *(figure(share.value) for share in shares)])
    text = "left rows × right rows" + (" × share of pairs kept" if shares else "")
    rows = product * value
    lines = (*lines, Line(text, formula, rows, evidence))
    found = Estimate(rows, _joined_spread(spread, pairs, left, right, rows), evidence, lines)
    if kind is JoinKind.INNER:
        return found
    return _outer(kind, found, left, right, pairs)


def _is_pair(term: object, equated: set[frozenset[Attribute]]) -> bool:
    return (
        isinstance(term, Comparison)
        and term.operator is ComparisonOperator.EQUAL
        and isinstance(term.left, Ref)
        and isinstance(term.right, Ref)
        and frozenset({term.left.attribute, term.right.attribute}) in equated
    )


def _joined_spread(
    spread: Spread, pairs: list[tuple[Attribute, Attribute]], left: Estimate, right: Estimate, rows: float
) -> Spread:
    """Distinct counts after a join: of the join attributes the smaller side's, of the others no more than rows."""
    found = {a: replace(d, distinct=max(min(d.distinct, rows), min(1.0, rows))) for a, d in spread.items()}
    for mine, theirs in pairs:
        a, b = left.spread[mine], right.spread[theirs]
        fewer = min(found[mine].distinct, found[theirs].distinct)
        heavy = _met(a, b)
        for attribute, own in ((mine, a), (theirs, b)):
            found[attribute] = replace(own, distinct=fewer, null_share=0.0, heavy=heavy)
    return found


def _met(left: Distribution, right: Distribution) -> tuple[tuple[Value, float], ...]:
    """Heavy hitters of the joined attribute: shares multiply, and are taken of what is left."""
    from core.size.values import same_value

    total = pair_share(left, right)
    if total <= 0:
        return ()
    found = []
    for value, share in left.heavy:
        partner = next((s for v, s in right.heavy if same_value(v, value)), None)
        if partner is not None:
            found.append((value, share * partner / total))
        elif right.rest_distinct >= 0.5:
            found.append((value, share * right.rest_share / max(1.0, right.rest_distinct) / total))
    scale = max(1.0, sum(share for _, share in found))
    return tuple((value, share / scale) for value, share in found)


def _matching(left: Estimate, right: Estimate, pairs: list[tuple[Attribute, Attribute]], share: float) -> tuple[float, str, str]:
    """The share of left rows that find a partner, with its formula and method."""
    if pairs:
        best, formula = 1.0, "1"
        for mine, theirs in pairs:
            a, b = left.spread[mine], right.spread[theirs]
            have = min(1.0, b.distinct / max(1.0, a.distinct)) * (1 - a.null_share)
            if have <= best:
                best = have
                formula = f"min(1, {figure(b.distinct)} ÷ {figure(max(1.0, a.distinct))}) × {figure(1 - a.null_share)}"
        return best, formula, "containment of value sets"
    partners = right.rows * share
    return min(1.0, partners), f"min(1, {figure(right.rows)} × {figure(share)})", "expected partners a row"


def _correlated(
    operator: Join, left: Estimate, right: Estimate, known: Mapping[Operator, Estimate]
) -> tuple[float, str, str] | None:
    """The share of left rows with a partner where the right side equates its attributes with the left row's."""
    outer = dependent(operator)
    found: tuple[float, str, str] | None = None
    pending: list[Operator] = [operator.right] if outer else []
    while pending:
        part = pending.pop()
        if isinstance(part, Select):
            for term in conjuncts(part.condition):
                have = _equated(term, outer, left, known[part.input], right.rows)
                if have is not None and (found is None or have[0] < found[0]):
                    found = have
        if isinstance(part, (Select, Project, Join)):
            pending.extend(inputs(part))
    return found


def _equated(
    term: Scalar, outer: frozenset[Attribute], left: Estimate, inner: Estimate, partners: float
) -> tuple[float, str, str] | None:
    match term:
        case Comparison(operator=ComparisonOperator.EQUAL, left=Ref(attribute=a), right=Ref(attribute=b)):
            mine, theirs = (a, b) if a in outer else (b, a)
            if mine not in outer or theirs not in inner.spread or mine not in left.spread:
                return None
            own, other = left.spread[mine], inner.spread[theirs]
            kept = min(1.0, partners * max(1.0, other.distinct) / max(inner.rows, 1e-9))
            values = remaining_distinct(other.distinct, inner.rows, kept)
            have = min(1.0, values / max(1.0, own.distinct)) * (1 - own.null_share)
            formula = f"min(1, {figure(values)} ÷ {figure(max(1.0, own.distinct))}) × {figure(1 - own.null_share)}"
            return have, formula, "containment of value sets"
    return None


def _half_join(
    operator: Join,
    left: Estimate,
    right: Estimate,
    pairs: list[tuple[Attribute, Attribute]],
    share: float,
    evidence: Evidence,
    lines: tuple[Line, ...],
    known: Mapping[Operator, Estimate],
) -> Estimate:
    if operator.kind in (JoinKind.MARK, JoinKind.SINGLE):
        spread = {**left.spread}
        if operator.kind is JoinKind.SINGLE:
            spread.update(right.spread)
        elif operator.mark is not None:
            spread[operator.mark] = Distribution(2.0, width=1.0)
        return Estimate(left.rows, spread, left.evidence, (_same(left),))
    have, formula, method = _correlated(operator, left, right, known) or _matching(left, right, pairs, share)
    first = Line("share of left rows with a partner", formula, have, evidence, method)
    kept = have if operator.kind is JoinKind.SEMI else 1 - have
    text = "left rows × share with a partner" if operator.kind is JoinKind.SEMI else "left rows × share without a partner"
    shown = figure(kept) if operator.kind is JoinKind.SEMI else f"(1 - {figure(have)})"
    rows = left.rows * kept
    total = Line(text, f"{figure(left.rows)} × {shown}", rows, evidence)
    own = lines if not pairs else ()
    spread = {a: thinned(d, left.rows, kept) for a, d in left.spread.items()}
    return Estimate(rows, spread, evidence, (*own, first, total))


def _outer(
    kind: JoinKind, inner: Estimate, left: Estimate, right: Estimate, pairs: list[tuple[Attribute, Attribute]]
) -> Estimate:
    rows, lines, spread = inner.rows, list(inner.lines), dict(inner.spread)
    share = inner.rows / max(1e-9, left.rows * right.rows)
    sides = []
    if kind in (JoinKind.LEFT, JoinKind.FULL):
        sides.append((left, right, pairs, "left"))
    if kind in (JoinKind.RIGHT, JoinKind.FULL):
        sides.append((right, left, [(b, a) for a, b in pairs], "right"))
    for kept, other, turned, name in sides:
        have, formula, method = _matching(kept, other, turned, share)
        lonely = kept.rows * (1 - have)
        text = f"{name} rows without a partner"
        lines.append(Line(text, f"{figure(kept.rows)} × (1 - {formula})", lonely, inner.evidence, method))
        rows += lonely
    floor = max(side[0].rows for side in sides)
    terms = " + ".join(figure(line.value) for line in [inner.lines[-1], *lines[len(inner.lines) :]])
    rows = max(rows, floor)
    lines.append(Line("matched and unmatched rows, no fewer than the side kept", f"max({figure(floor)}, {terms})", rows, inner.evidence))
    for kept, other, _, _ in sides:
        spread.update({a: d for a, d in kept.spread.items()})
        lonely_share = max(0.0, 1 - inner.rows / max(rows, 1e-9))
        for a in other.spread:
            if a not in kept.spread:
                spread[a] = replace(spread[a], null_share=max(spread[a].null_share, lonely_share))
    return Estimate(rows, spread, inner.evidence, tuple(lines))


# --- the others ----------------------------------------------------------------------------------------------------


def _grouped(operator: Operator, keys: tuple[Attribute, ...], below: Estimate) -> Estimate:
    combinations, evidence, parts = 1.0, below.evidence, []
    for key in keys:
        found = below.spread[key]
        count = max(1.0, found.distinct + (1 if found.null_share > 0 else 0))
        combinations = min(combinations * count, 1e15)
        evidence = min(evidence, found.evidence)
        parts.append(figure(count))
    rows = min(groups(combinations, below.rows), below.rows)
    product = Line("combinations of key values", " × ".join(parts) or "1", combinations, evidence)
    m, n = figure(combinations), figure(below.rows)
    formula = f"min({n}, {m} × (1 - (1 - 1 ÷ {m}) ^ {n}))" if 1 < combinations <= 1e12 else f"min({n}, {m})"
    total = Line("groups that rows falling at random leave non-empty", formula, rows, evidence, "Cardenas 1975")
    spread = {a: replace(d, distinct=min(d.distinct, max(1.0, rows)), heavy=(), bounds=d.bounds) for a, d in below.spread.items() if a in keys}
    for attribute in attributes(operator):
        spread.setdefault(attribute, Distribution(max(1.0, rows / 2), width=float(assumed_bytes(attribute.type))))
    return Estimate(rows, spread, evidence, (product, total))


def _group(operator: Group, keys: tuple[Attribute, ...], below: Estimate) -> Estimate:
    if operator.sets is not None:
        parts = [_grouped(operator, part, below) if part else None for part in operator.sets]
        rows = sum(1.0 if part is None else part.rows for part in parts)
        evidence = min((part.evidence for part in parts if part is not None), default=below.evidence)
        formula = " + ".join(figure(1.0 if part is None else part.rows) for part in parts)
        spread = {k: v for part in parts if part is not None for k, v in part.spread.items()}
        spread = {**_fresh_spread(operator, rows), **spread}
        return Estimate(rows, spread, evidence, (Line("groups of every grouping set", formula, rows, evidence),))
    if not keys:
        spread = {a: Distribution(1.0, width=float(assumed_bytes(a.type))) for a in attributes(operator)}
        return Estimate(1.0, spread, Evidence.MEASURED, (_line("one group of all rows", "1", 1.0),))
    return _grouped(operator, keys, below)


def _set_operation(operator: SetOperation, below: list[Estimate]) -> Estimate:
    evidence = min(part.evidence for part in below)
    spread: Spread = {}
    for i, attribute in enumerate(operator.attributes):
        own = [part.spread[source[i]] for part, source in zip(below, operator.sources, strict=True)]
        total = max(1e-9, sum(part.rows for part in below))
        nulls = sum(d.null_share * part.rows for d, part in zip(own, below, strict=True)) / total
        spread[attribute] = Distribution(max(d.distinct for d in own), nulls, width=max(d.width for d in own), evidence=min(d.evidence for d in own))
    rows = [part.rows for part in below]
    if operator.kind is SetKind.UNION:
        value, formula = sum(rows), " + ".join(figure(r) for r in rows)
        lines: tuple[Line, ...] = (Line("the inputs' rows together", formula, value, evidence),)
        if operator.distinct:
            merged = Estimate(value, spread, evidence)
            grouped = _grouped(operator, operator.attributes, merged)
            return replace(grouped, lines=(*lines, *grouped.lines))
    elif operator.kind is SetKind.INTERSECT:
        value = min(rows) / 2
        lines = (Line("half of the smaller input", f"min({', '.join(figure(r) for r in rows)}) ÷ 2", value, Evidence.ASSUMED),)
    else:
        value = rows[0] / 2
        lines = (Line("half of the left input", f"{figure(rows[0])} ÷ 2", value, Evidence.ASSUMED),)
    level = evidence if operator.kind is SetKind.UNION else Evidence.ASSUMED
    return Estimate(value, spread, level, lines)


def _divide(operator: Divide, below: list[Estimate]) -> Estimate:
    rows = max(1.0, below[0].rows / max(1.0, below[1].rows)) * RANGE_GUESS
    formula = f"max(1, {figure(below[0].rows)} ÷ {figure(max(1.0, below[1].rows))}) × {figure(RANGE_GUESS)}"
    line = Line("candidates that could hold all, a third of them", formula, rows, Evidence.ASSUMED)
    spread = {a: below[0].spread[a] for a in attributes(operator)}
    return Estimate(rows, spread, Evidence.ASSUMED, (line,))


def _limit(operator: Limit, below: Estimate) -> Estimate:
    from core.size.guarantee import _whole_number

    count, offset = _whole_number(operator.count), _whole_number(operator.offset) or 0
    after = max(0.0, below.rows - offset)
    if operator.count is None or count is None:
        return replace(below, rows=after, lines=(Line("rows after the offset", f"max(0, {figure(below.rows)} - {offset})", after, below.evidence),))
    rows = min(float(count), after)
    formula = f"min({count}, {figure(after)})"
    share = rows / max(below.rows, 1e-9)
    spread = {a: thinned(d, below.rows, share) for a, d in below.spread.items()}
    return Estimate(rows, spread, below.evidence, (Line("no more than the limit", formula, rows, below.evidence),))


def _unnest(operator: Unnest, below: Estimate) -> Estimate:
    rows = below.rows * 10
    line = Line("rows in × elements of a list (10 assumed)", f"{figure(below.rows)} × 10", rows, Evidence.ASSUMED)
    return Estimate(rows, {**_fresh_spread(operator, rows), **below.spread}, Evidence.ASSUMED, (line,))


def _fixpoint(operator: Fixpoint, below: list[Estimate]) -> Estimate:
    rows = below[0].rows * 10
    text = "base rows × 10 rounds (assumed): it may grow as the square of its input, or not end under UNION ALL"
    line = Line(text, f"{figure(below[0].rows)} × 10", rows, Evidence.ASSUMED)
    return Estimate(rows, _fresh_spread(operator, rows), Evidence.ASSUMED, (line,))


def width_of(found: Estimate, operator: Operator) -> float:
    """Average bytes of a row."""
    total = 0.0
    for attribute in attributes(operator):
        spread = found.spread.get(attribute)
        width = float(assumed_bytes(attribute.type)) if spread is None else spread.width * (1 - spread.null_share)
        total += width
    return total

