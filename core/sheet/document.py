"""The sheet as immutable states: every edit makes a new one, so undo is a list and an index."""

from __future__ import annotations

import getpass
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import date

from core.algebra.formulation import Formulation
from core.algebra.graph import inputs, rebuilt
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.language.diagnostic import Diagnostic
from core.rewrite import Offer


@dataclass(frozen=True, slots=True)
class Revision:
    """A formulation after one more rewrite; the first is as written.

    `place` is the rewritten operator's number in the formulation before, `choice` that of the offer (`Offer.choice`).
    """

    formulation: Formulation
    rule: str = ""
    title: str = "as written"
    what: str = ""
    place: int = -1
    choice: int = 0


@dataclass(frozen=True, slots=True)
class Draft:
    """One formulation of the sheet: its text, its revisions, the one that is looked at.

    While the text cannot be read, `problems` say why and the revisions are those of the last text that could.
    """

    letter: str
    text: str
    dialect: str = "duckdb"
    revisions: tuple[Revision, ...] = ()
    current: int = 0
    problems: tuple[Diagnostic, ...] = ()
    title: str = ""

    @property
    def revision(self) -> Revision | None:
        return self.revisions[self.current] if self.revisions else None

    @property
    def formulation(self) -> Formulation | None:
        return self.revisions[self.current].formulation if self.revisions else None

    @property
    def name(self) -> str:
        """A0 as written, A1 after one rewrite, ..."""
        return f"{self.letter}{self.current}"

    @property
    def subtitle(self) -> str:
        if self.current == 0:
            return self.title or "as written"
        return f"after {self.current} rewrite{'' if self.current == 1 else 's'}"


@dataclass(frozen=True, slots=True)
class Callout:
    """A person's note at an operator of a draft. It follows the operator through rewrites that keep it."""

    letter: str
    operator: Operator
    text: str


@dataclass(frozen=True, slots=True)
class Sheet:
    """The document. `measured` are exact counts by operator; they stay with operators that rewrites keep."""

    title: str = "Query plan"
    author: str = ""
    created: date = field(default_factory=date.today)
    catalog: Catalog = field(default_factory=Catalog)
    data: str = ""
    site: str = "one machine"
    drafts: tuple[Draft, ...] = ()
    callouts: tuple[Callout, ...] = ()
    measured: Mapping[Operator, int] = field(default_factory=dict)
    verdict: str = ""

    def draft(self, letter: str) -> Draft | None:
        return next((d for d in self.drafts if d.letter == letter), None)

    def with_draft(self, draft: Draft) -> Sheet:
        """The sheet with a draft exchanged, or added at the end."""
        if self.draft(draft.letter) is None:
            return replace(self, drafts=(*self.drafts, draft), verdict="")
        return replace(self, drafts=tuple(draft if d.letter == draft.letter else d for d in self.drafts), verdict="")


def new_sheet(title: str, catalog: Catalog, data: str = "") -> Sheet:
    """An empty sheet in the name of whoever is at the machine."""
    try:
        author = getpass.getuser()
    except (KeyError, OSError):
        author = ""
    return Sheet(title, author, date.today(), catalog, data)


def rewritten(draft: Draft, offer: Offer) -> Draft:
    """The draft with one more revision; revisions after the current one are left behind."""
    formulation = draft.formulation
    assert formulation is not None
    place = formulation.operators().index(offer.operator)
    revision = Revision(offer.after, offer.rule.name, offer.rule.title, offer.what, place, offer.choice)
    return replace(draft, revisions=(*draft.revisions[: draft.current + 1], revision), current=draft.current + 1)


def followed(operator: Operator, offer: Offer) -> Operator:
    """What stands for an operator after a rewrite: the same object, what it was rebuilt as, or what replaced it."""
    _, became = rebuilt((*_roots(offer), operator), {offer.operator: offer.became})
    return became.get(operator, operator)


def _roots(offer: Offer) -> tuple[Operator, ...]:
    return (offer.operator, *inputs(offer.operator))


class History:
    """The states of a sheet with the names of the edits between them."""

    def __init__(self, sheet: Sheet) -> None:
        self._states: list[tuple[str, Sheet]] = [("", sheet)]
        self._index = 0

    @property
    def sheet(self) -> Sheet:
        return self._states[self._index][1]

    def do(self, name: str, sheet: Sheet, merge: bool = False) -> None:
        """Records an edit. With `merge`, an edit of the same name right before is widened (typing, dragging)."""
        if merge and self._index == len(self._states) - 1 and self._states[self._index][0] == name and self._index > 0:
            self._states[self._index] = (name, sheet)
            return
        self._states = [*self._states[: self._index + 1], (name, sheet)]
        self._index += 1

    def amend(self, sheet: Sheet) -> None:
        """Exchanges the current state without an edit: for what is derived, such as a verdict or a measured count."""
        self._states[self._index] = (self._states[self._index][0], sheet)

    @property
    def undoable(self) -> str:
        """The name of the edit that undo takes back; empty where there is none."""
        return self._states[self._index][0] if self._index > 0 else ""

    @property
    def redoable(self) -> str:
        return self._states[self._index + 1][0] if self._index + 1 < len(self._states) else ""

    def undo(self) -> None:
        if self._index > 0:
            self._index -= 1

    def redo(self) -> None:
        if self._index + 1 < len(self._states):
            self._index += 1
