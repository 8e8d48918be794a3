"""The demo sheet: a parcel network made at first use, and its main story laid out."""

from __future__ import annotations

import importlib.util
import os
import threading
from collections.abc import Callable
from pathlib import Path

from core.catalog.ddl import catalog_from_ddl
from core.engine.duckdb_engine import DuckEngine
from core.engine.profile import profile
from core.sheet import edit
from core.sheet.document import Sheet, new_sheet

DEMO = Path(__file__).resolve().parents[1] / "assets" / "demo"
STORY = "01-late-parcels-by-depot.a"


def data_folder(scale: float = 1.0) -> Path:
    """Where the demo's data lies: in the user's cache, made where it is missing."""
    base = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "planimeter"
    folder = base / f"demo-{scale:g}"
    if not folder.is_dir():
        base.mkdir(parents=True, exist_ok=True)
        specification = importlib.util.spec_from_file_location("planimeter_demo", DEMO / "generate.py")
        assert specification is not None and specification.loader is not None
        module = importlib.util.module_from_spec(specification)
        specification.loader.exec_module(module)
        module.generate(folder, scale)
    return folder


def query_names() -> list[str]:
    return sorted(path.stem for path in (DEMO / "queries").glob("*.sql"))


def query_text(name: str) -> str:
    return (DEMO / "queries" / f"{name}.sql").read_text(encoding="utf-8")


def demo(
    progress: Callable[[float, str], None] | None = None, cancel: threading.Event | None = None, scale: float = 1.0
) -> Sheet:
    """The sheet with the demo's catalog, profiled, and the query of its main story."""
    if progress is not None:
        progress(0.0, "making the demo's data")
    folder = data_folder(scale)
    engine = DuckEngine.over_folder(folder)
    try:
        declared = catalog_from_ddl((DEMO / "schema.sql").read_text(encoding="utf-8"))
        catalog, _ = profile(engine, declared, progress, cancel)
    finally:
        engine.close()
    sheet = new_sheet("Late parcels by depot", catalog, str(folder))
    return edit.with_text(sheet, "A", query_text(STORY))
