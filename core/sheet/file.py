"""The sheet file: one versioned JSON document with texts, rewrites, notes, catalog and measured counts.

Revisions are kept as the chain of rewrites that made them and are made again on opening, so what is drawn is always what
the rules give; each also keeps its SQL, for readers without Planimeter.
"""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

from core.algebra.operators import Operator
from core.catalog.ddl import CatalogError
from core.catalog.files import catalog_from_toml, catalog_to_toml
from core.language.diagnostic import ReadError
from core.language.sql.read import read_sql
from core.language.sql.write import WriteError, write_sql
from core.rewrite import Offer, rewrites, rule_named
from core.sheet.document import Callout, Draft, Revision, Sheet, rewritten
from core.whole_file import write_whole

FORMAT = "planimeter sheet 1"


class SheetError(ValueError):
    """A file that is no sheet, or cannot be read; the message says why."""


def to_json(sheet: Sheet) -> str:
    """The sheet as text; the same bytes for the same sheet."""
    document = {
        "format": FORMAT,
        "title": sheet.title,
        "author": sheet.author,
        "created": sheet.created.isoformat(),
        "data": sheet.data,
        "site": sheet.site,
        "verdict": sheet.verdict,
        "catalog": catalog_to_toml(sheet.catalog),
        "drafts": [_draft(draft, sheet) for draft in sheet.drafts],
        "callouts": [c for c in (_callout(callout, sheet) for callout in sheet.callouts) if c is not None],
    }
    return json.dumps(document, ensure_ascii=False, indent=1) + "\n"


def _draft(draft: Draft, sheet: Sheet) -> dict[str, Any]:
    return {
        "letter": draft.letter,
        "title": draft.title,
        "text": draft.text,
        "dialect": draft.dialect,
        "current": draft.current,
        "revisions": [_revision(revision, sheet) for revision in draft.revisions],
    }


def _revision(revision: Revision, sheet: Sheet) -> dict[str, Any]:
    try:
        sql = write_sql(revision.formulation)
    except WriteError:
        sql = ""
    counts = [sheet.measured.get(operator) for operator in revision.formulation.operators()]
    return {
        "rule": revision.rule,
        "place": revision.place,
        "choice": revision.choice,
        "title": revision.title,
        "what": revision.what,
        "sql": sql,
        "measured": counts if any(count is not None for count in counts) else [],
    }


def _callout(callout: Callout, sheet: Sheet) -> dict[str, Any] | None:
    draft = sheet.draft(callout.letter)
    if draft is None or draft.formulation is None:
        return None
    operators = draft.formulation.operators()
    if callout.operator not in operators:
        return None
    return {"letter": callout.letter, "place": operators.index(callout.operator), "text": callout.text}


def from_json(text: str) -> Sheet:
    """The sheet in a text. Raises `SheetError`."""
    try:
        document = json.loads(text)
    except json.JSONDecodeError as error:
        raise SheetError(f"this is no sheet: {error.msg} at line {error.lineno}") from error
    if not isinstance(document, dict) or document.get("format") != FORMAT:
        found = document.get("format") if isinstance(document, dict) else None
        raise SheetError(f'a sheet says format "{FORMAT}"; this one says {found!r}')
    try:
        catalog = catalog_from_toml(document["catalog"])
        sheet = Sheet(
            document["title"],
            document["author"],
            date.fromisoformat(document["created"]),
            catalog,
            document["data"],
            document["site"],
        )
        measured: dict[Operator, int] = {}
        for part in document["drafts"]:
            sheet = sheet.with_draft(_opened(part, sheet, measured))
        callouts = tuple(c for c in (_noted(part, sheet) for part in document["callouts"]) if c is not None)
        return replace(sheet, callouts=callouts, measured=measured, verdict=document["verdict"])
    except (KeyError, TypeError) as error:
        raise SheetError(f"the sheet lacks {error}") from error
    except (CatalogError, ValueError) as error:
        raise SheetError(str(error)) from error


def _opened(part: dict[str, Any], sheet: Sheet, measured: dict[Operator, int]) -> Draft:
    draft = Draft(part["letter"], part["text"], part["dialect"], title=part["title"])
    try:
        formulation = read_sql(part["text"], sheet.catalog, part["dialect"])
    except ReadError as error:
        return replace(draft, problems=error.diagnostics)
    draft = replace(draft, revisions=(Revision(formulation),))
    for step in part["revisions"][1:]:
        draft = rewritten(draft, _again(draft, step, sheet))
    for revision, step in zip(draft.revisions, part["revisions"], strict=False):
        for operator, count in zip(revision.formulation.operators(), step["measured"], strict=False):
            if count is not None:
                measured[operator] = count
    return replace(draft, current=min(part["current"], len(draft.revisions) - 1))


def _again(draft: Draft, step: dict[str, Any], sheet: Sheet) -> Offer:
    """The rewrite that made a revision, made again."""
    formulation = draft.formulation
    assert formulation is not None
    operators = formulation.operators()
    try:
        rule = rule_named(step["rule"])
        operator = operators[step["place"]]
    except (KeyError, IndexError) as error:
        raise SheetError(f"revision {draft.letter}{draft.current + 1}: {step['title']} is not known here") from error
    offers = [a for a in rewrites(formulation, operator, sheet.catalog, [rule]) if isinstance(a, Offer)]
    offer = next((offer for offer in offers if offer.choice == step["choice"]), None)
    if offer is None:
        raise SheetError(f"revision {draft.letter}{draft.current + 1}: {step['title']} is not legal with this catalog")
    return offer


def _noted(part: dict[str, Any], sheet: Sheet) -> Callout | None:
    draft = sheet.draft(part["letter"])
    if draft is None or draft.formulation is None:
        return None
    operators = draft.formulation.operators()
    return Callout(part["letter"], operators[part["place"]], part["text"]) if part["place"] < len(operators) else None


def save(sheet: Sheet, path: str | Path) -> None:
    """Writes the file so that a crash leaves the old one or the new one, never half of either."""
    write_whole(path, to_json(sheet))


def load(path: str | Path) -> Sheet:
    """Opens a sheet file. Raises `SheetError`."""
    try:
        return from_json(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise SheetError(f"{path}: {error.strerror}") from error
    except UnicodeDecodeError as error:
        raise SheetError(f"{path} is no text") from error
