"""Three-valued logic with attributes NULL: what is said to be possible covers what an engine gives, row by row."""

from __future__ import annotations

import itertools
import random
from typing import Any

import pytest

from core.algebra.operators import Select
from core.algebra.scalars import Attribute, Scalar
from core.catalog.ddl import catalog_from_ddl
from core.derive.reject import FALSE, NULL, TRUE, VALUE, can_be_null, outcomes, rejects_null, rejects_null_each
from core.engine.duckdb_engine import DuckEngine
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from tests.generate.queries import QueryMaker, _Scope

SCHEMA = "create table v (a integer, b integer, d varchar);"
CATALOG = catalog_from_ddl(SCHEMA)
ROWS: list[tuple[Any, ...]] = list(itertools.product((None, 0, 1, 3), (None, 0, 2), (None, "x", "")))
SCOPE = _Scope([("a", False), ("b", False), ("d", True)])
MORE = [
    "coalesce(a, b) = 1",
    "coalesce(a, b, 0) >= 0",
    "a is distinct from b",
    "a is not distinct from null",
    "not (a is distinct from b)",
    "(a = 1) is true",
    "(a = 1) is not true",
    "not ((a = b) is false)",
    "nullif(a, 1) = b",
    "case when a is null then true else b > 0 end",
    "case a when 1 then b = 2 end",
    "a in (0, null, b)",
    "a not in (0, null)",
    "a between b and 3",
    "not (a between b and 3)",
    "d like 'x%'",
    "d not like '%'",
    "upper(d) = 'X' or a is null",
    "length(d) = a",
    "abs(a) = b and d is not null",
    "cast(a as varchar) = d",
    "try_cast(d as integer) is null",
    "greatest(a, b) = 3",
    "least(a, b) = 0",
    "concat(d, 'y') = 'y'",
    "d || 'y' = 'y'",
    "a / b = 1",
    "a % 2 = 1",
    "-a = b",
    "if(a is null, b, a) = 0",
    "a = 1 or (b = 2 and d = 'x') or not (a = 1)",
]


@pytest.fixture(scope="module")
def engine() -> Any:
    made = create_instance(CATALOG, {"v": ROWS})
    yield made
    made.close()


def condition_of(text: str) -> tuple[Scalar, dict[str, Attribute]]:
    formulation = read_sql(f"select * from v where {text}", CATALOG)
    select = next(o for o in formulation.operators() if isinstance(o, Select))
    found = {a.name: a for a, _ in formulation.outputs[0].columns}
    return select.condition, found


def kind(value: Any) -> str:
    return NULL if value is None else TRUE if value is True else FALSE if value is False else VALUE


def check(text: str, engine: DuckEngine) -> None:
    condition, by_name = condition_of(text)
    rows = engine.run(f"select a, b, d, ({text}) from v").rows
    each = rejects_null_each(condition)
    for *values, truth in rows:
        held = dict(zip(("a", "b", "d"), values, strict=True))
        null = frozenset(by_name[name] for name, value in held.items() if value is None)
        present = frozenset(by_name.values()) - null
        assert kind(truth) in outcomes(condition, null, present), (text, held, truth)
        for some in range(len(null) + 1):
            for part in itertools.combinations(sorted(null), some):
                assert kind(truth) in outcomes(condition, frozenset(part), frozenset()), (text, held, part)
                assert not (truth is True and part and rejects_null(condition, part)), (text, held, part)
        assert not (truth is True and each & null), (text, held)
        assert truth is not None or can_be_null(condition, present), (text, held)


@pytest.mark.parametrize("text", MORE)
def test_constructs(text: str, engine: DuckEngine) -> None:
    check(text, engine)


def test_random_conditions(engine: DuckEngine) -> None:
    for seed in range(250):
        check(QueryMaker(random.Random(seed)).condition(SCOPE, 0, None), engine)


@pytest.mark.soak
def test_very_many_random_conditions(engine: DuckEngine) -> None:
    for seed in range(1000, 12_000):
        check(QueryMaker(random.Random(seed)).condition(SCOPE, 0, None), engine)


@pytest.mark.parametrize(
    ("text", "rejected"),
    [
        ("a = 1", "a"),
        ("a > b", "ab"),
        ("a is not null", "a"),
        ("a = 1 or a = 2", "a"),
        ("a = 1 or b = 2", ""),
        ("a = 1 and b = 2", "ab"),
        ("not (a = 1)", "a"),
        ("a is null", ""),
        ("not (a is null or b is null)", "ab"),
        ("coalesce(a, 0) = 0", ""),
        ("coalesce(a, b) = 0", ""),
        ("(a = 1) is not true", ""),
        ("(a = 1) is true", "a"),
        ("upper(d) = 'X'", "d"),
        ("d like 'x%'", "d"),
        ("a in (1, 2)", "a"),
        ("a not in (1, 2)", "a"),
        ("a in (1, null)", "a"),
        ("a not in (1, null)", "abd"),
        ("a is not distinct from b", ""),
        ("a is not distinct from 1", "a"),
        ("case when a = 1 then true else false end", "a"),
        ("a + b > 0", "ab"),
    ],
)
def test_which_attributes_a_condition_rejects(text: str, rejected: str) -> None:
    """Not only sound but also sharp: these are what a reader of the condition sees. (One never true rejects what it reads.)"""
    condition, by_name = condition_of(text)
    read = {name for name, a in by_name.items() if rejects_null(condition, (a,))}
    assert read == set(rejected)
