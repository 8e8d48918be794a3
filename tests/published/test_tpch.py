"""The TPC-H data, schema and queries agree with each other and with published figures (see tpch/README.md)."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import duckdb
import pytest

from tests.data import tpch

QUERIES = tpch.queries()
ANSWERS = tpch.answers()


@pytest.fixture(scope="module")
def engine() -> Iterator[duckdb.DuckDBPyConnection]:
    folder = tpch.folder(0.01)
    with duckdb.connect() as connection:
        for name in tpch.RELATIONS:
            connection.execute(f"create view {name} as from read_parquet('{folder / name}.parquet')")
        yield connection


def test_every_query_is_there() -> None:
    assert list(QUERIES) == list(ANSWERS) == [f"q{number:02}" for number in range(1, 23)]


def test_cardinalities(engine: duckdb.DuckDBPyConnection) -> None:
    # TPC-H specification, clause 4.2.5, at scale factor 0.01; lineitem from the published answer of query 1 below.
    counted = {name: engine.execute(f"select count(*) from {name}").fetchall()[0][0] for name in tpch.RELATIONS}
    expected = {"region": 5, "nation": 25, "part": 2000, "supplier": 100, "partsupp": 8000, "customer": 1500}
    assert counted == expected | {"orders": 15000, "lineitem": 60175}


def test_data_obey_the_schema(engine: duckdb.DuckDBPyConnection) -> None:
    folder = tpch.folder(0.01)
    with duckdb.connect() as constrained:
        constrained.execute(tpch.schema())
        for name in tpch.RELATIONS:
            declared = [row[:2] for row in constrained.execute(f"describe {name}").fetchall()]
            assert declared == [row[:2] for row in engine.execute(f"describe {name}").fetchall()]
            constrained.execute(f"insert into {name} from read_parquet('{folder / name}.parquet')")


# Addresses and comments are pseudo-random text, in which the two generators differ; so query 13, which searches
# comments, has its own test.
FREE_TEXT = {"s_address", "s_comment", "c_address", "c_comment"}


@pytest.mark.parametrize("name", [name for name in QUERIES if name != "q13"])
def test_answer(engine: duckdb.DuckDBPyConnection, name: str) -> None:
    cursor = engine.execute(QUERIES[name])
    columns = [column[0] for column in cursor.description]
    rows = cursor.fetchall()
    expected_columns, expected = ANSWERS[name]
    assert len(columns) == len(expected_columns)
    assert len(rows) == len(expected)
    for row, texts in zip(rows, expected, strict=True):
        for column, value, text in zip(expected_columns, row, texts, strict=True):
            assert column in FREE_TEXT or _same(value, text), (column, row, texts)


def test_answer_of_query_13(engine: duckdb.DuckDBPyConnection) -> None:
    # Clause 4.2.3: a third of the customers have no order. Every customer stands in one group.
    rows = engine.execute(QUERIES["q13"]).fetchall()
    assert rows[0] == (0, 500)
    assert sum(customers for _, customers in rows) == 1500


def _same(value: Any, text: str) -> bool:
    """Whether a value is what the text says; numbers to twelve digits, for averages are floating-point."""
    if value is None:
        return text == ""
    try:
        return math.isclose(float(value), float(text), rel_tol=1e-12)
    except (TypeError, ValueError):
        return str(value) == text
