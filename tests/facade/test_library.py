"""The library as the README documents it."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

import core
from core.catalog.ddl import CatalogError
from core.language.diagnostic import ReadError
from core.rewrite import Offer, Refusal

ROOT = Path(__file__).resolve().parents[2]


def test_the_example_of_the_readme_runs() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```python\n(.*?)```", text, re.DOTALL)
    assert blocks
    for block in blocks:
        done = subprocess.run([sys.executable, "-c", block], capture_output=True, text=True, cwd=ROOT, timeout=120)
        assert done.returncode == 0, done.stderr
        assert "A ≡ B  proved" in done.stdout


def test_nothing_heavy_is_imported_before_it_is_used() -> None:
    code = "import sys, core; print([m for m in ('scipy', 'networkx', 'duckdb', 'PySide6', 'numpy', 'sqlglot') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, timeout=60)
    assert done.stdout.strip() == "[]"


def test_a_catalog_file_comes_back(tmp_path: Path) -> None:
    catalog = core.Catalog.from_ddl("create table t (a integer primary key, b varchar)")
    catalog.save(tmp_path / "c.toml")
    again = core.Catalog.load(tmp_path / "c.toml")
    assert dict(again.relations) == dict(catalog.relations)


def test_sizes_from_files_and_measured(tmp_path: Path) -> None:
    import duckdb

    from core.engine.duckdb_engine import DuckEngine

    duckdb.sql(f"copy (select i as a, i % 7 as b from range(1000) r(i)) to '{tmp_path / 't.parquet'}'")
    catalog = core.Catalog.from_files({"t": tmp_path / "t.parquet"})
    query = core.read_sql("select b, count(*) as n from t where b = 3 group by b", catalog)
    engine = DuckEngine.over_files({"t": tmp_path / "t.parquet"})
    counts = core.measure(query, engine)
    engine.close()
    sizes = core.size(query, catalog, counts)
    assert sizes[query.root].measured == 1
    assert core.findings(query, catalog) == []
    assert core.improve(query, catalog, seconds=1) == []


DDL = """
    create table depots (depot_id integer primary key, name varchar not null);
    create table parcels (parcel_id integer primary key, depot_id integer not null references depots, note varchar);
"""


def test_the_readme_names_everything_the_library_has() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for name in core.__all__:
        assert f"core.{name}" in text, name
    for name in ("from_ddl", "load", "from_files", "from_engine", "save"):
        assert f".{name}(" in text, name


def test_everything_still_answers_after_the_rooms_are_imported() -> None:
    """Some functions bear the name of the room they stand for."""
    code = """
import core, core.size.numbers, core.compare.verdict, core.rewrite.improve, core.finding
catalog = core.Catalog.from_ddl("create table t (a integer primary key)")
a = core.read_sql("select distinct a from t", catalog)
assert all(callable(getattr(core, name)) for name in core.__all__)
assert core.size(a, catalog) and core.compare(a, a, catalog).sentence and core.improve(a, catalog, 1)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, timeout=60)
    assert done.returncode == 0, done.stderr


def test_rewrites_are_offered_and_refused() -> None:
    catalog = core.Catalog.from_ddl(DDL)
    kept = core.read_sql("select p.parcel_id from parcels p join depots d on d.depot_id = p.depot_id", catalog)
    answers = [a for o in kept.operators() for a in core.rewrites(kept, o, catalog)]
    offered = {a.rule.name for a in answers if isinstance(a, Offer)}
    assert "eliminate-join" in offered
    loose = core.Catalog.from_ddl(DDL.replace("not null references depots", "references depots"))
    fed = core.read_sql("select p.parcel_id from parcels p join depots d on d.depot_id = p.depot_id", loose)
    refused = [
        a
        for o in fed.operators()
        for a in core.rewrites(fed, o, loose)
        if isinstance(a, Refusal) and a.rule.name == "eliminate-join"
    ]
    assert any("would bring back rows" in answer.reason for answer in refused)


def test_what_is_wrong_is_raised_with_its_place() -> None:
    catalog = core.Catalog.from_ddl(DDL)
    with pytest.raises(ReadError, match=r"line 1, column 8: no column nmae(?s:.*)did you mean name") as raised:
        core.read_sql("select nmae from depots", catalog)
    assert raised.value.diagnostics[0].span is not None
    with pytest.raises(CatalogError, match="no attribute b"):
        core.Catalog.from_ddl("create table p (a integer, unique (b))")
    with pytest.raises(CatalogError, match="nowhere"):
        core.Catalog.load("nowhere.toml")


def test_a_catalog_of_an_engine_keeps_what_was_declared_and_counts_what_is_there(tmp_path: Path) -> None:
    import duckdb

    from core.engine.duckdb_engine import DuckEngine

    with duckdb.connect(str(tmp_path / "d.duckdb")) as made:
        made.execute("create table depots as select i as depot_id, 'd' || i as name from range(40) r(i)")
    engine = DuckEngine.over(tmp_path / "d.duckdb")
    catalog = core.Catalog.from_engine(engine, core.Catalog.from_ddl(DDL))
    engine.close()
    facts = catalog.relation("depots")
    assert isinstance(catalog, core.Catalog) and facts is not None and facts.rows == 40
    query = core.read_sql("select distinct depot_id from depots", catalog)
    assert core.size(query, catalog)[query.root].high == 40


def test_verdicts_of_all_kinds() -> None:
    catalog = core.Catalog.from_ddl(DDL)

    def kind(a: str, b: str) -> str:
        return core.compare(core.read_sql(a, catalog), core.read_sql(b, catalog), catalog, seconds=2).kind.value

    assert kind("select distinct parcel_id from parcels", "select parcel_id from parcels") == "equal"
    assert kind("select distinct note from parcels", "select note from parcels") == "different"
    assert kind("select random() as x from parcels", "select random() as x from parcels") not in ("equal", "different")
