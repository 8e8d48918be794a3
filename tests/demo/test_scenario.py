"""The demo scenario keeps its word: constraints, planted facts, queries, determinism."""

from __future__ import annotations

import re
import subprocess
import sys
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import duckdb
import pytest

from tests.data import demo

RELATIONS = demo.generator().RELATIONS
QUERIES = demo.queries()
LATE = "delivered_at > promised_at"


@pytest.fixture(scope="module")
def engine() -> Iterator[duckdb.DuckDBPyConnection]:
    with _engine(demo.folder()) as connection:
        yield connection


def _engine(folder: Path) -> duckdb.DuckDBPyConnection:
    connection = duckdb.connect()
    for name in RELATIONS:
        connection.execute(f"create view {name} as from read_parquet('{folder / name}.parquet')")
    return connection


def _row(engine: duckdb.DuckDBPyConnection, sql: str) -> Any:
    found = engine.execute(sql).fetchall()
    assert len(found) == 1
    return found[0]


def _value(engine: duckdb.DuckDBPyConnection, sql: str) -> Any:
    (value,) = _row(engine, sql)
    return value


# The schema -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("scale", "seed"), [(1.0, 1), (0.05, 2), (0.001, 3)])
def test_data_obey_every_constraint(scale: float, seed: int) -> None:
    folder = demo.folder(scale, seed)
    with duckdb.connect() as constrained:
        constrained.execute(demo.schema())
        for name in RELATIONS:
            rows = f"from read_parquet('{folder / name}.parquet')"
            declared = [row[:2] for row in constrained.execute(f"describe {name}").fetchall()]
            assert declared == [row[:2] for row in constrained.execute(f"describe {rows}").fetchall()]
            if name in ("depots", "drivers"):  # they refer to themselves: rows one by one, the referenced ones first
                for row in constrained.execute(rows).fetchall():
                    constrained.execute(f"insert into {name} values ({', '.join('?' * len(row))})", row)
            else:
                constrained.execute(f"insert into {name} {rows}")
            assert _value(constrained, f"select count(*) from {name}") == _value(constrained, f"select count(*) {rows}")


def test_every_relation_is_declared_and_made() -> None:
    assert tuple(re.findall(r"create table (\w+)", demo.schema())) == RELATIONS
    assert sorted(path.stem for path in demo.folder().iterdir()) == sorted(RELATIONS)


def test_size_of_the_small_scenario(engine: duckdb.DuckDBPyConnection) -> None:
    counts = {name: _value(engine, f"select count(*) from {name}") for name in RELATIONS}
    assert 300_000 <= sum(counts.values()) <= 1_000_000
    assert max(counts, key=lambda name: counts[name]) == "scans"


def test_readme_gives_the_figures_and_the_queries(engine: duckdb.DuckDBPyConnection) -> None:
    text = (demo.DEMO / "README.md").read_text(encoding="utf-8")
    table = re.findall(r"^\| ([a-z_, ]+) \| ([\d, ]+) \|", text, re.MULTILINE)
    said = {
        name: int(count.replace(",", ""))
        for names, counts in table
        for name, count in zip(names.split(", "), counts.split(", "), strict=True)
    }
    # Within two percent: another version of NumPy may draw other numbers.
    counted = {name: _value(engine, f"select count(*) from {name}") for name in RELATIONS}
    assert said == pytest.approx(counted, rel=0.02)
    listed = re.findall(r"^\| (\d\d-[a-z-]+)( a, b)? \|", text, re.MULTILINE)
    assert [f"{name}{part}" for name, pair in listed for part in ((".a", ".b") if pair else ("",))] == list(QUERIES)
    joined = f"parcels p join scans using (parcel_id) join notices using (parcel_id) where {LATE}"
    rows = _value(engine, f"select count(*) from {joined}")
    late = _value(engine, f"select count(*) from parcels where {LATE}")
    found = re.search(r"\(([\d,]+) rows for ([\d,]+) late parcels\)", text)
    assert found is not None
    assert [int(figure.replace(",", "")) for figure in found.groups()] == pytest.approx([rows, late], rel=0.02)


