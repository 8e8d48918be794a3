"""The demo scenario: its data at any scale, its schema and its queries."""

from __future__ import annotations

import importlib.util
from functools import cache
from pathlib import Path
from types import ModuleType

from tests.data.cache import ROOT, digest, made_once

DEMO = ROOT / "assets" / "demo"


@cache
def generator() -> ModuleType:
    """The generator, a script outside every package, loaded by its path."""
    path = DEMO / "generate.py"
    specification = importlib.util.spec_from_file_location("demo_generate", path)
    assert specification is not None and specification.loader is not None
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    return module


def folder(scale: float = 1.0, seed: int = 1) -> Path:
    """A folder with `<relation>.parquet` for every relation of the scenario. Read only: it is shared."""
    made_by = digest(DEMO / "generate.py", DEMO / "schema.sql")
    return made_once(f"demo-{scale:g}-{seed}-{made_by}", lambda making: generator().generate(making, scale, seed))


def schema() -> str:
    """The scenario's DDL."""
    return (DEMO / "schema.sql").read_text(encoding="utf-8")


def queries() -> dict[str, str]:
    """The scenario's queries by name, such as `01-late-parcels-by-depot.a`, in their order."""
    files = sorted((DEMO / "queries").glob("*.sql"))
    return {file.name.removesuffix(".sql"): file.read_text(encoding="utf-8") for file in files}
