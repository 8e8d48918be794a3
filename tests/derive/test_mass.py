"""Random queries over random data: no derived fact is ever denied by a row."""

from __future__ import annotations

import random

import pytest

from core.catalog.ddl import catalog_from_ddl
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from tests.derive.probe import broken
from tests.generate.queries import SCHEMA, QueryMaker, random_data

CATALOG = catalog_from_ddl(SCHEMA)


def check(seeds: range, queries: int) -> None:
    for seed in seeds:
        rng = random.Random(seed)
        engine = create_instance(CATALOG, random_data(rng))
        for number in range(queries):
            text = QueryMaker(rng, 2).query()
            found = broken(read_sql(text, CATALOG), CATALOG, engine, rng)
            assert not found, f"seed {seed}, query {number}: {text}\n" + "\n".join(found)
        engine.close()


def test_facts_of_random_queries_hold() -> None:
    check(range(40), 4)


@pytest.mark.soak
def test_facts_of_very_many_random_queries_hold() -> None:
    check(range(1000, 1600), 8)