# Planted facts --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("attribute", "low", "high"), [("depot_id", 0.22, 0.26), ("merchant_id", 0.20, 0.24)])
def test_skew(engine: duckdb.DuckDBPyConnection, attribute: str, low: float, high: float) -> None:
    shares = [
        share
        for (share,) in engine.execute(
            f"select count(*) / sum(count(*)) over () as share from parcels group by {attribute} order by share desc"
        ).fetchall()
    ]
    assert low < shares[0] < high
    assert shares[0] > 2.5 * shares[1]
    assert shares[1] > 3 * shares[len(shares) // 2]  # a long tail below the heaviest


def test_late_parcels_are_busy(engine: duckdb.DuckDBPyConnection) -> None:
    late_share = _value(engine, f"select avg(coalesce({LATE}, false)::integer) from parcels")
    assert 0.07 < late_share < 0.10
    by_parcel = f"""
        select coalesce({LATE}, false) as late, delivered_at - promised_at as delay,
            (select count(*) from scans s where s.parcel_id = p.parcel_id) as scans,
            (select count(*) from notices n where n.parcel_id = p.parcel_id) as notices
        from parcels p
    """
    facts = "avg(scans), avg(notices), avg(scans * notices), avg((scans = 0)::integer), avg((notices = 0)::integer)"
    scans, notices, both, unseen, untold = _row(engine, f"select {facts} from ({by_parcel}) where late")
    assert 13 < scans < 15.5
    assert 9 < notices < 11.5
    assert both > 1.04 * scans * notices  # the product of the averages is too low an estimate
    assert 0.005 < unseen < 0.02
    assert 0.02 < untold < 0.05
    scans, notices, *_ = _row(engine, f"select {facts} from ({by_parcel}) where not late")
    assert 6 < scans < 8
    assert 1 < notices < 2
    assert _value(engine, f"select corr(epoch(delay), scans) from ({by_parcel}) where late") > 0.5


def test_first_query_explodes(engine: duckdb.DuckDBPyConnection) -> None:
    joined = _value(
        engine,
        f"select count(*) from parcels p join scans using (parcel_id) join notices using (parcel_id) where {LATE}",
    )
    late = _value(engine, f"select count(*) from parcels where {LATE}")
    assert joined > 100 * late
    assert joined > 400_000


def test_correlation(engine: duckdb.DuckDBPyConnection) -> None:
    weights = dict(engine.execute("select service, avg(weight_kg) from parcels group by service").fetchall())
    assert weights["letter"] < 0.5 < weights["express"] < weights["standard"] < 10 < weights["freight"]
    promised = dict(
        engine.execute("""
        select p.service, min(date_diff('day', p.posted_at, p.promised_at) = s.promise_days)
        from parcels p join services s using (service) group by p.service
    """).fetchall()
    )
    assert promised == {"letter": True, "standard": True, "express": True, "freight": True}
    same_region = _value(
        engine,
        """select avg((c.region_id = d.region_id)::integer) from parcels p
        join customers c using (customer_id) join depots d on d.depot_id = p.depot_id""",
    )
    assert 0.95 < same_region < 0.99
    heavy, others = (
        _value(engine, f"select avg(({LATE})::integer) from parcels where depot_id {sign} 17") for sign in ("=", "<>")
    )
    assert heavy > 1.6 * others


def test_nulls(engine: duckdb.DuckDBPyConnection) -> None:
    shares = {
        "parcels.delivered_at": (0.02, 0.04),
        "parcels.customer_id": (0.05, 0.07),
        "parcels.declared_value": (0.38, 0.42),
        "notices.parcel_id": (0.015, 0.025),
        "claims.amount": (0.15, 0.25),
        "notice_feed.parcel_ref": (0.01, 0.03),
    }
    for name, (low, high) in shares.items():
        relation, attribute = name.split(".")
        share = _value(engine, f"select avg(({attribute} is null)::integer) from {relation}")
        assert low < share < high, name


def test_depots_form_a_tree(engine: duckdb.DuckDBPyConnection) -> None:
    levels = engine.execute("""
        with recursive below as (
            select depot_id, 0 as level from depots where hub_id is null
            union all
            select d.depot_id, b.level + 1 from depots d join below b on b.depot_id = d.hub_id
        )
        select level, count(*) from below group by level order by level
    """).fetchall()
    assert levels[0] == (0, 1)
    assert len(levels) == 4
    assert sum(count for _, count in levels) == _value(engine, "select count(*) from depots")


def test_feed_repeats_itself(engine: duckdb.DuckDBPyConnection) -> None:
    rows = _value(engine, "select count(*) from notice_feed")
    different = _value(engine, "select count(*) from (select distinct * from notice_feed)")
    assert 0.8 * rows < different < 0.9 * rows


def test_tariffs_tile(engine: duckdb.DuckDBPyConnection) -> None:
    priced = _row(
        engine,
        """
        select count(*), count(distinct p.parcel_id) from parcels p join tariffs t
        on p.weight_kg >= t.weight_from and p.weight_kg < t.weight_to
        and p.posted_at >= t.valid_from and p.posted_at < t.valid_to
    """,
    )
    assert priced == (40_000, 40_000)


def test_some_drivers_hold_all_permits(engine: duckdb.DuckDBPyConnection) -> None:
    held = _value(
        engine,
        """
        select count(*) from (
            select driver_id from driver_permits group by driver_id having count(*) = (select count(*) from permits)
        )
    """,
    )
    assert 32 <= held <= 64


def test_a_story_is_in_order(engine: duckdb.DuckDBPyConnection) -> None:
    assert (
        _value(
            engine,
            """
        select count(*) from scans s join parcels p using (parcel_id)
        where s.scanned_at < p.posted_at or s.scanned_at > p.delivered_at
    """,
        )
        == 0
    )


# Queries --------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", QUERIES)
def test_query_runs_and_says_what_is_wrong(engine: duckdb.DuckDBPyConnection, name: str) -> None:
    lines = QUERIES[name].splitlines()
    comments = [line for line in lines if line.startswith("--")]
    assert comments == lines[: len(comments)]
    assert 2 <= len(comments) <= 3
    assert comments[0].startswith("-- Wanted: ")
    rows = engine.execute(QUERIES[name]).fetchall()
    assert bool(rows) == (name != "03-late-and-never-told")


def _answers(engine: duckdb.DuckDBPyConnection, name: str) -> Counter[tuple[Any, ...]]:
    return Counter(engine.execute(QUERIES[name]).fetchall())


def test_pair_of_late_parcels_is_equal(engine: duckdb.DuckDBPyConnection) -> None:
    pair = "01-late-parcels-by-depot"
    assert _answers(engine, f"{pair}.a") == _answers(engine, f"{pair}.b")


def test_pair_of_runs_agrees_today_and_differs_tomorrow(engine: duckdb.DuckDBPyConnection) -> None:
    pair = "16-runs-per-route"
    assert _answers(engine, f"{pair}.a") == _answers(engine, f"{pair}.b")
    with _engine(demo.folder()) as other:
        other.execute("create temp table extended as from routes union all select 181, 1, 40")
        other.execute("create or replace view routes as from extended")
        first, second = _answers(other, f"{pair}.a"), _answers(other, f"{pair}.b")
    assert first - second == Counter({(181, 0): 1})
    assert second - first == Counter({(181, 1): 1})


def test_what_goes_wrong_shows(engine: duckdb.DuckDBPyConnection) -> None:
    """Where a query gives a wrong answer, the right one is different on this data."""
    never_told = f"""select count(*) from parcels p where {LATE}
        and not exists (select 1 from notices n where n.parcel_id = p.parcel_id)"""
    assert _value(engine, never_told) > 0
    freight = _value(engine, "select count(*) from parcels where service = 'freight'")
    assert _answers(engine, "04-parcels-with-large-claims").total() < freight / 10
    claimed = _value(engine, "select sum(amount) from claims")
    added = sum(row[1] or 0 for row in engine.execute(QUERIES["05-claimed-amount-by-depot"]).fetchall())
    assert added > claimed
    counted = sum(row[1] for row in engine.execute(QUERIES["10-late-share-by-depot"]).fetchall())
    assert counted < _value(engine, "select count(*) from parcels where promised_at < timestamp '2026-06-20'")
    without_name = [row for row in engine.execute(QUERIES["21-told-and-answered"]).fetchall() if row[0] is None]
    assert len(without_name) == 2
    product = engine.execute(QUERIES["02-claims-per-depot-and-route"]).fetchall()
    routes = dict(engine.execute("select r.route_id, d.code from routes r join depots d using (depot_id)").fetchall())
    assert sum(routes[route] != code for code, route, *_ in product) > 0.9 * len(product)


# Generation -----------------------------------------------------------------------------------------------------------


def _contents(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_same_seed_same_bytes(tmp_path: Path) -> None:
    for name in ("first", "second"):
        demo.generator().generate(tmp_path / name, 0.05, 7)
    demo.generator().generate(tmp_path / "other", 0.05, 8)
    first, second, other = (_contents(tmp_path / name) for name in ("first", "second", "other"))
    assert first == second
    assert first["parcels.parquet"] != other["parcels.parquet"]


def test_chunks_make_one_scenario(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(demo.generator(), "CHUNK", 900)
    demo.generator().generate(tmp_path / "chunked", 0.05, 1)
    with _engine(tmp_path / "chunked") as chunked:
        for relation, key in (("parcels", "parcel_id"), ("scans", "scan_id"), ("notices", "notice_id")):
            keys = [number for (number,) in chunked.execute(f"select {key} from {relation}").fetchall()]
            assert keys == list(range(1, len(keys) + 1))
        assert _value(chunked, "select count(*) from parcels") == 2000
        assert (
            _value(
                chunked,
                """
            select count(*) from parcels a join parcels b on b.parcel_id = a.parcel_id + 1
            where b.posted_at < a.posted_at
        """,
            )
            == 0
        )


def test_scale_multiplies_the_large_relations() -> None:
    small, large = (_engine(demo.folder(scale, seed)) for scale, seed in ((0.05, 2), (1.0, 1)))
    for name in ("parcels", "scans", "notices", "customers", "notice_feed"):
        times = _value(large, f"select count(*) from {name}") / _value(small, f"select count(*) from {name}")
        assert 18 < times < 22, name
    assert _value(large, "select count(*) from depots") == _value(small, "select count(*) from depots")


@pytest.mark.parametrize(("scale", "seed"), [(0, 1), (-1, 1), (float("nan"), 1), (float("inf"), 1), (1, -1)])
def test_nonsense_is_refused(tmp_path: Path, scale: float, seed: int) -> None:
    with pytest.raises(ValueError, match="must"):
        demo.generator().generate(tmp_path / "none", scale, seed)
    assert not list(tmp_path.iterdir())


def test_command_line(tmp_path: Path) -> None:
    program = [sys.executable, str(demo.DEMO / "generate.py"), "--out", str(tmp_path / "data"), "--scale"]
    subprocess.run([*program, "0.02"], check=True)
    assert sorted(path.stem for path in (tmp_path / "data").iterdir()) == sorted(RELATIONS)
    subprocess.run([*program, "0.03"], check=True)  # replaces
    assert _value(_engine(tmp_path / "data"), "select count(*) from parcels") == 1200
    assert [path.name for path in tmp_path.iterdir()] == ["data"]
    refused = subprocess.run([*program, "0"], capture_output=True, text=True, check=False)
    assert refused.returncode == 1
    assert refused.stderr == "the demo data was not made: the scale must be a positive number, not 0.0\n"
