"""Edits of a sheet: reading a text into a draft, applying and choosing revisions, notes."""

from __future__ import annotations

from dataclasses import replace

from core.algebra.operators import Operator
from core.language.diagnostic import ReadError
from core.language.sql.read import read_sql
from core.rewrite import Offer
from core.sheet.document import Callout, Draft, Revision, Sheet, followed, rewritten


def with_text(sheet: Sheet, letter: str, text: str, dialect: str = "duckdb", title: str = "") -> Sheet:
    """The sheet after typing: the draft is read anew; what cannot be read leaves the last good drawing in place."""
    known = sheet.draft(letter) or Draft(letter, text, dialect, title=title)
    try:
        formulation = read_sql(text, sheet.catalog, dialect)
    except ReadError as error:
        return sheet.with_draft(replace(known, text=text, dialect=dialect, problems=error.diagnostics))
    draft = Draft(letter, text, dialect, (Revision(formulation),), 0, (), title or known.title)
    kept = tuple(c for c in sheet.callouts if c.letter != letter)
    return replace(sheet.with_draft(draft), callouts=kept)


def with_rewrite(sheet: Sheet, letter: str, offer: Offer) -> Sheet:
    """The sheet after a rewrite; notes and measured counts follow their operators."""
    draft = sheet.draft(letter)
    assert draft is not None and draft.formulation is not None
    callouts = tuple(replace(c, operator=_kept(c.operator, offer)) if c.letter == letter else c for c in sheet.callouts)
    return replace(sheet.with_draft(rewritten(draft, offer)), callouts=callouts)


def _kept(operator: Operator, offer: Offer) -> Operator:
    still = set(offer.after.operators())
    if operator in still:
        return operator
    moved = followed(operator, offer)
    return moved if moved in still else offer.became


def with_revision(sheet: Sheet, letter: str, number: int) -> Sheet:
    """The sheet looking at another revision of a draft."""
    draft = sheet.draft(letter)
    assert draft is not None
    return sheet.with_draft(replace(draft, current=max(0, min(number, len(draft.revisions) - 1))))


def with_copy(sheet: Sheet, source: str, letter: str) -> Sheet:
    """A draft made of another's revisions, to compare with it."""
    draft = sheet.draft(source)
    assert draft is not None
    return sheet.with_draft(replace(draft, letter=letter))


def without_draft(sheet: Sheet, letter: str) -> Sheet:
    kept = tuple(d for d in sheet.drafts if d.letter != letter)
    return replace(sheet, drafts=kept, callouts=tuple(c for c in sheet.callouts if c.letter != letter), verdict="")


def with_callout(sheet: Sheet, letter: str, operator: Operator, text: str) -> Sheet:
    """The sheet with a note at an operator; an empty text takes the note away."""
    kept = tuple(c for c in sheet.callouts if not (c.letter == letter and c.operator is operator))
    return replace(sheet, callouts=(*kept, Callout(letter, operator, text)) if text.strip() else kept)


def next_letter(sheet: Sheet) -> str:
    used = {d.letter for d in sheet.drafts}
    return next(letter for letter in "ABCDEFGHJKLMNPQRSTUVWXYZ" if letter not in used)
