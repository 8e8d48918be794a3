"""`planimeter draw`: a whole sheet, or queries on a new one, drawn to a file. Imports Qt."""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path

from app.commands.inputs import Ground, InputError, counts_of, ground_of, names_sheet, query_of, sheet_of
from app.commands.output import written_sql
from app.export.files import ExportError, export
from app.model import Workbench
from app.window import application
from core.drawing.palette import PALETTES
from core.language.sql.read import read_sql
from core.sheet import ENDING
from core.sheet.document import Draft, Revision, Sheet, new_sheet


def draw_sheet(asked: argparse.Namespace) -> None:
    """Writes the drawing that is asked for. Raises `InputError`."""
    ground = ground_of(asked)
    sheet = _drawn_sheet(asked, ground)
    counts = dict(ground.measured)
    for draft in sheet.drafts:
        if draft.formulation is not None:
            counts.update(counts_of(draft.formulation, asked, ground))
    application()
    bench = Workbench(replace(sheet, measured=counts))
    try:
        export(bench.page(), PALETTES[asked.palette], asked.out, bench.payload())
    except (ExportError, OSError) as error:
        raise InputError(str(error)) from error


def _drawn_sheet(asked: argparse.Namespace, ground: Ground) -> Sheet:
    """A whole sheet as it stands, or a new one of the given queries."""
    if asked.query.endswith(ENDING) and not asked.other:
        sheet = sheet_of(asked.query, ground)
        return replace(sheet, catalog=ground.catalog, title=asked.title or sheet.title)
    names = [asked.query, *([asked.other] if asked.other else [])]
    formulations = [query_of(name, asked, ground) for name in names]
    title = asked.title or (Path(asked.query).stem if asked.query != "-" else "Query plan")
    sheet = new_sheet(title, ground.catalog, asked.data)
    for letter, name, formulation in zip("AB", names, formulations, strict=False):
        if formulation.rewritten:  # the drawing carries the sheet, and a sheet is read from its texts
            text = written_sql(formulation, formulation.dialect)
            formulation = read_sql(text, ground.catalog, formulation.dialect)
        label = "" if name == "-" or names_sheet(name) else Path(name).stem
        draft = Draft(letter, formulation.text, formulation.dialect, (Revision(formulation),), title=label)
        sheet = sheet.with_draft(draft)
    return sheet
