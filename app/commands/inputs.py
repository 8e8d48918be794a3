"""What the commands are given: queries, sheets, catalogs, data; from files or standard input."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from core.algebra.formulation import Formulation
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.engine.duckdb_engine import DuckEngine
from core.sheet import ENDING

if TYPE_CHECKING:
    from core.sheet.document import Draft, Sheet


class InputError(Exception):
    """Input that cannot be read or resolved, in words for standard error."""


@dataclass(slots=True)
class Ground:
    """The catalog and the data that a command stands on, and the counts that a sheet brought along."""

    catalog: Catalog
    engine: DuckEngine | None = None
    measured: dict[Operator, int] = field(default_factory=dict)


def read_text(name: str) -> str:
    """A file's text, in UTF-8 with or without a mark of byte order; "-" is standard input."""
    try:
        if name == "-":
            raw = getattr(sys.stdin, "buffer", None)
            return sys.stdin.read() if raw is None else str(raw.read().decode("utf-8-sig"))
        return Path(name).read_text(encoding="utf-8-sig")
    except OSError as error:
        raise InputError(f"{name}: {error.strerror}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"{shown(name)} is no text in UTF-8") from error


def write_text(name: str, text: str) -> None:
    """Writes a file that was asked for."""
    try:
        Path(name).write_text(text, encoding="utf-8")
    except OSError as error:
        raise InputError(f"{name}: {error.strerror}") from error


def shown(name: str) -> str:
    return "standard input" if name == "-" else name


def progress_line() -> Callable[[float, str], None] | None:
    """Progress on standard error, on a terminal only."""
    if not sys.stderr.isatty():
        return None
    return lambda share, text: print(f"\r{share:4.0%} {text[:60]:<60}", end="" if share < 1 else "\n", file=sys.stderr)


def ground_of(asked: argparse.Namespace, afresh: bool = False) -> Ground:
    """Reads --catalog and --data. The data is profiled where the catalog has no figures, or `afresh`."""
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
        if afresh or not any(facts.rows is not None for facts in catalog):
            catalog, notes = profile(engine, catalog, progress_line())
            for note in notes:
                print(f"note: {note}", file=sys.stderr)
        return Ground(catalog, engine)
    except (CatalogError, EngineError) as error:
        raise InputError(str(error)) from error


def query_of(name: str, asked: argparse.Namespace, ground: Ground) -> Formulation:
    """The formulation in a file: SQL, or a sheet's current one. Errors come with line, column and caret."""
    from core.language.diagnostic import ReadError
    from core.language.sql.read import read_sql

    if names_sheet(name):
        formulation = _draft_of(name, ground).formulation
        assert formulation is not None
        return formulation
    text = read_text(name)
    try:
        formulation = read_sql(text, ground.catalog, asked.dialect)
        for note in formulation.notes:
            print(f"note: {note}", file=sys.stderr)
        return formulation
    except ReadError as error:
        raise InputError(str(ReadError(error.diagnostics, text, shown(name)))) from error


def names_sheet(name: str) -> bool:
    """Whether a query is a sheet, or one formulation of it: plans.planimeter, plans.planimeter:B."""
    return _parted(name)[0].endswith(ENDING)


def _parted(name: str) -> tuple[str, str]:
    file, colon, letter = name.rpartition(":")
    return (file, letter) if colon and file.endswith(ENDING) else (name, "")


def sheet_of(name: str, ground: Ground) -> Sheet:
    """The sheet in a file. Its catalog stands in where no other is given, and its measured counts go with it."""
    from core.sheet.file import SheetError, load

    try:
        sheet = load(_parted(name)[0])
    except SheetError as error:
        raise InputError(str(error)) from error
    if not len(ground.catalog):
        ground.catalog = sheet.catalog
    ground.measured.update(sheet.measured)
    return sheet


def _draft_of(name: str, ground: Ground) -> Draft:
    """The formulation of the letter that is asked for, else the first that can be read."""
    file, letter = _parted(name)
    readable = [draft for draft in sheet_of(name, ground).drafts if draft.formulation is not None]
    for draft in readable:
        if letter in ("", draft.letter):
            return draft
    there = ", ".join(draft.letter for draft in readable)
    if not readable:
        raise InputError(f"{file} holds no formulation that can be read")
    raise InputError(f"{file} holds no formulation {letter} that can be read; it holds {there}")


def counts_of(formulation: Formulation, asked: argparse.Namespace, ground: Ground) -> dict[Operator, int]:
    """The counts of a sheet, and new ones where they are asked for and there is data."""
    if not getattr(asked, "measure", False):
        return ground.measured
    if ground.engine is None:
        raise InputError("--measure needs --data")
    from core.engine.duckdb_engine import EngineError
    from core.engine.measure import measure

    try:
        counts, reasons = measure(formulation, ground.engine, progress_line())
    except EngineError as error:
        raise InputError(f"the data could not be measured: {error}") from error
    for reason in dict.fromkeys(reasons.values()):
        print(f"note: not measured: {reason}", file=sys.stderr)
    return {**ground.measured, **counts}
