"""Facts that a reader of the query sees: keys, NULLs and dependencies through every kind of operator."""

from __future__ import annotations

import random

import pytest

from core.catalog.ddl import catalog_from_ddl
from core.derive.facts import Facts
from core.engine.instance import create_instance
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.size import size
from tests.derive.probe import broken, runs

CATALOG = catalog_from_ddl(
    """
    create table p (id integer not null primary key, code varchar unique, tag varchar not null unique, n integer);
    create table c (id integer not null primary key, p_id integer not null references p (id), q integer, n integer not null);
    create table m (x integer not null, y integer not null, z integer, primary key (x, y));
    create table bag (v integer, w integer not null);
    """
)
FACTS = Facts(CATALOG)


def keys(text: str) -> set[str]:
    """The keys of the answer: names joined by blanks, the empty text for at most one row."""
    formulation = read_sql(text, CATALOG)
    names = dict(formulation.outputs[0].columns)
    found = FACTS.keys(formulation.root)
    return {" ".join(sorted(names.get(a, f"({a.name})") for a in key)) for key in found}


KEYS = [
    # A unique key over an attribute that may be NULL lets rows repeat; one that is never NULL does not.
    ("select id, code, tag from p", {"id", "tag"}),
    ("select id, code, tag from p where code is not null", {"id", "tag"}),
    ("select code from p", set()),
    ("select v, w from bag", set()),
    # Renamed, computed, dropped.
    ("select id as i, id + 1 as j from p", {"i"}),
    ("select x from m", set()),
    ("select y as b, x as a from m", {"a b"}),
    # Constants and equal attributes.
    ("select y from m where x = 3", {"y"}),
    ("select z from m where x = 3 and y = 4", {""}),
    ("select z from m where x = y", set()),
    ("select x from m where x = y", {"x"}),
    ("select y from m where x = y", {"y"}),
    ("select y from m where x in (3)", {"y"}),
    # Joins: n to 1 keeps the many side's key, n to m needs both.
    ("select c.id as i, p.tag as t from c join p on c.p_id = p.id", {"i"}),
    ("select p.id as i, m.x as x, m.y as y from p join m on p.id = m.x", {"x y"}),
    ("select c.id as i, m.x as x, m.y as y from c, m", {"i x y"}),
    ("select c.id as i, p.id as k from c left join p on c.p_id = p.id", {"i"}),
    ("select p.id as k, c.id as i from p left join c on c.p_id = p.id", {"i k"}),
    ("select c.id as i, p.id as k from p right join c on c.p_id = p.id", {"i"}),
    ("select p.id as k, c.id as i from p full join c on c.p_id = p.id", {"i k"}),
    ("select c.id as i from c semi join p on c.p_id = p.id", {"i"}),
    ("select c.id as i from c anti join p on c.p_id = p.id", {"i"}),
    ("select c.id as i, (select max(n) from p where p.id = c.p_id) as h from c", {"i"}),
    ("select c.id as i, c.q in (select n from p) as h from c", {"i"}),
    # Groups.
    ("select v, count(*) as n from bag group by v", {"v"}),
    ("select count(*) as n from bag", {""}),
    ("select id, tag, count(*) as k from p group by id, tag", {"id", "tag"}),
    ("select q, n, count(*) as k from c group by grouping sets ((q), (n))", set()),
    # Duplicates removed, set operations.
    ("select distinct v, w from bag", {"v w"}),
    ("select distinct id, n from p", {"id"}),
    ("select v from bag union select w from bag", {"v"}),
    ("select v from bag union all select w from bag", set()),
    ("select id from p union all select id from c", set()),
    ("select id, n from p except select v, w from bag", {"id"}),
    ("select id, n from p except all select v, w from bag", {"id"}),
    ("select v from bag intersect all select w from bag", set()),
    ("select id from p intersect all select w from bag", {"id"}),
    # Limits, values, windows.
    ("select v from bag order by w limit 1", {""}),
    ("select v from bag order by w limit 2", set()),
    ("select id from p order by n limit 5", {"id"}),
    ("select 1 as one", {""}),
    ("select v, row_number() over (order by w) as r from bag", {"r"}),
    ("select w, row_number() over (partition by w order by v) as r from bag", {"r w"}),
    ("select w, rank() over (order by v) as r from bag", set()),
]


@pytest.mark.parametrize(("text", "expected"), KEYS, ids=[text for text, _ in KEYS])
def test_keys(text: str, expected: set[str]) -> None:
    assert keys(text) == expected


def never_null(text: str) -> str:
    formulation = read_sql(text, CATALOG)
    found = FACTS.never_null(formulation.root)
    return " ".join(name for a, name in formulation.outputs[0].columns if a in found)


