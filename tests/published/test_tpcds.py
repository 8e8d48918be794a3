"""The TPC-DS data, schema and queries agree with each other (see tpcds/README.md)."""

from __future__ import annotations

import re
from collections.abc import Iterator

import duckdb
import pytest

from tests.data import tpcds

QUERIES = tpcds.queries()
RELATIONS = re.findall(r"create table (\w+)", tpcds.schema())


@pytest.fixture(scope="module")
def engine() -> Iterator[duckdb.DuckDBPyConnection]:
    folder = tpcds.folder(0.01)
    with duckdb.connect() as connection:
        for name in RELATIONS:
            connection.execute(f"create view {name} as from read_parquet('{folder / name}.parquet')")
        yield connection


def test_every_text_is_there() -> None:
    assert list(QUERIES) == [f"q{number:02}" for number in range(1, 100)]
    assert len(RELATIONS) == 24
    with duckdb.connect() as constrained:
        constrained.execute(tpcds.schema())
        for name, query in QUERIES.items():
            assert constrained.execute(f"explain {query}").fetchall(), name


@pytest.mark.soak
def test_data_obey_the_schema(engine: duckdb.DuckDBPyConnection) -> None:
    with duckdb.connect() as constrained:
        constrained.execute(tpcds.schema())
        for name in RELATIONS:
            path = tpcds.folder(0.01) / f"{name}.parquet"
            declared = [row[:2] for row in constrained.execute(f"describe {name}").fetchall()]
            assert declared == [row[:2] for row in engine.execute(f"describe {name}").fetchall()]
            constrained.execute(f"insert into {name} from read_parquet('{path}')")


@pytest.mark.soak
@pytest.mark.parametrize("name", QUERIES)
def test_query_runs(engine: duckdb.DuckDBPyConnection, name: str) -> None:
    engine.execute(QUERIES[name]).fetchall()
