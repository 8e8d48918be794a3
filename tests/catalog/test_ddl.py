"""Catalogs from DDL and back, and what is said of DDL that cannot be read."""

from __future__ import annotations

import duckdb
import pytest

from core.catalog.ddl import CatalogError, catalog_from_ddl, ddl_of
from core.catalog.model import ForeignKey
from tests.data import demo, tpcds, tpch

EVERYTHING = """
create table a (x integer primary key, y varchar not null unique, "odd name" decimal(12, 2) check ("odd name" > 0));
create table b (
    p integer, q bigint, r date not null,
    constraint pk primary key (p, q),
    constraint fk foreign key (p) references a (x),
    unique (q, r),
    check (q >= 0)
);
create table c (z integer references a);
alter table c add constraint again foreign key (z) references a (x);
create unique index i on c (z);
comment on table c is 'said';
"""


def test_every_form_of_constraint() -> None:
    catalog = catalog_from_ddl(EVERYTHING)
    a, b, c = (catalog.relation(name) for name in "abc")
    assert a is not None and b is not None and c is not None
    assert a.primary == ("x",) and a.unique == (("y",),) and a.checks == ('"odd name" > 0',)
    assert [x.nullable for x in a.attributes] == [False, False, True]
    assert b.primary == ("p", "q") and b.unique == (("q", "r"),) and b.checks == ("q >= 0",)
    assert b.foreign_keys == (ForeignKey(("p",), "a", ("x",)),)
    assert c.foreign_keys[0] == ForeignKey(("z",), "a", ("x",)) and c.unique == (("z",),)


@pytest.mark.parametrize(
    "text", [EVERYTHING, demo.schema(), tpch.schema(), tpcds.schema()], ids=["all", "demo", "tpch", "tpcds"]
)
def test_written_ddl_says_the_same_and_the_engine_takes_it(text: str) -> None:
    catalog = catalog_from_ddl(text)
    again = catalog_from_ddl(ddl_of(catalog))
    assert dict(again.relations) == dict(catalog.relations)
    connection = duckdb.connect()
    connection.execute(ddl_of(catalog))
    connection.close()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("create table t (a integer, primary key (b))", "has no attribute b"),
        ("create table t (a integer); create table T (a integer)", "declared twice"),
        ("create table t (a integer references u (x)); create table u (y integer)", "has not: x"),
        ("create table t (a integer references u); create table u (y integer)", "has no primary key"),
        ("select 1", "declares no relation"),
        ("create table t as select 1 as a", "without its attributes"),
        ("create table t (a integer", "Expecting"),
    ],
)
def test_errors_in_words(text: str, message: str) -> None:
    with pytest.raises(CatalogError, match=message):
        catalog_from_ddl(text)
