"""Verdicts over pairs that reviewers know. Never a wrong one; most equal pairs proved, nearly all different ones refuted."""

from __future__ import annotations

import tomllib
from functools import cache
from pathlib import Path

import pytest

from core.catalog.ddl import catalog_from_ddl
from core.compare import Kind, Verdict, compare
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from tests.generate.queries import SCHEMA

CATALOG = catalog_from_ddl(SCHEMA)
PAIRS = tomllib.loads((Path(__file__).parent / "pairs.toml").read_text(encoding="utf-8"))
SECONDS = {"equal": 1.5, "different": 4.0}


@cache
def judged(kind: str, number: int) -> Verdict:
    pair = PAIRS[kind][number]
    return compare(read_sql(pair["a"], CATALOG), read_sql(pair["b"], CATALOG), CATALOG, SECONDS[kind])


def cases(kind: str) -> list[object]:
    return [pytest.param(i, id=pair["why"][:60]) for i, pair in enumerate(PAIRS[kind])]


@pytest.mark.parametrize("number", cases("equal"))
def test_an_equal_pair_is_never_refuted(number: int) -> None:
    verdict = judged("equal", number)
    assert verdict.kind is not Kind.DIFFERENT, verdict.reasons


@pytest.mark.parametrize("number", cases("different"))
def test_a_different_pair_is_never_proved(number: int) -> None:
    verdict = judged("different", number)
    assert verdict.kind is not Kind.EQUAL, verdict.proof
    if verdict.witness is not None:
        engine = create_instance(CATALOG, verdict.witness.data)
        pair = PAIRS["different"][number]
        results = [sorted(map(repr, engine.run(pair[side]).rows)) for side in "ab"]
        engine.close()
        assert results[0] != results[1]


def test_how_much_is_decided() -> None:
    """At least 85 % of equal pairs proved, 98 % of different ones refuted, with witnesses of three rows a relation at the median."""
    equal = [judged("equal", i).kind is Kind.EQUAL for i in range(len(PAIRS["equal"]))]
    different = [judged("different", i) for i in range(len(PAIRS["different"]))]
    refuted = [v.kind is Kind.DIFFERENT for v in different]
    unproved = [PAIRS["equal"][i]["why"] for i, ok in enumerate(equal) if not ok]
    missed = [PAIRS["different"][i]["why"] for i, ok in enumerate(refuted) if not ok]
    assert sum(equal) >= 0.85 * len(equal), unproved
    assert sum(refuted) >= 0.98 * len(refuted), missed
    largest = sorted(max(len(rows) for rows in v.witness.data.values()) for v in different if v.witness is not None)
    assert largest[len(largest) // 2] <= 3


def test_functions_that_differ_from_call_to_call_are_left_undecided() -> None:
    query = read_sql("select a, random() as x from r", CATALOG)
    assert compare(query, query, CATALOG, 1.0).kind is Kind.NO_DIFFERENCE


def test_other_names_are_said_apart() -> None:
    a, b = read_sql("select a as x from r", CATALOG), read_sql("select a as y from r", CATALOG)
    verdict = compare(a, b, CATALOG, 1.0)
    assert verdict.kind is Kind.EQUAL
    assert verdict.asides == ("other column names: x / y",)


def test_another_number_of_columns_is_different() -> None:
    a, b = read_sql("select a from r", CATALOG), read_sql("select a, b from r", CATALOG)
    assert compare(a, b, CATALOG, 1.0).kind is Kind.DIFFERENT


def test_a_witness_recreates_itself() -> None:
    a, b = read_sql("select a from r where c > 2", CATALOG), read_sql("select a from r where c >= 2", CATALOG)
    witness = compare(a, b, CATALOG, 4.0).witness
    assert witness is not None
    import duckdb

    connection = duckdb.connect()
    connection.execute(witness.sql())
    assert (
        connection.execute("select a from r where c > 2").fetchall()
        != connection.execute("select a from r where c >= 2").fetchall()
    )
    connection.close()
