"""Estimates of joins of every kind."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from core.algebra.graph import attributes, dependent, inputs
from core.algebra.operators import Join, JoinKind, Operator, Project, Select
from core.algebra.scalars import Attribute, Comparison, ComparisonOperator, Ref, Scalar, conjunction, conjuncts
from core.catalog.model import Evidence
from core.size.distribution import Distribution, padded, remaining_distinct, thinned
from core.size.equalities import Share, equality_share, joined
from core.size.guarantee import equalities
from core.size.model import MOST_ROWS, Estimate, Line, figure
from core.size.selectivity import share_of

Pairs = list[tuple[Attribute, Attribute]]
Spread = dict[Attribute, Distribution]


def join(operator: Join, left: Estimate, right: Estimate, known: Mapping[Operator, Estimate]) -> Estimate:
    """The estimate of a join from those of its sides; `known` holds those of everything below."""
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
    rows = min(MOST_ROWS, left.rows * right.rows * value)
    formula = " × ".join([figure(left.rows), figure(right.rows), *(figure(share.value) for share in shares)])
    if rows >= MOST_ROWS:
        formula = f"min({figure(MOST_ROWS)}, {formula})"
    text = "left rows × right rows" + (" × share of pairs kept" if shares else "")
    lines = (*lines, Line(text, formula, rows, evidence))
    found = Estimate(rows, _joined_spread(spread, pairs, rows), evidence, lines)
    return found if kind is JoinKind.INNER else _outer(kind, found, left, right, pairs)


def _equal_share(operator: Join, left: Estimate, right: Estimate) -> tuple[Share | None, Pairs]:
    pairs = equalities(operator.condition, set(attributes(operator.left)), set(attributes(operator.right)))
    if not pairs:
        return None, pairs
    share = equality_share(pairs, {**left.spread, **right.spread})
    floor = 1 / max(1.0, left.rows, right.rows)
    if len(pairs) > 1 and share.value < floor:
        # Several equalities are mostly one composite key: independence would make almost nothing of it.
        text = "several equalities together: no rarer than one partner a row"
        line = Line(text, f"1 ÷ {figure(max(1.0, left.rows, right.rows))}", floor, Evidence.ASSUMED)
        share = Share(floor, (*share.lines, line), Evidence.ASSUMED)
    return share, pairs


def _is_pair(term: Scalar, equated: set[frozenset[Attribute]]) -> bool:
    return (
        isinstance(term, Comparison)
        and term.operator is ComparisonOperator.EQUAL
        and isinstance(term.left, Ref)
        and isinstance(term.right, Ref)
        and frozenset({term.left.attribute, term.right.attribute}) in equated
    )


def _joined_spread(spread: Spread, pairs: Pairs, rows: float) -> Spread:
    """Distinct counts after a join: of the join attributes the smaller side's, of the others no more than rows."""
    found = dict(spread)
    for mine, theirs in pairs:
        found[mine], found[theirs] = joined(found[mine], found[theirs])
    return {
        a: replace(d, distinct=max(min(d.distinct, rows), min(1.0, rows)), domain=d.values) for a, d in found.items()
    }


# --- which rows find a partner ---------------------------------------------------------------------------------------


def _matching(left: Estimate, right: Estimate, pairs: Pairs, share: float) -> tuple[float, str, str]:
    """The share of left rows that find a partner, with its formula and method."""
    if pairs:
        best, formula = 1.0, "1"
        for mine, theirs in pairs:
            have, text = _found(left.spread[mine], right.spread[theirs], right.spread[theirs].distinct)
            if have <= best:
                best, formula = have, text
        return best, formula, "containment of value sets"
    partners = right.rows * share
    return min(1.0, partners), f"min(1, {figure(right.rows)} × {figure(share)})", "expected partners a row"


def _found(own: Distribution, other: Distribution, values: float) -> tuple[float, str]:
    """The share of rows whose value is among so many of the other side's values, drawn from the larger domain."""
    most = max(1.0, own.values, other.values)
    have = min(1.0, values / most) * (1 - own.null_share)
    return have, f"min(1, {figure(values)} ÷ {figure(most)}) × {figure(1 - own.null_share)}"


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
            have, formula = _found(own, other, remaining_distinct(other.distinct, inner.rows, kept))
            return have, formula, "containment of value sets"
    return None


