"""What every size must keep to: its range, and a derivation that a pocket calculator can follow."""

from __future__ import annotations

import math
import random
import re
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from core.catalog.model import AttributeFacts, Catalog, Evidence, HeavyHitter, RelationFacts, Statistics, catalog_of
from core.size import Size
from tests.generate.queries import Data

_EXACT = frozenset({"distinct", "nulls", "low", "high", "largest_group", "heavy"})
_NUMBER = re.compile(r"(\^ )?(\d+(?:\.\d+)?(?:e[+-]?\d+)?)")
_ALLOWED = re.compile(r"(?:\d+(?:\.\d+)?(?:e[+-]?\d+)?|min|max|[-+×÷^(),\s])*")


def recomputed(formula: str) -> float:
    """A derivation's arithmetic: numbers, + - × ÷ ^, min, max and parentheses."""
    assert _ALLOWED.fullmatch(formula), f"no pocket calculator follows {formula!r}"
    text = formula.replace("×", "*").replace("÷", "/").replace("^", "**")
    return float(eval(text, {"__builtins__": {}}, {"min": min, "max": max}))


def leeway(formula: str) -> float:
    """How far a result may be off because the figures in the formula are written with six digits."""
    exact, rng, most = recomputed(formula), random.Random(1), 0.0

    def turned(found: re.Match[str]) -> str:
        power, figure = found.groups()
        if power or figure == "1":
            return found[0]
        return repr(float(figure) * (1 + rng.choice([-5e-6, 5e-6])))

    for _ in range(12):
        most = max(most, abs(recomputed(_NUMBER.sub(turned, formula)) - exact))
    return 4 * most


def faults(found: Size, true: int | None = None) -> list[str]:
    """What is wrong with a size; with the true count where it is known."""
    wrong = []
    high = math.inf if found.high is None else found.high
    # Beyond 2^53 a float cannot be every whole number.
    if not rounded(found.low) <= found.rows <= rounded(high):
        wrong.append(f"the estimate {found.rows} is not in {found.low}..{found.high}")
    if true is not None and not found.low <= true <= high:
        wrong.append(f"{true} rows are not in the guaranteed {found.low}..{found.high} ({found.range_reason})")
    if not (math.isfinite(found.rows) and math.isfinite(found.bytes) and found.bytes >= 0):
        wrong.append(f"{found.rows} rows, {found.bytes} bytes")
    if not found.derivation or not math.isclose(found.derivation[-1].value, found.rows, rel_tol=1e-9, abs_tol=1e-9):
        wrong.append(f"the derivation does not end at {found.rows}: {found.derivation}")
    for line in found.derivation:
        value = recomputed(line.formula)
        # What a difference of two equal figures leaves is noise.
        noise = 1e-7 if "1 - 1)" in line.formula else 1e-12
        if abs(value - line.value) > leeway(line.formula) + 5e-6 * abs(line.value) + noise:
            wrong.append(f"{line.text}: {line.formula} is {value}, not {line.value}")
    if found.derivation and found.evidence > min(line.evidence for line in found.derivation[-1:]):
        wrong.append(f"evidence {found.evidence.word} of a line that is {found.derivation[-1].evidence.word}")
    return wrong


def rounded(bound: float) -> float:
    return float(min(bound, 10**300)) if bound < math.inf else math.inf


def profiled(catalog: Catalog, data: Data) -> Catalog:
    """The catalog with every figure counted from the data, exactly."""

    def relation(facts: RelationFacts) -> RelationFacts:
        rows = data[facts.name]
        known = tuple(
            replace(a, statistics=_statistics([row[i] for row in rows])) for i, a in enumerate(facts.attributes)
        )
        return replace(facts, attributes=known, rows=len(rows), rows_exact=True, rows_evidence=Evidence.PROFILED)

    return catalog_of(relation(facts) for facts in catalog)


def _statistics(values: Sequence[Any]) -> Statistics:
    present = [v for v in values if v is not None]
    counts = {v: present.count(v) for v in set(present)}
    heavy = tuple(HeavyHitter(v, n) for v, n in sorted(counts.items(), key=lambda i: (-i[1], str(i[0]))))
    return Statistics(
        distinct=len(counts),
        nulls=len(values) - len(present),
        low=min(present, default=None),
        high=max(present, default=None),
        heavy=heavy,
        largest_group=max(counts.values(), default=0),
        exact=_EXACT,
        evidence=Evidence.PROFILED,
    )


def worn(catalog: Catalog, rng: random.Random) -> Catalog:
    """The catalog with some of its figures lost, as real ones are; what is left is still true."""

    def attribute(facts: AttributeFacts) -> AttributeFacts:
        known = facts.statistics
        if known is None or rng.random() < 0.2:
            return replace(facts, statistics=None)
        if rng.random() < 0.4 and known.heavy:
            values = sorted(v for hitter in known.heavy for v in [hitter.value] * hitter.rows)  # type: ignore[type-var]
            known = replace(known, heavy=(), histogram=(values[0], *values))
        if rng.random() < 0.2:
            known = replace(known, distinct=None, exact=known.exact - {"distinct"})
        if rng.random() < 0.2:
            known = replace(known, largest_group=None, exact=known.exact - {"largest_group"})
        return replace(facts, statistics=known)

    return catalog_of(
        replace(
            facts,
            attributes=tuple(attribute(a) for a in facts.attributes),
            rows=facts.rows if rng.random() < 0.85 else None,
            foreign_keys=facts.foreign_keys if rng.random() < 0.8 else (),
        )
        for facts in catalog
    )
