"""What estimates know: each case on a catalog written by hand, its value worked out beside it."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, datetime

import pytest

from core.algebra.operators import Distinct, Group, Join, Select
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog, Evidence, HeavyHitter, Statistics
from core.language.sql.read import read_sql
from core.size import Size, size
from tests.size.checks import faults

SCHEMA = """
create table facts (a integer not null, b integer not null, kind varchar not null, at timestamp not null,
                    amount integer,
                    foreign key (a, b) references pairs (a, b));
create table pairs (a integer not null, b integer not null, cost integer not null, primary key (a, b));
create table people (id integer not null primary key, region integer not null, name varchar not null);
create table visits (id integer not null references people (id), day date not null, hits integer not null);
"""


def _catalog() -> Catalog:
    words = tuple(f"w{i:03d}{'green' if i % 10 == 0 else 'other'}" for i in range(101))
    start, end = datetime(2026, 1, 1), datetime(2026, 4, 11)
    stamps = tuple(start + (end - start) * i / 100 for i in range(101))
    known = {
        ("facts", "a"): Statistics(distinct=100, nulls=0, low=1, high=100),
        ("facts", "b"): Statistics(distinct=50, nulls=0, low=1, high=50),
        ("facts", "kind"): Statistics(
            distinct=4,
            nulls=0,
            heavy=tuple(
                HeavyHitter(v, n) for v, n in (("in", 50_000), ("out", 30_000), ("lost", 15_000), ("x", 5_000))
            ),
        ),
        ("facts", "at"): Statistics(distinct=90_000, nulls=0, low=start, high=end, histogram=stamps),
        ("facts", "amount"): Statistics(distinct=900, nulls=40_000, low=0, high=1000),
        ("pairs", "a"): Statistics(distinct=100, nulls=0, low=1, high=100),
        ("pairs", "b"): Statistics(distinct=50, nulls=0, low=1, high=50),
        ("pairs", "cost"): Statistics(distinct=100, nulls=0, low=0, high=100),
        ("people", "id"): Statistics(distinct=1000, nulls=0, low=1, high=1000),
        ("people", "region"): Statistics(distinct=5, nulls=0, low=1, high=5),
        ("people", "name"): Statistics(distinct=1000, nulls=0, histogram=words),
        ("visits", "id"): Statistics(distinct=800, nulls=0, low=1, high=1000),
        ("visits", "day"): Statistics(distinct=400, nulls=0, low=date(2025, 1, 1), high=date(2026, 12, 31)),
        ("visits", "hits"): Statistics(distinct=101, nulls=0, low=0, high=100),
    }
    rows = {"facts": 100_000, "pairs": 1000, "people": 1000, "visits": 80_000}
    return Catalog(
        {
            facts.name: replace(
                facts,
                rows=rows[facts.name],
                rows_evidence=Evidence.PROFILED,
                attributes=tuple(
                    replace(a, statistics=replace(known[facts.name, a.name], evidence=Evidence.PROFILED))
                    for a in facts.attributes
                ),
            )
            for facts in catalog_from_ddl(SCHEMA)
        }
    )


CATALOG = _catalog()


def sized(text: str, kind: type | None = None) -> Size:
    """The size of the answer, or of the topmost operator of a kind."""
    formulation = read_sql(text, CATALOG)
    sizes = size(formulation, CATALOG)
    assert not [fault for found in sizes.values() for fault in faults(found)]
    if kind is None:
        return sizes[formulation.root]
    return next(sizes[o] for o in reversed(formulation.operators()) if isinstance(o, kind))


OF_REGION = "(select * from people where region = 3) p"
CASES = [
    # A composite key meets one row, not 1/100 of 1/50: every fact finds its pair.
    ("select 1 from facts f join pairs p on f.a = p.a and f.b = p.b", 100_000),
    ("select 1 from facts f, pairs p where f.a = p.a and f.b = p.b", 100_000),
    # ... also with a filter on the pairs: half of them, so half of the facts.
    ("select 1 from facts f, pairs p where f.a = p.a and f.b = p.b and p.cost < 50", 50_000),
    # An equality that follows from two others keeps every row: 80,000 · 1000 · 1000 / (1000 · 1000).
    ("select 1 from visits v, people p, people q where v.id = p.id and p.id = q.id and v.id = q.id", 80_000),
    # Both sides filtered: the whole domain decides, 80,000 / 101 visits of which a fifth are of region 3.
    ("select 1 from visits v join people p on v.id = p.id where v.hits = 7 and p.region = 3", 80_000 / 101 / 5),
    (
        f"select 1 from (select * from visits where hits = 7) v join {OF_REGION} on v.id = p.id",
        80_000 / 101 / 5,
    ),
    # Ranges that part: nobody.
    (
        "select 1 from (select * from visits where id < 9) v "
        "join (select * from people where id > 12) p on v.id = p.id",
        0,
    ),
    # 800 of the 1000 people are visited, however many are asked for.
    (
        f"select 1 from {OF_REGION} where not exists (select 1 from visits v where v.id = p.id)",
        40,
    ),
    (
        f"select 1 from {OF_REGION} where exists (select 1 from visits v where v.id = p.id)",
        160,
    ),
    ("select 1 from people p anti join visits v on v.id = p.id", 200),
    # Conditions on functions of an attribute whose values are all known are exact.
    ("select 1 from facts where upper(kind) = 'LOST'", 15_000),
    ("select 1 from facts where kind like '%o%'", 45_000),
    ("select 1 from facts where length(kind) > 2 and kind not like 'l%'", 30_000),
    ("select 1 from facts where case when kind = 'in' then 1 else 0 end = 1", 50_000),
    ("select 1 from facts where substring(kind, 1, 1) in ('i', 'x')", 55_000),
    # A day of a timestamp is a range of it: 100 days in all.
    ("select 1 from facts where cast(at as date) = '2026-02-10'", 1000),
    ("select 1 from facts where cast(at as date) < '2026-01-11'", 10_000),
    ("select 1 from visits where year(day) = 2026", 40_000),
    ("select 1 from visits where year(day) > 2026", 0),
    # A pattern is tried on the histogram's bounds: 11 of 101.
    ("select 1 from people where name like '%green%'", 1000 * 11 / 101),
    # Two ranges of one attribute, and NULLs left out.
    ("select 1 from facts where amount >= 250 and amount < 500", 15_000),
    ("select 1 from facts where not (amount < 500)", 30_000),
    ("select 1 from facts where amount is null", 40_000),
    ("select 1 from facts where amount < 500 or amount is null", 1e5 * (1 - 0.7 * 0.6)),
    # Groups: a selected attribute has only the values that are left; what is determined adds nothing.
    ("select kind, count(*) from facts where kind in ('in', 'lost') group by kind", 2),
    ("select kind, count(*) from facts where upper(kind) = 'IN' group by kind", 1),
    ("select id, region, name from people group by id, region, name", 1000),
    ("select p.region, v.id, count(*) from visits v join people p on v.id = p.id group by p.region, v.id", 800),
    ("select year(day), count(*) from visits group by year(day)", 2),
    ("select distinct id, name from people", 1000),
    ("select distinct kind, upper(kind) from facts", 4),
    # Where most people find no partner, the tag is mostly NULL: 80,000 · 99/999 have it.
    (
        "select 1 from people p left join (select id, 'a' as tag from visits where id <= 100) v on v.id = p.id "
        "where tag = 'a'",
        80_000 * 99 / 999,
    ),
    # Outer joins: 200 people without a visit; their NULLs are counted, the rest keeps its shares.
    ("select 1 from people p left join visits v on v.id = p.id", 80_200),
    ("select 1 from people p left join visits v on v.id = p.id where v.id is null", 200),
    ("select 1 from people p left join (select id, 'a' as tag from visits) v on v.id = p.id where tag = 'a'", 80_000),
]


@pytest.mark.parametrize(("text", "rows"), CASES, ids=[text[:70] for text, _ in CASES])
def test_estimates(text: str, rows: float) -> None:
    assert sized(text).rows == pytest.approx(rows, rel=0.02, abs=0.6)


def test_sums_of_groups_are_taken_as_normal() -> None:
    """Hits evenly over 0..100, 100 visits a person: mean 5000, deviation (100·(10,000/12) + 100·2500)^½ = 577.4.

    A sum above 6,000 is 1.732 deviations out: 0.0416 of a normal distribution's mass (any table of it).
    """
    text = "select id, sum(hits) from visits group by id having sum(hits) > 6000"
    assert sized(text).rows == pytest.approx(800 * 0.0416, rel=0.02)
    below = "select id, sum(hits) from visits group by id having sum(hits) <= 6000"
    assert sized(below).rows == pytest.approx(800 * 0.9584, rel=0.02)


def test_counts_of_groups() -> None:
    """A hundred visits a person, as of random falls: deviation 10, so that 120 is two deviations out: 0.0228."""
    text = "select id from visits group by id having count(*) > 120"
    assert sized(text).rows == pytest.approx(800 * 0.0228, rel=0.03)


def test_a_key_with_every_other_attribute_is_no_product() -> None:
    found = sized("select distinct p.id, p.name, v.day from people p join visits v on p.id = v.id", Distinct)
    assert found.rows <= 80_000
    assert "determine the others" in found.derivation[0].text


def test_evidence_is_the_worst_it_rests_on() -> None:
    assert sized("select 1 from facts where kind = 'in'", Select).evidence is Evidence.PROFILED
    assert sized("select 1 from facts where amount > a", Select).evidence is Evidence.ASSUMED
    assert sized("select 1 from people p join visits v on p.id = v.id", Join).evidence is Evidence.PROFILED
    assert sized("select kind from facts where random() < 0.5 group by kind", Group).evidence is Evidence.ASSUMED


def test_a_product_of_very_many_relations_has_a_size() -> None:
    text = "select 1 from " + ", ".join(f"facts f{i}" for i in range(80))
    found = sized(text)
    assert found.rows == 1e300
    assert found.derivation


@pytest.mark.parametrize("joiner", ["and", "or"])
def test_long_conditions_have_a_size(joiner: str) -> None:
    text = "select 1 from facts where " + f" {joiner} ".join(f"(a = {i} and b <> {i})" for i in range(1500))
    assert 0 <= sized(text).rows <= 100_000


def test_deep_conditions_have_a_size() -> None:
    term = "a = 1"
    for i in range(150):
        term = f"not ({term} or b = {i})" if i % 2 else f"({term} and b <> {i})"
    assert 0 <= sized(f"select 1 from facts where {term}").rows <= 100_000
