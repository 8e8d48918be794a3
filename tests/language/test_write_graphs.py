"""Any legal graph is written to SQL that means the same: generated graphs, a plain evaluator, a real engine."""

from __future__ import annotations

import os
import random
from collections import Counter
from functools import cache
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from core.algebra.graph import faults, postorder
from core.algebra.notation import tree_text
from core.algebra.operators import Join, JoinKind, Operator
from core.catalog.ddl import catalog_from_ddl
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.instance import create_instance
from core.language.sql.write import write_query
from tests.language.graphs import SCHEMA, GraphMaker, Rows, random_instance
from tests.language.meaning import TooManyRows, meaning

INSTANCES = 24
CATALOG = catalog_from_ddl(SCHEMA)


@cache
def instance(number: int) -> tuple[DuckEngine, dict[str, Rows]]:
    data = random_instance(random.Random(number))
    return create_instance(CATALOG, data), data


def comparable(value: Any) -> Any:
    """Lists of rows as bags: no engine promises the order of their elements."""
    if isinstance(value, list):
        rows = [tuple(item.values()) if isinstance(item, dict) else item for item in value]
        return tuple(sorted(rows, key=repr))
    return value


def bag(rows: Any) -> Counter[tuple[Any, ...]]:
    return Counter(tuple(comparable(value) for value in row) for row in rows)


def check(root: Operator, maker: GraphMaker, numbers: range) -> None:
    assert faults(root) == []
    written = write_query(root, None, "duckdb", maker.names, maker.aliases, pretty=True)
    assert written == write_query(root, None, "duckdb", maker.names, maker.aliases, pretty=True)
    for number in numbers:
        engine, data = instance(number % INSTANCES)
        try:
            expected = bag(meaning(root, data))
        except TooManyRows:
            continue
        try:
            found = bag(engine.run(written).rows)
        except EngineError as error:
            # An engine may run a scalar subquery for no row at all, and stop at its second row.
            single = any(isinstance(o, Join) and o.kind is JoinKind.SINGLE for o in postorder(root))
            assert single and "More than one row" in str(error), f"{error}\n{written}\n{tree_text(root)}"
            continue
        assert found == expected, f"instance {number % INSTANCES}\n{written}\n{tree_text(root)}"


def check_seed(seed: int, instances: int = 3) -> set[str]:
    """Checks one seeded graph; gives the kinds of operator it has."""
    rng = random.Random(seed)
    maker = GraphMaker(rng)
    root = maker.graph(rng.randint(1, 4))
    check(root, maker, range(seed * 7, seed * 7 + instances))
    return {
        type(operator).__name__ + (f" {operator.kind.value}" if isinstance(operator, Join) else "")
        for operator in postorder(root)
    }


def test_seeded_graphs_keep_their_meaning() -> None:
    seen: set[str] = set()
    for seed in range(400):
        seen |= check_seed(seed)
    operators = {part.__name__ for part in Operator.__args__ if part is not Join}
    assert seen >= operators | {f"Join {kind.value}" for kind in JoinKind}, (
        "the generator does not reach every operator"
    )


@settings(max_examples=60, deadline=None, suppress_health_check=list(HealthCheck))
@given(st.randoms(use_true_random=False), st.integers(1, 3), st.integers(0, INSTANCES - 1))
def test_generated_graphs_keep_their_meaning(rng: random.Random, depth: int, number: int) -> None:
    maker = GraphMaker(rng)
    check(maker.graph(depth), maker, range(number, number + 2))


@pytest.mark.soak
def test_thousands_of_seeded_graphs_keep_their_meaning() -> None:
    for seed in range(1_000_000, 1_000_000 + int(os.environ.get("PLANIMETER_SOAK", "20000"))):
        check_seed(seed)
