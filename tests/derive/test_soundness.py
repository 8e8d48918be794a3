"""What is derived and what is guaranteed holds for every row an engine gives: by mass, over random queries and data."""

from __future__ import annotations

import os
import re
from collections.abc import Sequence
from typing import Any

import pytest

from core.algebra.graph import attributes, free
from core.algebra.operators import Operator
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog, Evidence, HeavyHitter, RelationFacts, Statistics, catalog_of
from core.derive.facts import Facts, Properties
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from core.language.sql.write import write_query
from core.size import Size, size
from tests.generate.queries import COLUMNS, SCHEMA, Data, random_query

CATALOG = catalog_from_ddl(SCHEMA)
FACTS = Facts(CATALOG)
Row = tuple[Any, ...]


def profiled(data: Data) -> Catalog:
    """The catalog with exact figures counted in plain Python."""
    from dataclasses import replace

    def statistics(values: Sequence[Any]) -> Statistics:
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
            exact=frozenset({"distinct", "nulls", "low", "high", "largest_group", "heavy"}),
            evidence=Evidence.PROFILED,
        )

    def relation(facts: RelationFacts) -> RelationFacts:
        rows = data[facts.name]
        known = tuple(
            replace(a, statistics=statistics([row[i] for row in rows])) for i, a in enumerate(facts.attributes)
        )
        return replace(facts, attributes=known, rows=len(rows), rows_exact=True, rows_evidence=Evidence.PROFILED)

    assert all([a.name for a in facts.attributes] == COLUMNS[facts.name] for facts in CATALOG)
    return catalog_of(relation(facts) for facts in CATALOG)


def check_properties(operator: Operator, rows: list[Row], found: Properties) -> None:
    place = {a: i for i, a in enumerate(attributes(operator))}
    for attribute in found.never_null & place.keys():
        assert all(row[place[attribute]] is not None for row in rows), f"{attribute} is NULL"
    for key in found.keys:
        values = [tuple(row[place[a]] for a in key) for row in rows]
        assert len(set(values)) == len(values), f"{key} is no key"
    for attribute in found.constants & place.keys():
        assert len({row[place[attribute]] for row in rows}) <= 1, f"{attribute} is not constant"
    for group in found.same:
        known = [place[a] for a in group if a in place]
        assert all(len({row[i] for i in known}) <= 1 for row in rows), f"{group} differ"
    for left, right in found.dependencies:
        if left <= place.keys():
            seen: dict[Row, Row] = {}
            for row in rows:
                given = tuple(row[place[a]] for a in sorted(left))
                value = tuple(row[place[a]] for a in sorted(right & place.keys()))
                assert seen.setdefault(given, value) == value, f"{left} does not determine {right}"
    assert not found.exactly_one or len(rows) == 1


def check_size(found: Size, rows: int) -> None:
    assert found.low <= rows and (found.high is None or rows <= found.high), f"{rows} is not in {found.low}..{found.high}"
    assert found.low <= found.rows and (found.high is None or found.rows <= found.high)
    for line in found.derivation:
        value = recomputed(line.formula)
        assert abs(value - line.value) <= 1e-3 * max(1.0, abs(line.value)), line


def recomputed(formula: str) -> float:
    """A derivation's arithmetic, followed as with a pocket calculator."""
    assert re.fullmatch(r"[\d.e+\-×÷^(),\s]*|.*(min|max)\(.*", formula), formula
    text = formula.replace("×", "*").replace("÷", "/").replace("^", "**")
    return float(eval(text, {"__builtins__": {}}, {"min": min, "max": max}))


def check(seed: int) -> int:
    """One random query, every operator of it; gives how many operators were looked at."""
    text, data = random_query(seed)
    engine = create_instance(CATALOG, data)
    try:
        formulation = read_sql(text, CATALOG)
        sizes = size(formulation, profiled(data))
        return sum(_operator(operator, engine, sizes[operator]) for operator in formulation.operators())
    finally:
        engine.close()


def _operator(operator: Operator, engine: DuckEngine, found: Size) -> bool:
    if free(operator):
        return False
    try:
        rows = engine.run(write_query(operator)).rows
    except EngineError:
        return False
    check_properties(operator, rows, FACTS.of(operator))
    check_size(found, len(rows))
    return True


def test_facts_and_ranges_hold() -> None:
    assert sum(check(seed) for seed in range(120)) > 800


@pytest.mark.soak
def test_facts_and_ranges_hold_on_thousands() -> None:
    for seed in range(200_000, 200_000 + int(os.environ.get("PLANIMETER_SOAK", "5000"))):
        check(seed)
