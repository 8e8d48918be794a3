"""What an engine lacks is said in other words that mean the same, or refused in plain ones."""

from __future__ import annotations

import random
import sqlite3
from collections import Counter
from functools import cache
from typing import Any

import pytest

from core.algebra.graph import dependent, postorder
from core.algebra.operators import Group, Join, JoinKind, Nest, Operator, TableFunction, Unnest
from core.catalog.ddl import catalog_from_ddl
from core.language.sql import write_dialect
from core.language.sql.read import read_sql
from core.language.sql.write import WriteError, write_query, write_sql
from tests.language.graphs import SCHEMA, GraphMaker, Rows, random_instance
from tests.language.meaning import TooManyRows, meaning
from tests.language.test_write_graphs import check_seed

CATALOG = catalog_from_ddl(
    "create table t (a integer, b integer, d varchar, l integer[]); create table u (a integer, b integer);"
)

SETS = ("NO_TRUTH_TEST", "NO_FILTER", "NO_FULL_JOIN", "NO_BAG_DIFFERENCE", "NO_COLUMN_ALIASES")


@pytest.mark.parametrize("lacking", SETS)
def test_other_words_mean_the_same(lacking: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """DuckDB has all of these: written as if it had not, the texts must give the same bags."""
    monkeypatch.setattr(write_dialect, lacking, frozenset({"duckdb"}))
    for seed in range(120):
        check_seed(seed, 2)


# --- a second engine -----------------------------------------------------------------------------------------------


@cache
def instance(number: int) -> tuple[sqlite3.Connection, dict[str, Rows]]:
    data = random_instance(random.Random(number))
    connection = sqlite3.connect(":memory:")
    connection.executescript(SCHEMA)
    for name, rows in data.items():
        connection.executemany(f"insert into {name} values (?, ?, ?)", rows)
    return connection, data


def plain(rows: Any) -> Counter[tuple[Any, ...]]:
    """SQLite has no truth values: 1 and 0."""
    return Counter(tuple(int(v) if isinstance(v, bool) else v for v in row) for row in rows)


def sqlite_has(operator: Operator) -> bool:
    match operator:
        case TableFunction() | Unnest() | Nest():
            return False
        case Join(kind=JoinKind.INNER | JoinKind.LEFT):
            return not dependent(operator)
        case Group(keys=(), aggregates=()):
            return False
        case Group(sets=sets):
            return sets is None
    return True


def test_generated_graphs_keep_their_meaning_on_sqlite() -> None:
    if sqlite3.sqlite_version_info < (3, 39):
        pytest.skip("right and full joins came with SQLite 3.39")
    compared = 0
    for seed in range(300):
        rng = random.Random(seed)
        maker = GraphMaker(rng)
        root = maker.graph(rng.randint(1, 4))
        if not all(sqlite_has(operator) for operator in postorder(root)):
            continue
        written = write_query(root, None, "sqlite", maker.names, maker.aliases, pretty=True)
        for number in range(seed, seed + 3):
            connection, data = instance(number % 24)
            try:
                expected = plain(meaning(root, data))
            except TooManyRows:
                continue
            try:
                found = plain(connection.execute(written).fetchall())
            except sqlite3.OperationalError as error:
                # Of a group that nothing is asked of, SQLite takes no HAVING; there is no other such refusal.
                assert "HAVING clause on a non-aggregate query" in str(error), f"seed {seed}: {error}\n{written}"
                continue
            assert found == expected, f"seed {seed}: {written}"
            compared += 1
    assert compared > 400


# --- texts and refusals --------------------------------------------------------------------------------------------


def written(text: str, dialect: str) -> str:
    return write_sql(read_sql(text, CATALOG), dialect, pretty=False)


TEXTS = {
    ("snowflake", "select a from t where not (a = b) is false"): (
        "SELECT a FROM t WHERE NOT coalesce(NOT a = b, FALSE)"
    ),
    ("trino", "select a from t where (a = b) is true"): "SELECT a FROM t WHERE coalesce(a = b, FALSE)",
    ("tsql", "select a from t where (a = b) is true"): ("SELECT a FROM t WHERE CASE WHEN a = b THEN 1 ELSE 0 END = 1"),
    ("mysql", "select sum(a) filter (where b > 1) as s from t"): "SELECT sum(CASE WHEN b > 1 THEN a END) AS s FROM t",
    ("bigquery", "select count(*) filter (where b > 1) as n from t"): (
        "SELECT count(CASE WHEN b > 1 THEN 1 END) AS n FROM t"
    ),
    ("snowflake", "select a from t except all select a from u"): (
        "SELECT a FROM (SELECT a, row_number() OVER (PARTITION BY a) AS copy FROM t EXCEPT "
        "SELECT a, row_number() OVER (PARTITION BY a) FROM u) AS part"
    ),
    ("snowflake", "select try_cast(d as integer) as n from t"): "SELECT TRY_CAST(d AS INT) AS n FROM t",
    ("postgres", "select a // b as q, a / b as r from t"): (
        "SELECT div(a, b) AS q, CAST(a AS DOUBLE PRECISION) / b AS r FROM t"
    ),
    ("sqlite", "select x from (values (1), (2)) as v(x)"): (
        "SELECT col0 AS x FROM (SELECT 1 AS col0 UNION ALL SELECT 2) AS v"
    ),
    ("postgres", "select a from t order by a desc, b"): "SELECT a FROM t ORDER BY a DESC NULLS LAST, b",
    ("postgres", "select a from t where d is not distinct from 'x'"): (
        "SELECT a FROM t WHERE d IS NOT DISTINCT FROM 'x'"
    ),
    ("sqlite", "select a from t where d is not distinct from 'x'"): "SELECT a FROM t WHERE d IS 'x'",
}


@pytest.mark.parametrize(("case", "expected"), TEXTS.items(), ids=[f"{d}: {t}" for d, t in TEXTS])
def test_texts(case: tuple[str, str], expected: str) -> None:
    dialect, text = case
    assert written(text, dialect) == expected


REFUSED = [
    ("postgres", "select try_cast(d as integer) as n from t", "no cast that gives NULL"),
    ("sqlite", "select try_cast(d as integer) as n from t", "no cast that gives NULL"),
    ("mysql", "select a, count(*) as n from t group by rollup (a)", "no grouping sets"),
    ("mysql", "select list(a) filter (where a > 1) as n from t", "has no FILTER"),
]


@pytest.mark.parametrize(("dialect", "text", "words"), REFUSED)
def test_what_a_dialect_cannot_say_is_refused(dialect: str, text: str, words: str) -> None:
    with pytest.raises(WriteError, match=words):
        written(text, dialect)


@pytest.mark.parametrize("dialect", ["postgres", "mysql", "spark"])
def test_division_keeps_the_meaning_of_its_own_dialect(dialect: str) -> None:
    """7 / 2 is 3 in PostgreSQL, whose integer division drops the rest, and 3.5 in MySQL and Spark."""
    import duckdb

    text = write_sql(read_sql("select 7 / 2 as q", CATALOG, dialect), "duckdb")
    expected = {"postgres": 3, "mysql": 3.5, "spark": 3.5}[dialect]
    rows = duckdb.connect().execute(text).fetchall()
    assert float(rows[0][0]) == expected
