"""Estimates of groups, and how the figures computed for each group are spread."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from core.algebra.graph import attributes, inputs
from core.algebra.operators import Group, Operator
from core.algebra.scalars import Aggregate, Attribute, Literal, Ref
from core.algebra.types import NUMERIC, assumed_bytes
from core.catalog.model import Evidence
from core.derive.facts import Facts, closure
from core.size.distribution import Distribution, groups, moments
from core.size.model import Estimate, Line, figure, product_text, sum_text

_MOST = 1e15


def grouped(operator: Operator, keys: Sequence[Attribute], below: Estimate, facts: Facts | None = None) -> Estimate:
    """The distinct combinations of the keys, and what is known of each attribute after grouping by them."""
    essential, cap = _essential(operator, keys, below, facts)
    combinations, evidence = 1.0, below.evidence
    counts: list[float] = []
    for key in essential:
        count = _values(below.spread[key])
        combinations = min(combinations * count, _MOST)
        evidence = min(evidence, below.spread[key].evidence)
        counts.append(count)
    text, formula = "combinations of key values", product_text(counts) or "1"
    if len(essential) < len(keys):
        text += (
            f" ({', '.join(a.name for a in essential)} determine the others)" if essential else " (all are constant)"
        )
    if combinations >= _MOST:
        formula = f"min({figure(_MOST)}, {formula})"
    product = Line(text, formula, combinations, evidence)
    rows, total = _non_empty(operator, keys, essential, combinations, below, evidence, facts)
    lines: tuple[Line, ...] = (product, total)
    if cap is not None and _values(below.spread[cap]) < rows:
        evidence = min(evidence, below.spread[cap].evidence)
        formula = f"min({figure(rows)}, {figure(_values(below.spread[cap]))})"
        rows = _values(below.spread[cap])
        lines = (*lines, Line(f"no more groups than values of {cap.name}, which decide them", formula, rows, evidence))
    spread = {key: _kept(below.spread[key], len(essential) == 1, rows) for key in keys}
    for attribute in attributes(operator):
        spread.setdefault(attribute, Distribution(max(1.0, rows / 2), width=float(assumed_bytes(attribute.type))))
    return Estimate(rows, spread, evidence, lines)


def _non_empty(
    operator: Operator,
    keys: Sequence[Attribute],
    essential: Sequence[Attribute],
    combinations: float,
    below: Estimate,
    evidence: Evidence,
    facts: Facts | None,
) -> tuple[float, Line]:
    """How many of the combinations occur."""
    m, n = figure(combinations), figure(below.rows)
    if facts is not None and len(inputs(operator)) == 1 and facts.is_key(inputs(operator)[0], keys):
        return below.rows, Line("no two rows agree on the keys: a group a row", n, below.rows, below.evidence)
    if len(essential) == 1:
        rows = min(below.rows, combinations)
        return rows, Line("a group a value, no more than rows", f"min({n}, {m})", rows, evidence)
    rows = min(groups(combinations, below.rows), below.rows)
    formula = f"min({n}, {m} × (1 - (1 - 1 ÷ {m}) ^ {n}))" if 1 < combinations <= 1e12 else f"min({n}, {m})"
    return rows, Line("groups that rows falling at random leave non-empty", formula, rows, evidence, "Cardenas 1975")


def _values(found: Distribution) -> float:
    return max(1.0, found.distinct + (1 if found.null_share > 0 else 0))


def _essential(
    operator: Operator, keys: Sequence[Attribute], below: Estimate, facts: Facts | None
) -> tuple[list[Attribute], Attribute | None]:
    """The keys that the others do not determine, and an attribute that determines them all with few values."""
    kept = list(dict.fromkeys(keys))
    if facts is None or len(inputs(operator)) != 1:
        return kept, None
    source = inputs(operator)[0]
    # The one with the fewest values is dropped last: what determines much is kept.
    for key in sorted(kept, key=lambda a: below.spread[a].distinct):
        rest = [a for a in kept if a != key]
        if key in facts.determined(source, rest):
            kept = rest
    found = facts.of(source)
    singles = {next(iter(left)) for left, _ in found.dependencies if len(left) == 1}
    singles |= {next(iter(key)) for key in found.keys if len(key) == 1}
    whole = set(keys)
    caps = [a for a in singles if a in below.spread and whole <= closure((a,), found) | {a}]
    return kept, min(caps, key=lambda a: (below.spread[a].distinct, a.id), default=None)


def _kept(found: Distribution, alone: bool, rows: float) -> Distribution:
    """A key after grouping: each of its values once where it stands alone, no heavy hitters either way."""
    distinct = min(found.distinct, max(1.0, rows))
    nulls = min(found.null_share, 1 / max(1.0, rows)) if found.null_share > 0 else 0.0
    # Few values that are all known stay known, as equally frequent.
    heavy = tuple((value, (1 - nulls) / len(found.heavy)) for value, _ in found.heavy)
    known = heavy if found.rest_distinct < 0.5 and found.heavy else ()
    low_distinct = replace(found, distinct=distinct, domain=found.values, null_share=nulls, heavy=known)
    return low_distinct if alone or not known else replace(low_distinct, distinct=min(distinct, float(len(known))))


def group(operator: Group, below: Estimate, facts: Facts) -> Estimate:
    """The estimate of a grouping of any kind."""
    keys = operator.keys
    if operator.sets is not None:
        return _grouping_sets(operator, operator.sets, below, facts)
    if keys:
        found = grouped(operator, keys, below, facts)
    else:
        found = Estimate(1.0, {}, Evidence.MEASURED, (Line("one group of all rows", "1", 1.0, Evidence.MEASURED),))
    spread = dict(found.spread)
    for column in operator.aggregates:
        spread[column.attribute] = _figure(column.attribute, column.aggregate, keys, below, found.rows)
    return replace(found, spread=spread)


def _grouping_sets(operator: Group, sets: tuple[tuple[Attribute, ...], ...], below: Estimate, facts: Facts) -> Estimate:
    parts = [grouped(operator, part, below, facts) if part else None for part in sets]
    counts = [1.0 if part is None else part.rows for part in parts]
    rows = sum(counts)
    evidence = min((part.evidence for part in parts if part is not None), default=below.evidence)
    spread = {a: Distribution(max(1.0, rows / 10), width=float(assumed_bytes(a.type))) for a in attributes(operator)}
    for key in operator.keys:
        # NULL stands for all values in the rows of the sets that lack a key.
        lacking = sum(count for part, count in zip(sets, counts, strict=True) if key not in part)
        found = below.spread[key]
        spread[key] = replace(
            found, heavy=(), null_share=min(1.0, lacking / max(rows, 1e-9)), evidence=Evidence.ASSUMED
        )
    line = Line("groups of every grouping set", sum_text(counts), rows, evidence)
    return Estimate(rows, spread, evidence, (line,))


# --- figures of groups -----------------------------------------------------------------------------------------------


def _figure(
    attribute: Attribute, call: Aggregate, keys: tuple[Attribute, ...], below: Estimate, rows: float
) -> Distribution:
    """The spread of an aggregate over the groups: a normal one for counts, sums and averages of many rows."""
    width = float(assumed_bytes(attribute.type))
    plain = Distribution(max(1.0, rows / 2) if keys else 1.0, width=width)
    argument = call.arguments[0] if call.arguments else None
    if not keys or call.condition is not None or call.distinct or rows < 1:
        return plain
    size = below.rows / rows
    found = below.spread.get(argument.attribute) if isinstance(argument, Ref) else None
    level = min(below.evidence, *(below.spread[key].evidence for key in keys))
    variance = _size_variance(keys, below, rows)
    if call.name == "count" and (argument is None or isinstance(argument, Literal) or found is not None):
        share = 1.0 if found is None else 1 - found.null_share
        mean, deviation = size * share, (variance * share * share + size * share * (1 - share)) ** 0.5
        distinct = max(1.0, min(rows, 6 * deviation + 1))
        return Distribution(distinct, width=width, normal=(mean, deviation), evidence=level)
    if found is None or attribute.type.family not in NUMERIC or found.evidence is Evidence.ASSUMED:
        return plain
    known = moments(found)
    if known is None:
        return plain
    mean, spread = known
    level = min(level, found.evidence)
    count = size * (1 - found.null_share)
    if call.name == "sum" and count > 0:
        total = (count * spread + variance * mean * mean) ** 0.5
        return replace(plain, normal=(count * mean, total), evidence=level)
    if call.name == "avg" and count > 0:
        return replace(plain, normal=(mean, (spread / max(1.0, count)) ** 0.5), evidence=level)
    return plain


def _size_variance(keys: tuple[Attribute, ...], below: Estimate, rows: float) -> float:
    """The variance of the rows a group has: as of random falls (Poisson), more where heavy hitters are known.

    Never more than the largest group allows: (largest - mean)(mean - 1) (Bhatia, Davis, American Mathematical Monthly
    107(4) 2000).
    """
    mean = below.rows / rows
    heavy = below.spread[keys[0]].heavy if len(keys) == 1 else ()
    if not heavy:
        return mean
    sizes = [share * below.rows for _, share in heavy]
    largest = max(sizes)
    skew = sum((size - mean) ** 2 for size in sizes) / rows
    return min(max(mean, skew), max(0.0, (largest - mean) * (mean - 1)))