NEVER_NULL = [
    ("select id, code, tag, n from p", "id tag"),
    ("select id, code, n from p where code like 'a%' and n > 1", "id code n"),
    ("select id, n from p where n > 1 or id = 2", "id"),
    ("select c.id as i, p.id as k from c left join p on c.p_id = p.id", "i"),
    ("select c.id as i, p.id as k from c right join p on c.p_id = p.id", "k"),
    ("select c.id as i, p.id as k from c full join p on c.p_id = p.id", ""),
    ("select c.q as q, p.n as n from c join p on c.q = p.n", "q n"),
    ("select w, count(v) as a, sum(v) as b, sum(w) as d, max(w) as e from bag group by w", "w a d e"),
    ("select count(v) as a, sum(w) as b from bag", "a"),
    ("select w, sum(w) filter (where v > 0) as b from bag group by w", "w"),
    ("select w, count(*) as k from bag group by rollup (w)", "k"),
    ("select coalesce(v, w) as a, coalesce(v, 0) as b, v + w as d, w * 2 as e from bag", "a b e"),
    ("select case when v > 0 then w end as a, case when v > 0 then w else 0 end as b from bag", "b"),
    (
        "select exists (select 1 from p where p.n = bag.v) as a, v in (select n from p) as b, w in (select id from p) as d from bag",
        "a d",
    ),
    ("select w, (select max(n) from p) as a, (select count(*) from p) as b from bag", "w b"),
    ("select w, (select p.id from p where p.id = bag.w) as a from bag", "w"),
    ("select w from bag union all select v from bag", ""),
    ("select w from bag union select id from p", "w"),
    ("select v from bag intersect select w from bag", "v"),
    ("select w from bag except select v from bag", "w"),
    ("select row_number() over () as a, lag(w) over (order by w) as b, sum(w) over () as d from bag", "a d"),
    ("select nullif(w, 1) as a, try_cast(w as varchar) as b, cast(w as varchar) as d from bag", "d"),
]


@pytest.mark.parametrize(("text", "expected"), NEVER_NULL, ids=[text for text, _ in NEVER_NULL])
def test_never_null(text: str, expected: str) -> None:
    assert never_null(text) == expected


def test_dependencies() -> None:
    formulation = read_sql("select c.id, c.p_id, p.id as k, p.tag, p.n from c join p on c.p_id = p.id", CATALOG)
    names = {name: a for a, name in formulation.outputs[0].columns}
    determined = FACTS.determined(formulation.root, [names["p_id"]])
    assert {"k", "tag", "n"} <= {name for name, a in names.items() if a in determined}
    assert names["id"] not in determined
    assert FACTS.determined(formulation.root, [names["id"]]) >= set(names.values())


def test_an_outer_join_keeps_no_equality() -> None:
    formulation = read_sql("select c.p_id, p.id, p.tag from c left join p on c.p_id = p.id", CATALOG)
    found = FACTS.of(formulation.root)
    assert not found.same
    assert not found.constants


def test_a_constant_of_the_padded_side_is_none_after_an_outer_join() -> None:
    formulation = read_sql(
        "select c.id, x.n from c left join (select id, n from p where n = 3) x on c.p_id = x.id", CATALOG
    )
    assert not FACTS.of(formulation.root).constants


def test_deep_graphs() -> None:
    text = "select v from bag" + " union all select v from bag" * 600
    assert FACTS.keys(read_sql(text, CATALOG).root) == frozenset()
    steps = ["s0 as (select id, n from p)"] + [
        f"s{i} as (select id, n + 1 as n from s{i - 1} where n > {i})" for i in range(1, 700)
    ]
    assert keys(f"with {', '.join(steps)} select id, n from s699") == {"id"}


CASTS = catalog_from_ddl(
    """
    create table numbers (n bigint not null primary key);
    create table words (w varchar not null primary key);
    create table measures (x double not null primary key);
    create table days (d date not null primary key);
    create table moments (t timestamp not null primary key);
    """
)
DATA = {
    "numbers": [(1,), (2**53,), (2**53 + 1,)],
    "words": [("1",), ("01",), ("+1",)],
    "measures": [(1.0,), (2.0**53,)],
    "days": [("2026-01-01",), ("2026-01-02",)],
    "moments": [("2026-01-01 00:00:00",), ("2026-01-01 12:00:00",)],
}
CAST_CASES = [
    "select * from numbers join words on n = w",
    "select * from words where w = 1",
    "select * from numbers join measures on n = x",
    "select * from numbers where n = cast(9007199254740992 as double)",
    "select * from numbers where n in (cast(9007199254740992 as double))",
    "select * from measures where x = 9007199254740993",
    "select * from days join moments on d = t",
    "select * from moments where t = date '2026-01-01'",
    "select * from numbers left join words on n = w",
    "select n from numbers except select x from measures where x < 0",
]


@pytest.mark.parametrize("text", CAST_CASES)
def test_equality_after_a_cast_is_not_sameness(text: str) -> None:
    """'01' and '1' both equal 1, and 2^53 + 1 equals 2^53 as a double: no key, constant or bound may rest on it."""
    engine = create_instance(CASTS, DATA)
    engine._relations = list(DATA)
    catalog, _ = profile(engine, CASTS)
    formulation = read_sql(text, catalog)
    sizes = size(formulation, catalog)
    assert broken(formulation, catalog, engine, random.Random(1)) == []
    for operator in formulation.operators():
        (rows,) = runs(operator, engine, random.Random(1))
        high = sizes[operator].high
        assert sizes[operator].low <= len(rows) and (high is None or len(rows) <= high), text
    engine.close()