def _half_join(
    operator: Join,
    left: Estimate,
    right: Estimate,
    pairs: Pairs,
    share: float,
    evidence: Evidence,
    lines: tuple[Line, ...],
    known: Mapping[Operator, Estimate],
) -> Estimate:
    same = Line("as many rows as come in", figure(left.rows), left.rows, left.evidence)
    if operator.kind is JoinKind.MARK:
        assert operator.mark is not None
        return Estimate(left.rows, {**left.spread, operator.mark: Distribution(2.0, width=1.0)}, left.evidence, (same,))
    if operator.kind is JoinKind.SINGLE:
        return Estimate(left.rows, {**left.spread, **right.spread}, left.evidence, (same,))
    have, formula, method = _correlated(operator, left, right, known) or _matching(left, right, pairs, share)
    first = Line("share of left rows with a partner", formula, have, evidence, method)
    kept = have if operator.kind is JoinKind.SEMI else 1 - have
    text = (
        "left rows × share with a partner" if operator.kind is JoinKind.SEMI else "left rows × share without a partner"
    )
    shown = figure(kept) if operator.kind is JoinKind.SEMI else f"(1 - {figure(have)})"
    rows = left.rows * kept
    total = Line(text, f"{figure(left.rows)} × {shown}", rows, evidence)
    own = lines if not pairs else ()
    spread = {a: thinned(d, left.rows, kept) for a, d in left.spread.items()}
    if operator.kind is JoinKind.SEMI:
        for mine, theirs in pairs:
            values = min(left.spread[mine].distinct, right.spread[theirs].distinct)
            spread[mine] = replace(spread[mine], distinct=min(values, max(rows, min(1.0, values))))
    return Estimate(rows, spread, evidence, (*own, first, total))


# --- outer joins -----------------------------------------------------------------------------------------------------


def _outer(kind: JoinKind, inner: Estimate, left: Estimate, right: Estimate, pairs: Pairs) -> Estimate:
    rows, lines = inner.rows, list(inner.lines)
    share = inner.rows / max(1e-9, left.rows * right.rows)
    sides = []
    if kind in (JoinKind.LEFT, JoinKind.FULL):
        sides.append((left, right, pairs, "left"))
    if kind in (JoinKind.RIGHT, JoinKind.FULL):
        sides.append((right, left, [(b, a) for a, b in pairs], "right"))
    lonely_rows = []
    for kept, other, turned, name in sides:
        have, formula, method = _matching(kept, other, turned, share)
        lonely = kept.rows * (1 - have)
        text = f"{name} rows without a partner"
        lines.append(Line(text, f"{figure(kept.rows)} × (1 - {formula})", lonely, inner.evidence, method))
        lonely_rows.append(lonely)
        rows += lonely
    floor = max(side[0].rows for side in sides)
    terms = " + ".join(figure(line.value) for line in [inner.lines[-1], *lines[len(inner.lines) :]])
    rows = max(rows, floor)
    lines.append(
        Line(
            "matched and unmatched rows, no fewer than the side kept",
            f"max({figure(floor)}, {terms})",
            rows,
            inner.evidence,
        )
    )
    return Estimate(rows, _outer_spread(inner, sides, rows), inner.evidence, tuple(lines))


def _outer_spread(inner: Estimate, sides: list[tuple[Estimate, Estimate, Pairs, str]], rows: float) -> Spread:
    """Sides that are kept keep their values; sides that are padded have NULLs where no partner was found."""
    spread = dict(inner.spread)
    for kept, _, _, _ in sides:
        spread.update(kept.spread)
    for kept, other, turned, _ in sides:
        have, _, _ = _matching(kept, other, turned, inner.rows / max(1e-9, kept.rows * other.rows))
        lonely = min(1.0, kept.rows * (1 - have) / max(rows, 1e-9))
        for attribute in other.spread:
            spread[attribute] = padded(spread[attribute], lonely)
    return spread
