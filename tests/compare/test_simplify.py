"""The laws by which proofs simplify expressions, each checked on the engine over every value its columns may take."""

from __future__ import annotations

import itertools

import pytest

from core.algebra.notation import scalar_text
from core.algebra.operators import Operator, Project, Select
from core.catalog.ddl import catalog_from_ddl
from core.compare.simplify import simplified
from core.derive.facts import Facts
from core.engine.duckdb_engine import DuckEngine
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql

DDL = "create table v (x integer, y integer, n integer not null, p boolean, q boolean, s boolean)"
CATALOG = catalog_from_ddl(DDL)

CONDITIONS = (
    "coalesce(x, 0) > 1",
    "coalesce(x, 0) < 1",
    "1 < coalesce(x, 2)",
    "coalesce(x, 1) <> 1",
    "(x > 1) is true",
    "(x > 1) is false",
    "not ((x > 1) is true)",
    "coalesce(p, false)",
    "case when p then true else false end",
    "case when p then true end",
    "p or (p and q)",
    "(p and q) or (p and s)",
    "(p and q) or p or s",
    "not ((p and q) or (p and s))",
    "x = x",
    "not (x = x)",
    "x is not distinct from 1",
    "not (x is not distinct from 1)",
    "x is not distinct from y and y > 0",
    "n is not null and x > 1",
    "n is null or x > 1",
    "n is distinct from 1",
    "x > 1 and (x > 0) is true and x is not null",
    "x = y and coalesce(x, 7) = 2",
    "coalesce(x, y, 1) > coalesce(n, 0)",
    "nullif(x, 1) is null",
    "x <= x or p",
)
VALUES = (
    "coalesce(n, 5)",
    "coalesce(coalesce(x, y), 3)",
    "coalesce(x, 2, y)",
    "nullif(x, y)",
    "case when x is null then y else x end",
    "case when x is not null then x else 3 end",
    "p or (p and q)",
    "(p and q) or (p and s)",
    "(n > 1) is true",
    "(n > 1) is false",
    "(x > 1) is true",
    "n is distinct from 2",
    "not (not p)",
    "n is null",
)
AGGREGATES = (
    "count(1)",
    "count(case when x > 1 then 1 end)",
    "count(case when x > 1 then 1 else null end) filter (where p)",
    "count(case when x > 1 then 1 else 0 end)",
    "count(distinct case when x > 1 then 1 end)",
)


@pytest.fixture(scope="module")
def engine() -> DuckEngine:
    made = DuckEngine(threads=1)
    truth = ("NULL", "TRUE", "FALSE")
    number = ("NULL", "0", "1", "2")
    rows = itertools.product(number, number, ("0", "1", "2"), truth, truth, truth)
    made.load([DDL, "insert into v values " + ", ".join(f"({', '.join(row)})" for row in rows)])
    return made


def check(engine: DuckEngine, text: str) -> Operator:
    formulation = read_sql(text, CATALOG)
    root = simplified(formulation.root, Facts(CATALOG))
    after = write_sql(formulation.replaced({formulation.root: root}))
    # Unordered but alike: both read one relation in its own order.
    assert sorted(map(repr, engine.run(text).rows)) == sorted(map(repr, engine.run(after).rows)), after
    return root


@pytest.mark.parametrize("condition", CONDITIONS)
def test_a_condition_keeps_the_same_rows(engine: DuckEngine, condition: str) -> None:
    check(engine, f"select x, y, n, p, q, s from v where {condition}")


@pytest.mark.parametrize("value", VALUES)
def test_a_value_stays_the_same(engine: DuckEngine, value: str) -> None:
    check(engine, f"select x, y, n, p, q, s, {value} as z from v")


@pytest.mark.parametrize("value", AGGREGATES)
def test_a_count_stays_the_same(engine: DuckEngine, value: str) -> None:
    check(engine, f"select n, {value} as z from v group by n")


def test_simplification_does_something() -> None:
    root = simplified(read_sql("select n from v where coalesce(x, 0) > 1", CATALOG).root, Facts(CATALOG))
    select = root.input if isinstance(root, Project) else root
    assert isinstance(select, Select)
    assert scalar_text(select.condition) == "x > 1"
