"""Estimates of every operator's rows and of the values in its columns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from core.algebra.graph import attributes
from core.algebra.notation import name_of
from core.algebra.operators import (
    Distinct,
    Divide,
    Fixpoint,
    Group,
    Join,
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
    Scalar,
)
from core.algebra.types import assumed_bytes
from core.catalog.model import Catalog, Evidence
from core.derive.facts import Facts
from core.size.computed import computed
from core.size.distribution import Distribution, Origin, base_distribution, thinned
from core.size.grouping import group, grouped
from core.size.joins import join
from core.size.model import Estimate, Line, figure, sum_text
from core.size.restrict import restricted
from core.size.selectivity import RANGE_GUESS, share_of

ASSUMED_ROWS = 1000.0
"""Rows of a relation of which nothing is known."""

Spread = dict[Attribute, Distribution]


def estimate(operator: Operator, below: list[Estimate], facts: Facts, known: Mapping[Operator, Estimate]) -> Estimate:
    """The estimate of an operator from those of its inputs. In a correlated part it is for one outer row.

    `known` holds the estimates of everything below.
    """
    match operator:
        case Relation():
            return _relation(operator, facts.catalog)
        case Values(rows=rows):
            count = float(len(rows))
            return Estimate(
                count,
                _fresh_spread(operator, count),
                Evidence.MEASURED,
                (_line("rows written out", figure(count), count),),
            )
        case TableFunction() | Recurrence():
            line = Line(
                f"rows of a {name_of(operator)}: nothing is known", figure(ASSUMED_ROWS), ASSUMED_ROWS, Evidence.ASSUMED
            )
            return Estimate(ASSUMED_ROWS, _fresh_spread(operator, ASSUMED_ROWS), Evidence.ASSUMED, (line,))
        case Select(condition=condition):
            return _selected(below[0], condition)
        case Project():
            return _project(operator, below[0])
        case Join():
            return join(operator, below[0], below[1], known)
        case SetOperation():
            return _set_operation(operator, below)
        case Distinct():
            return grouped(operator, attributes(operator), below[0], facts)
        case Group():
            return group(operator, below[0], facts)
        case Nest(keys=keys):
            return grouped(operator, keys, below[0], facts)
        case Divide():
            return _divide(operator, below)
        case Window():
            spread = {
                **below[0].spread,
                **_fresh_spread(operator, below[0].rows, only=tuple(c.attribute for c in operator.columns)),
            }
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
        spread = {
            a: base_distribution(None if facts is None else facts.attribute(a.name), a.type, ASSUMED_ROWS)
            for a in operator.attributes
        }
        return Estimate(ASSUMED_ROWS, spread, Evidence.ASSUMED, (line,))
    rows = float(facts.rows)
    when = f", {facts.as_of.isoformat()}" if facts.as_of is not None else ""
    line = Line(f"rows of {operator.name}", figure(rows), rows, facts.rows_evidence, f"{facts.source}{when}")
    spread = {
        a: replace(base_distribution(facts.attribute(a.name), a.type, rows), origin=Origin(operator, a.name, facts))
        for a in operator.attributes
    }
    return Estimate(rows, spread, facts.rows_evidence, (line,))


def _selected(below: Estimate, condition: Scalar) -> Estimate:
    share = share_of(condition, below.spread)
    rows = below.rows * share.value
    evidence = min(below.evidence, share.evidence)
    total = Line("rows in × share kept", f"{figure(below.rows)} × {figure(share.value)}", rows, evidence)
    spread = restricted(below.spread, condition, below.rows, share.value)
    return Estimate(rows, spread, evidence, (*share.lines, total))


def _project(operator: Project, below: Estimate) -> Estimate:
    spread = {c.attribute: computed(c.value, below.spread, below.rows) for c in operator.columns}
    return Estimate(below.rows, spread, below.evidence, (_same(below),))


# --- the others ----------------------------------------------------------------------------------------------------


def _set_operation(operator: SetOperation, below: list[Estimate]) -> Estimate:
    evidence = min(part.evidence for part in below)
    spread: Spread = {}
    for i, attribute in enumerate(operator.attributes):
        own = [part.spread[source[i]] for part, source in zip(below, operator.sources, strict=True)]
        total = max(1e-9, sum(part.rows for part in below))
        nulls = sum(d.null_share * part.rows for d, part in zip(own, below, strict=True)) / total
        spread[attribute] = Distribution(
            max(d.distinct for d in own), nulls, width=max(d.width for d in own), evidence=min(d.evidence for d in own)
        )
    rows = [part.rows for part in below]
    if operator.kind is SetKind.UNION:
        value, formula = sum(rows), sum_text(rows)
        lines: tuple[Line, ...] = (Line("the inputs' rows together", formula, value, evidence),)
        if operator.distinct:
            merged = Estimate(value, spread, evidence)
            whole = grouped(operator, operator.attributes, merged)
            return replace(whole, lines=(*lines, *whole.lines))
    elif operator.kind is SetKind.INTERSECT:
        value = min(rows) / 2
        lines = (
            Line(
                "half of the smaller input", f"min({', '.join(figure(r) for r in rows)}) ÷ 2", value, Evidence.ASSUMED
            ),
        )
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
        return replace(
            below,
            rows=after,
            lines=(Line("rows after the offset", f"max(0, {figure(below.rows)} - {offset})", after, below.evidence),),
        )
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
