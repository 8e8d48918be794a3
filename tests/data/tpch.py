"""TPC-H: data by tpchgen-cli at any scale factor, the schema, the queries, and answers from outside this project."""

from __future__ import annotations

import shutil
import subprocess
import sysconfig
from functools import cache
from importlib.metadata import version
from pathlib import Path

from tests.data.cache import ROOT, made_once

PUBLISHED = ROOT / "tests" / "published" / "tpch"
RELATIONS = ("region", "nation", "part", "supplier", "partsupp", "customer", "orders", "lineitem")


@cache
def _program() -> str:
    beside = Path(sysconfig.get_path("scripts")) / "tpchgen-cli"
    found = str(beside) if beside.is_file() else shutil.which("tpchgen-cli")
    if found is None:
        raise FileNotFoundError("tpchgen-cli is not installed: it is a development dependency of this project")
    return found


def folder(scale: float = 0.01) -> Path:
    """A folder with `<relation>.parquet` for the eight relations. Read only: it is shared."""
    name = f"tpch-{scale:g}-{version('tpchgen-cli')}"
    return made_once(name, lambda making: _make(making, scale))


def _make(making: Path, scale: float) -> None:
    # Plain figures: the program does not read 1e-03.
    command = [_program(), "parquet", "-s", f"{scale:f}", "--output-dir", str(making)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    if done.returncode:
        raise RuntimeError(f"tpchgen-cli failed: {done.stderr.strip()}")
    missing = [name for name in RELATIONS if not (making / f"{name}.parquet").is_file()]
    if missing:
        raise RuntimeError(f"tpchgen-cli made no file for {', '.join(missing)}")


def schema() -> str:
    """The DDL, with primary and foreign keys."""
    return (PUBLISHED / "schema.sql").read_text(encoding="utf-8")


def queries() -> dict[str, str]:
    """The 22 queries with the validation parameters, by name (`q01`), in their order."""
    return {file.stem: file.read_text(encoding="utf-8") for file in sorted(PUBLISHED.glob("q*.sql"))}


def answers() -> dict[str, tuple[list[str], list[list[str]]]]:
    """The answers at scale factor 0.01: column names and rows of texts by query; an empty text is NULL."""
    found = {}
    for file in sorted((PUBLISHED / "answers").glob("q*.txt")):
        head, *rows = file.read_text(encoding="utf-8").removesuffix("\n").split("\n")
        found[file.stem] = (head.split("|"), [row.split("|") for row in rows])
    return found
