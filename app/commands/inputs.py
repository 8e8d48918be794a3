"""What the commands are given: queries, sheets, catalogs, data; from files or standard input."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from core.algebra.formulation import Formulation
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.engine.duckdb_engine import DuckEngine

SHEET_ENDING = ".planimeter"


class InputError(Exception):
    """Input that cannot be read or resolved, in words for standard error."""


@dataclass(slots=True)
class Ground:
    """The catalog and the data that a command stands on."""

    catalog: Catalog
    engine: DuckEngine | None = None


def read_text(name: str) -> str:
    """A file's text; "-" is standard input."""
    if name == "-":
        return sys.stdin.read()
    try:
        return Path(name).read_text(encoding="utf-8")
    except OSError as error:
        raise InputError(f"{name}: {error.strerror}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"{name} is no text") from error


def progress_line() -> Callable[[float, str], None] | None:
    """Progress on standard error, on a terminal only."""
    if not sys.stderr.isatty():
        return None
    return lambda share, text: print(f"\r{share:4.0%} {text[:60]:<60}", end="" if share < 1 else "\n", file=sys.stderr)


def ground_of(asked: argparse.Namespace) -> Ground:
    """Reads --catalog and --data. Data without figures in the catalog is profiled."""
    from core.catalog.ddl import CatalogError, catalog_from_ddl
    from core.catalog.files import load_catalog
    from core.engine.duckdb_engine import EngineError
    from core.engine.profile import profile

    catalog = Catalog()
    try:
        if asked.catalog:
            is_ddl = asked.catalog.lower().endswith(".sql") or asked.catalog == "-"
            catalog = (
                catalog_from_ddl(read_text(asked.catalog), asked.dialect) if is_ddl else load_catalog(asked.catalog)
            )
        if not asked.data:
            return Ground(catalog)
        engine = DuckEngine.over(asked.data)
        if not any(facts.rows is not None for facts in catalog):
            catalog, notes = profile(engine, catalog, progress_line())
            for note in notes:
                print(f"note: {note}", file=sys.stderr)
        return Ground(catalog, engine)
    except (CatalogError, EngineError) as error:
        raise InputError(str(error)) from error


def query_of(name: str, asked: argparse.Namespace, ground: Ground) -> Formulation:
    """The formulation in a file (SQL, or a sheet's current one). Errors come with line, column and caret."""
    from core.language.diagnostic import ReadError
    from core.language.sql.read import read_sql

    if name.endswith(SHEET_ENDING):
        return _sheet_query(name, ground)
    text = read_text(name)
    try:
        formulation = read_sql(text, ground.catalog, asked.dialect)
        for note in formulation.notes:
            print(f"note: {note}", file=sys.stderr)
        return formulation
    except ReadError as error:
        shown = "standard input" if name == "-" else name
        raise InputError(str(ReadError(error.diagnostics, text, shown))) from error


def _sheet_query(name: str, ground: Ground) -> Formulation:
    from core.sheet.file import SheetError, load

    try:
        sheet = load(name)
    except SheetError as error:
        raise InputError(str(error)) from error
    if not len(ground.catalog):
        ground.catalog = sheet.catalog
    for draft in sheet.drafts:
        if draft.formulation is not None:
            return draft.formulation
    raise InputError(f"{name} holds no formulation that can be read")


def counts_of(formulation: Formulation, asked: argparse.Namespace, ground: Ground) -> dict[Operator, int]:
    """Measured counts where they are asked for and there is data."""
    if not getattr(asked, "measure", False):
        return {}
    if ground.engine is None:
        raise InputError("--measure needs --data")
    from core.engine.measure import measure

    counts, reasons = measure(formulation, ground.engine, progress_line())
    for reason in dict.fromkeys(reasons.values()):
        print(f"note: not measured: {reason}", file=sys.stderr)
    return counts
