"""The meaning of SQL's logic and bags, as published."""

from __future__ import annotations

import itertools

import pytest

from core.algebra.scalars import FALSE, TRUE, UNKNOWN_TRUTH, And, Literal, Not, Or
from core.catalog.ddl import catalog_from_ddl
from core.compare import Kind, compare
from core.derive.reject import outcomes
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql

TRUTHS = {"true": TRUE, "false": FALSE, "null": UNKNOWN_TRUTH}
# ISO/IEC 9075-2, truth tables of AND, OR and NOT over true, false, unknown.
AND = {
    ("true", "true"): "true",
    ("true", "false"): "false",
    ("true", "null"): "null",
    ("false", "false"): "false",
    ("false", "null"): "false",
    ("null", "null"): "null",
}
OR = {
    ("true", "true"): "true",
    ("true", "false"): "true",
    ("true", "null"): "true",
    ("false", "false"): "false",
    ("false", "null"): "null",
    ("null", "null"): "null",
}
NOT = {"true": "false", "false": "true", "null": "null"}


def outcome(scalar: object) -> str:
    (only,) = outcomes(scalar, frozenset(), frozenset())  # type: ignore[arg-type]
    return only


@pytest.mark.parametrize(("a", "b"), list(itertools.product(TRUTHS, TRUTHS)))
def test_and_or(a: str, b: str) -> None:
    left, right = TRUTHS[a], TRUTHS[b]
    key = (a, b) if (a, b) in AND else (b, a)
    assert outcome(And((left, right))) == AND[key]
    assert outcome(Or((left, right))) == OR[key]


@pytest.mark.parametrize("a", TRUTHS)
def test_not(a: str) -> None:
    literal: Literal = TRUTHS[a]
    assert outcome(Not(literal)) == NOT[a]


# Multiplicities (ISO/IEC 9075-2): a row m and n times gives m+n, min(m, n), max(0, m-n); 1 or 0 without ALL.
@pytest.mark.parametrize(("m", "n"), [(0, 0), (1, 0), (0, 2), (2, 3), (3, 1), (2, 2)])
def test_multiplicities(m: int, n: int) -> None:
    catalog = catalog_from_ddl("create table l (v integer); create table r (v integer);")
    engine = create_instance(catalog, {"l": [(None,)] * m, "r": [(None,)] * n})
    expected = {
        "union all": m + n,
        "intersect all": min(m, n),
        "except all": max(0, m - n),
        "union": int(m + n > 0),
        "intersect": int(min(m, n) > 0),
        "except": int(m > 0 and n == 0),
    }
    for operation, count in expected.items():
        text = f"select v from l {operation} select v from r"
        assert len(engine.run(write_sql(read_sql(text, catalog))).rows) == count, operation
    engine.close()


PARTS = """
create table parts (pnum integer not null primary key, qoh integer not null);
create table supply (pnum integer, quan integer, shipped date);
"""
# Kim, TODS 1982; Kiessling, VLDB 1985; Ganski, Wong, SIGMOD 1987: the empty-group count (data from memory of the source).
DATA = {
    "parts": [(3, 6), (10, 1), (8, 0)],
    "supply": [
        (3, 4, "1979-07-03"),
        (3, 2, "1978-10-01"),
        (10, 1, "1978-06-08"),
        (10, 2, "1981-08-10"),
        (8, 5, "1983-05-07"),
    ],
}
NESTED = "select pnum from parts where qoh = (select count(shipped) from supply where supply.pnum = parts.pnum and shipped < '1980-01-01')"
JOINED = (
    "select parts.pnum from parts join (select pnum, count(shipped) as n from supply where shipped < '1980-01-01' group by pnum) x "
    "on x.pnum = parts.pnum where qoh = x.n"
)
CAREFUL = (
    "select parts.pnum from parts left join (select pnum, count(shipped) as n from supply where shipped < '1980-01-01' group by pnum) x "
    "on x.pnum = parts.pnum where qoh = coalesce(x.n, 0)"
)


def test_the_empty_group_count() -> None:
    catalog = catalog_from_ddl(PARTS)
    engine = create_instance(catalog, DATA)
    assert {row[0] for row in engine.run(write_sql(read_sql(NESTED, catalog))).rows} == {10, 8}
    assert {row[0] for row in engine.run(write_sql(read_sql(JOINED, catalog))).rows} == {10}
    engine.close()
    nested, joined, careful = (read_sql(text, catalog) for text in (NESTED, JOINED, CAREFUL))
    assert compare(nested, careful, catalog, 4).kind is Kind.EQUAL
    lost = compare(nested, joined, catalog, 4)
    assert lost.kind is Kind.DIFFERENT
    assert lost.witness is not None and lost.witness.rows <= 2


def test_division() -> None:
    """Codd 1972; the suppliers and parts of Date's Introduction to Database Systems (from memory of the source)."""
    from core.algebra.operators import Column, Divide, Project, Relation
    from core.algebra.scalars import Ref, fresh
    from core.algebra.types import TEXT
    from core.language.sql.write import write_query

    catalog = catalog_from_ddl("create table sp (s varchar, p varchar); create table wanted (p varchar);")
    shipped = {"s1": "123456", "s2": "12", "s3": "2", "s4": "245"}
    rows = [(s, f"p{i}") for s, parts in shipped.items() for i in parts]
    for wanted, suppliers in (("123456", {"s1"}), ("245", {"s1", "s4"}), ("2", {"s1", "s2", "s3", "s4"})):
        s, p, q = fresh("s", TEXT), fresh("p", TEXT), fresh("p", TEXT)
        quotient = Divide(Relation("sp", (s, p)), Relation("wanted", (q,)), ((p, q),))
        plan = Project(quotient, (Column(s, Ref(s)),))
        engine = create_instance(catalog, {"sp": rows, "wanted": [(f"p{i}",) for i in wanted]})
        assert {row[0] for row in engine.run(write_query(plan)).rows} == suppliers
        engine.close()
