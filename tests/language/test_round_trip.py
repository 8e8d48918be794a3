"""Round trip is law: the query written gives the same bag as the query read, on a real engine."""

from __future__ import annotations

import os
import random
from collections import Counter
from functools import cache
from typing import Any

import pytest

from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql
from tests.data import demo, tpcds, tpch
from tests.generate.queries import SCHEMA, random_query

DIALECTS = ("duckdb", "postgres", "spark", "bigquery", "snowflake", "trino", "mysql", "tsql", "sqlite")


def rounded(value: Any) -> Any:
    """Floats to nine digits: sums may be taken in another order."""
    if isinstance(value, float):
        return "nan" if value != value else float(f"{value:.9g}")
    return repr(value) if isinstance(value, (list, dict)) else value


def bag(engine: DuckEngine, sql: str) -> Counter[tuple[Any, ...]]:
    return Counter(tuple(rounded(v) for v in row) for row in engine.run(sql).rows)


@cache
def engine_of(name: str) -> DuckEngine:
    return DuckEngine.over_folder(tpch.folder(0.01) if name == "tpch" else demo.folder(1.0))


@cache
def catalog_of(name: str) -> Catalog:
    return catalog_from_ddl(tpch.schema() if name == "tpch" else demo.schema())


CASES = [("tpch", name, text) for name, text in tpch.queries().items()]
CASES += [("demo", name, text) for name, text in demo.queries().items()]


@pytest.mark.parametrize(("source", "name", "text"), CASES, ids=[f"{s}-{n}" for s, n, _ in CASES])
def test_the_query_written_gives_the_same_bag(source: str, name: str, text: str) -> None:
    engine = engine_of(source)
    written = write_sql(read_sql(text, catalog_of(source)))
    assert bag(engine, written) == bag(engine, text)


@pytest.mark.parametrize(("source", "name", "text"), CASES, ids=[f"{s}-{n}" for s, n, _ in CASES])
def test_writing_is_a_fixed_point(source: str, name: str, text: str) -> None:
    written = write_sql(read_sql(text, catalog_of(source)))
    assert write_sql(read_sql(written, catalog_of(source))) == written


@pytest.mark.parametrize("dialect", DIALECTS)
def test_every_dialect_gets_text_that_it_parses(dialect: str) -> None:
    import sqlglot

    for source, name, text in CASES:
        written = write_sql(read_sql(text, catalog_of(source)), dialect)
        assert sqlglot.parse_one(written, read=dialect) is not None, (name, written)


def test_all_of_tpcds_is_read_and_written() -> None:
    """The 99 texts of the TPC-DS specification: read, written, and the same when read and written again."""
    catalog = catalog_from_ddl(tpcds.schema())
    for name, text in tpcds.queries().items():
        written = write_sql(read_sql(text, catalog))
        assert write_sql(read_sql(written, catalog)) == written, name


@pytest.mark.soak
def test_all_of_tpcds_gives_the_same_bags() -> None:
    engine, catalog = DuckEngine.over_folder(tpcds.folder(0.1)), catalog_from_ddl(tpcds.schema())
    for name, text in tpcds.queries().items():
        assert bag(engine, write_sql(read_sql(text, catalog))) == bag(engine, text), name


GENERATED = catalog_from_ddl(SCHEMA)


def check(seed: int) -> bool:
    """One random query: whether the engine took it; fails where the text written gives another bag."""
    text, data = random_query(seed)
    engine = create_instance(GENERATED, data)
    try:
        try:
            expected = bag(engine, text)
        except EngineError:
            return False
        assert bag(engine, write_sql(read_sql(text, GENERATED))) == expected, f"seed {seed}: {text}"
        return True
    finally:
        engine.close()


def test_random_queries_give_the_same_bag() -> None:
    taken = sum(check(seed) for seed in range(250))
    assert taken >= 230, "the generator makes too many queries that the engine refuses"


@pytest.mark.soak
def test_thousands_of_random_queries_give_the_same_bag() -> None:
    for seed in range(100_000, 100_000 + int(os.environ.get("PLANIMETER_SOAK", "20000"))):
        check(seed)


# Shrunk forms of generated cases that once failed, each with what was wrong.
KEPT = {
    "a global aggregate that nothing reads is still one row": "select 2 as c from (select count(h) as n from t) x where 1 = 1",
    "exists over a global aggregate is always true": "select a from r where exists (select count(*) from t where t.a = r.b)",
    "an outer column inside a subquery is not the inner one": (
        "select (select max(x.b) from t x where x.a = q.n) as m from (select case when a > 1 then b else h end as n, a from t) q"
    ),
    "a group key that is a literal is no position": "select k, count(*) as n from (select 7 as k, a from t) x group by k",
    "a subquery inside coalesce": "select coalesce((select max(h) from t where t.a = r.a), 3) as m from r",
    "no rows": "select a from t where false",
    "a condition above a window": "select a from (select distinct a, sum(2) over (order by a) as s from t) x where a = 1",
    "NOT before LIKE": "select d from r where d not like 'x%'",
}


@pytest.mark.parametrize("text", KEPT.values(), ids=KEPT.keys())
def test_cases_that_once_failed(text: str) -> None:
    rng = random.Random(5)
    from tests.generate.queries import random_data

    for _ in range(25):
        engine = create_instance(GENERATED, random_data(rng))
        try:
            assert bag(engine, write_sql(read_sql(text, GENERATED))) == bag(engine, text)
        finally:
            engine.close()
