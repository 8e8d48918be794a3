"""The library as the README documents it."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import core

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
