"""Verdicts over pairs that reviewers know. Never a wrong one; most equal pairs proved, nearly all different ones refuted."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import pytest

from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog
from core.compare import Kind, Verdict, compare
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from tests.generate.queries import SCHEMA

CATALOG = catalog_from_ddl(SCHEMA)
HERE = Path(__file__).parent
SECONDS = {"equal": 0.5, "different": 4.0}


@dataclass(frozen=True)
class Pair:
    """Two texts over one schema. `rare`: true, but hard to decide here; only a wrong verdict would count."""

    kind: str
    file: str
    why: str
    a: str
    b: str
    rare: bool = False


def all_pairs() -> Iterator[Pair]:
    for path in [HERE / "pairs.toml", *sorted((HERE / "pairs").glob("*.toml"))]:
        read = tomllib.loads(path.read_text(encoding="utf-8"))
        SCHEMAS[path.stem] = catalog_from_ddl(read.get("schema", SCHEMA))
        for kind in SECONDS:
            for entry in read[kind]:
                yield Pair(kind, path.stem, **entry)


SCHEMAS: dict[str, Catalog] = {}
PAIRS = list(all_pairs())


@cache
def judged(pair: Pair) -> Verdict:
    catalog = SCHEMAS[pair.file]
    seconds = 0.5 if pair.rare else SECONDS[pair.kind]
    return compare(read_sql(pair.a, catalog), read_sql(pair.b, catalog), catalog, seconds)


def cases(kind: str) -> list[object]:
    return [pytest.param(p, id=f"{p.file}: {p.why[:60]}") for p in PAIRS if p.kind == kind]


@pytest.mark.parametrize("pair", cases("equal"))
def test_an_equal_pair_is_never_refuted(pair: Pair) -> None:
    verdict = judged(pair)
    assert verdict.kind is not Kind.DIFFERENT, verdict.reasons


@pytest.mark.parametrize("pair", cases("different"))
def test_a_different_pair_is_never_proved(pair: Pair) -> None:
    verdict = judged(pair)
    assert verdict.kind is not Kind.EQUAL, verdict.proof
    if verdict.witness is not None:
        engine = create_instance(SCHEMAS[pair.file], verdict.witness.data)
        results = [sorted(map(repr, engine.run(text).rows)) for text in (pair.a, pair.b)]
        engine.close()
        assert results[0] != results[1]


def test_every_pair_runs() -> None:
    """A pair that does not run on the engine would be left undecided for the wrong reason."""
    for pair in PAIRS:
        engine = create_instance(SCHEMAS[pair.file], {})
        engine.run(pair.a)
        engine.run(pair.b)
        engine.close()


def test_how_much_is_decided() -> None:
    """At least 85 % of equal pairs proved, 98 % of different ones refuted, with witnesses of three rows a relation at the median."""
    counted = [pair for pair in PAIRS if not pair.rare]
    equal = [pair for pair in counted if pair.kind == "equal"]
    different = [pair for pair in counted if pair.kind == "different"]
    assert len(equal) >= 50 and len(different) >= 50
    unproved = [pair.why for pair in equal if judged(pair).kind is not Kind.EQUAL]
    missed = [pair.why for pair in different if judged(pair).kind is not Kind.DIFFERENT]
    assert len(unproved) <= 0.15 * len(equal), unproved
    assert len(missed) <= 0.02 * len(different), missed
    witnesses = [w for w in (judged(pair).witness for pair in different) if w is not None]
    largest = sorted(max(len(rows) for rows in w.data.values()) for w in witnesses)
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
