"""TPC-DS: data at any scale factor, the schema, and the queries.

The generator is an extension of an older DuckDB that stands on PyPI; it gets a virtual environment of its own under
`build/`, which needs the package index the first time. Nothing of it runs in this process.
"""

from __future__ import annotations

import subprocess
import venv
from pathlib import Path

from tests.data.cache import ROOT, made_once

PUBLISHED = ROOT / "tests" / "published" / "tpcds"
DUCKDB = "1.5.5"
PACKAGES = (f"duckdb=={DUCKDB}", f"duckdb-extension-tpcds=={DUCKDB}")

# Run by the other environment: the extension's file, the scale factor, where the files go.
PROGRAM = """
import pathlib, sys
import duckdb, duckdb_extension_tpcds
scale, target = float(sys.argv[1]), pathlib.Path(sys.argv[2])
roots = [pathlib.Path(root) for root in duckdb_extension_tpcds.__path__]
(extension,) = [file for root in roots for file in root.rglob("tpcds.duckdb_extension")]
quoted = lambda path: "'" + str(path).replace("'", "''") + "'"
connection = duckdb.connect()
connection.execute(f"load {quoted(extension)}")
connection.execute(f"call dsdgen(sf = {scale})")
for (name,) in connection.execute("select table_name from duckdb_tables()").fetchall():
    connection.execute(f"copy {name} to {quoted(target / (name + '.parquet'))} (format parquet)")
"""


def folder(scale: float = 0.01) -> Path:
    """A folder with `<relation>.parquet` for the 24 relations. Read only: it is shared."""
    return made_once(f"tpcds-{scale:g}-{DUCKDB}", lambda making: _make(making, scale))


def _make(making: Path, scale: float) -> None:
    _run(_python(), "-c", PROGRAM, str(scale), str(making))


def _python() -> Path:
    """The interpreter of the environment that holds the generator. An environment cannot be moved once it is made, so
    it lies beside a mark that says that it is complete."""
    place = made_once(f"tpcds-environment-{DUCKDB}", lambda making: None)
    python = place / "environment" / "bin" / "python"
    ready = place / "ready"
    if not ready.is_file():
        venv.create(place / "environment", clear=True, with_pip=True)
        _run(python, "-m", "pip", "install", "--quiet", "--disable-pip-version-check", *PACKAGES)
        ready.touch()
    return python


def _run(*command: str | Path) -> None:
    done = subprocess.run([str(part) for part in command], capture_output=True, text=True, check=False)
    if done.returncode:
        raise RuntimeError(f"{Path(command[0]).name} failed: {done.stderr.strip()}")


def schema() -> str:
    """The DDL, with primary and foreign keys."""
    return (PUBLISHED / "schema.sql").read_text(encoding="utf-8")


def queries() -> dict[str, str]:
    """The 99 queries by name (`q01`), in their order."""
    return {file.stem: file.read_text(encoding="utf-8") for file in sorted(PUBLISHED.glob("q*.sql"))}
