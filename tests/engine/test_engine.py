"""The engine: read-only, honest about what is missing, and counting what it says it counts."""

from __future__ import annotations

import random
import threading
from collections import Counter
from pathlib import Path
from typing import Any

import duckdb
import pytest

from core.algebra.graph import free
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Evidence
from core.engine.duckdb_engine import Cancelled, DuckEngine, EngineError
from core.engine.instance import create_instance, instance_sql
from core.engine.measure import measure
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.language.sql.write import write_query
from tests.data import demo, tpch
from tests.generate.queries import COLUMNS, SCHEMA, random_data


@pytest.fixture
def files(tmp_path: Path) -> Path:
    duckdb.sql(f"copy (select i as a, i % 10 as b, null as n from range(1000) r(i)) to '{tmp_path / 'p.parquet'}'")
    duckdb.sql(f"copy (select i as a, 'x' || i as s from range(20) r(i)) to '{tmp_path / 'c.csv'}'")
    (tmp_path / "j.json").write_text('{"a": 1, "t": "x"}\n{"a": 2, "t": null}\n')
    return tmp_path


def test_files_of_every_kind(files: Path) -> None:
    engine = DuckEngine.over_folder(files)
    assert sorted(engine.relations()) == ["c", "j", "p"]
    assert [engine.value(f"select count(*) from {name}") for name in "cjp"] == [20, 2, 1000]
    engine.close()


def test_a_database_file(tmp_path: Path) -> None:
    path = tmp_path / "d.duckdb"
    connection = duckdb.connect(str(path))
    connection.execute("create table t as select 1 as a union all select 2")
    connection.close()
    engine = DuckEngine.over(path)
    assert engine.value("select sum(a) from t") == 3
    with pytest.raises(EngineError):
        engine.run("insert into t values (3)")
    engine.close()


def test_nothing_outside_is_read_or_written(files: Path) -> None:
    before = {p.name: p.read_bytes() for p in files.iterdir()}
    secret = files.parent / "secret.csv"
    secret.write_text("a\n1\n")
    engine = DuckEngine.over_folder(files)
    for statement in (
        f"select * from read_csv('{secret}')",
        f"copy p to '{files / 'new.parquet'}'",
        f"attach '{files / 'x.duckdb'}'",
        "set enable_external_access = true",
        "set memory_limit = '8GB'",
        "install httpfs",
    ):
        with pytest.raises(EngineError):
            engine.run(statement)
    engine.close()
    assert {p.name: p.read_bytes() for p in files.iterdir()} == before


@pytest.mark.parametrize(
    ("source", "message"), [("nowhere", "nowhere"), ("x.parquet", "no file"), ("x.xlsx", "neither")]
)
def test_what_is_missing_is_said(tmp_path: Path, source: str, message: str) -> None:
    with pytest.raises(EngineError, match=message):
        DuckEngine.over(tmp_path / source)
    with pytest.raises(EngineError, match="no Parquet"):
        DuckEngine.over(tmp_path)


def test_work_is_stopped() -> None:
    engine = DuckEngine()
    with pytest.raises(Cancelled):
        engine.run_within("select count(*) from range(100000) a, range(100000) b, range(1000) c", 0.2)
    assert engine.value("select 1") == 1
    engine.close()


class Kept:
    """An instance's engine, seen as one over files."""

    def __init__(self, engine: DuckEngine) -> None:
        self.engine, self.locations, self.source = engine, dict[str, str](), "memory"

    def relations(self) -> list[str]:
        return list(COLUMNS)

    def __getattr__(self, name: str) -> Any:
        return getattr(self.engine, name)


@pytest.mark.parametrize("seed", range(12))
def test_a_profile_is_what_can_be_counted_by_hand(seed: int) -> None:
    data = random_data(random.Random(seed))
    engine = create_instance(catalog_from_ddl(SCHEMA), data)
    catalog, notes = profile(Kept(engine), catalog_from_ddl(SCHEMA))  # type: ignore[arg-type]
    engine.close()
    assert not notes
    for facts in catalog:
        rows = data[facts.name]
        assert facts.rows == len(rows) and facts.rows_exact and facts.rows_evidence is Evidence.PROFILED
        for i, attribute in enumerate(facts.attributes):
            known = attribute.statistics
            assert known is not None
            values = [row[i] for row in rows if row[i] is not None]
            counted = Counter(values)
            assert known.distinct == len(counted) and known.nulls == len(rows) - len(values)
            assert known.low == min(values, default=None) and known.high == max(values, default=None)
            assert known.largest_group == max(counted.values(), default=0)
            assert {h.value: h.rows for h in known.heavy} == dict(counted)


def test_declared_constraints_that_the_data_breaks_are_noted_and_dropped(files: Path) -> None:
    ddl = "create table p (a bigint primary key, b bigint unique, n integer not null references c (a)); create table c (a bigint primary key, s varchar);"
    engine = DuckEngine.over_folder(files)
    catalog, notes = profile(engine, catalog_from_ddl(ddl))
    engine.close()
    facts = catalog.relation("p")
    assert facts is not None
    assert facts.primary == ("a",) and facts.unique == ()
    assert any("values repeat" in note for note in notes) and any("declared not null" in note for note in notes)


def test_profiling_reports_and_stops(files: Path) -> None:
    engine = DuckEngine.over_folder(files)
    shares: list[float] = []
    profile(engine, progress=lambda share, text: shares.append(share))
    assert shares == sorted(shares) and shares[-1] == 1.0
    cancel = threading.Event()
    cancel.set()
    with pytest.raises(Cancelled):
        profile(engine, cancel=cancel)
    engine.close()


@pytest.mark.parametrize(
    ("source", "name"),
    [
        ("tpch", "q03"),
        ("tpch", "q13"),
        ("tpch", "q21"),
        ("demo", "01-late-parcels-by-depot.a"),
        ("demo", "14-stops-per-driver"),
    ],
)
def test_measured_counts_are_the_engines(source: str, name: str) -> None:
    folder, schema, texts = (
        (tpch.folder(0.01), tpch.schema(), tpch.queries())
        if source == "tpch"
        else (demo.folder(0.2), demo.schema(), demo.queries())
    )
    engine = DuckEngine.over_folder(folder)
    text = next(t for n, t in texts.items() if n.lstrip("q0") == name.lstrip("q0") or n == name)
    formulation = read_sql(text, catalog_from_ddl(schema))
    counts, reasons = measure(formulation, engine, seconds=20)
    for operator in formulation.operators():
        assert (operator in counts) != (operator in reasons)
        if operator in counts and counts[operator] < 2_000_000 and not free(operator):
            assert counts[operator] == engine.value(f"select count(*) from ({write_query(operator)}) x")
    engine.close()


def test_a_relation_that_refers_to_itself_is_inserted() -> None:
    catalog = catalog_from_ddl("create table d (id integer primary key, boss integer references d (id))")
    engine = create_instance(catalog, {"d": [(1, 2), (2, 3), (3, None), (4, 4)][:3]})
    assert engine.value("select count(*) from d") == 3
    engine.close()
    assert instance_sql(catalog, {"d": [(1, 2), (2, None)]}).index("(2, NULL)") < instance_sql(
        catalog, {"d": [(1, 2), (2, None)]}
    ).index("(1, 2)")
