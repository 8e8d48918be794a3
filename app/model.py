"""The workbench: the open sheet with its history, and what follows from it (sizes, findings, drawings), kept until it changes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from PySide6.QtCore import QObject, Signal

from core.algebra.formulation import Formulation
from core.algebra.operators import Join, Operator
from core.algebra.scalars import refs
from core.catalog.model import Catalog
from core.compare.align import Alignment, align
from core.derive.facts import Facts
from core.drawing.display import DisplayList
from core.drawing.page import Column, Dimension, Page, draw_columns, draw_page
from core.drawing.plan import Balloon, PlanDrawing, PlanView, decades_for, draw_plan
from core.finding import Finding, findings
from core.language.sql.write import write_sql
from core.rewrite import Offer, Refusal, rewrites
from core.rewrite.improve import total_rows
from core.sheet import edit
from core.sheet.document import Draft, History, Sheet, new_sheet
from core.sheet.file import load, save, to_json
from core.size import Size, size
from core.size.numbers import bytes_text, ratio_text, rows_text

_MOST_BALLOONS = 4
_UNMEASURED: Mapping[Operator, int] = {}


@dataclass(slots=True)
class Drawn:
    """What is on the canvas: the display list, and the operator behind each owner."""

    display: DisplayList
    operators: dict[str, tuple[str, Operator]] = field(default_factory=dict)
    owners: dict[Operator, str] = field(default_factory=dict)


class Workbench(QObject):
    """Views read it and send intentions; every edit is a named state of the history."""

    changed = Signal()
    selected = Signal()
    announced = Signal(str)

    def __init__(self, sheet: Sheet | None = None) -> None:
        super().__init__()
        self.history = History(sheet if sheet is not None else new_sheet("Query plan", Catalog()))
        self.path: Path | None = None
        self.saved = self.history.sheet
        self.active = "A"
        self.selection: Operator | None = None
        self.beside = True
        # Kept by identity. The values hold what the keys are identities of, so that none is given to another object.
        self._sizes: dict[tuple[Formulation, int, int], tuple[object, dict[Operator, Size]]] = {}
        self._findings: dict[tuple[Formulation, int], tuple[object, list[Finding]]] = {}

    # --- reading -----------------------------------------------------------------------------------------------------

    @property
    def sheet(self) -> Sheet:
        return self.history.sheet

    @property
    def draft(self) -> Draft | None:
        return self.sheet.draft(self.active)

    @property
    def dirty(self) -> bool:
        return self.history.sheet is not self.saved

    def shown(self) -> list[Draft]:
        """The drafts on the canvas: all of them side by side, or the active one."""
        drafts = [d for d in self.sheet.drafts if d.formulation is not None]
        return drafts if self.beside else [d for d in drafts if d.letter == self.active]

    def sizes(self, formulation: Formulation) -> dict[Operator, Size]:
        """Sizes with the counts that were measured."""
        return self._sized(formulation, self.sheet.measured or _UNMEASURED)

    def _sized(self, formulation: Formulation, measured: Mapping[Operator, int]) -> dict[Operator, Size]:
        catalog = self.sheet.catalog
        key = (formulation, id(catalog), id(measured))
        if key not in self._sizes:
            if len(self._sizes) > 60:
                self._sizes.clear()
            self._sizes[key] = ((catalog, measured), size(formulation, catalog, measured))
        return self._sizes[key][1]

    def findings(self, draft: Draft) -> list[Finding]:
        formulation = draft.formulation
        if formulation is None:
            return []
        sizes = self.sizes(formulation)
        key = (formulation, id(sizes))
        if key not in self._findings:
            if len(self._findings) > 60:
                self._findings.clear()
            self._findings[key] = (sizes, findings(formulation, self.sheet.catalog, sizes))
        return self._findings[key][1]

    def answers(self, operator: Operator) -> list[Offer | Refusal]:
        """The rewrites offered and refused at an operator of the active draft."""
        formulation = self.draft.formulation if self.draft is not None else None
        if formulation is None or operator not in formulation.operators():
            return []
        return rewrites(formulation, operator, Facts(self.sheet.catalog))

    def totals(self, offer: Offer) -> tuple[float, float]:
        """The estimated total of rows before a rewrite of the active draft, and after it.

        Estimates on both sides: what a rewrite makes is not measured yet, and a count set against an estimate would
        show the estimate's error as the rewrite's effect.
        """
        draft = self.draft
        assert draft is not None and draft.formulation is not None
        before, after = (total_rows(f, self._sized(f, _UNMEASURED)) for f in (draft.formulation, offer.after))
        return before, after

    def total(self, formulation: Formulation) -> float:
        """The rows out of all operators."""
        return total_rows(formulation, self.sizes(formulation))

    def alignment(self) -> Alignment | None:
        """How the first two drafts on the canvas correspond."""
        drafts = self.shown()
        if len(drafts) != 2:
            return None
        a, b = (d.formulation for d in drafts)
        assert a is not None and b is not None
        return align(a, b)

    # --- edits -------------------------------------------------------------------------------------------------------

    def do(self, name: str, sheet: Sheet, merge: bool = False) -> None:
        self.history.do(name, sheet, merge)
        self._settle()

    def type_text(self, letter: str, text: str) -> None:
        draft = self.sheet.draft(letter)
        if draft is not None and draft.text == text:
            return
        dialect = draft.dialect if draft is not None else "duckdb"
        self.do(f"typing in {letter}", edit.with_text(self.sheet, letter, text, dialect), merge=True)

    def apply(self, offer: Offer) -> None:
        """Applies a rewrite to the active draft and keeps the eye on its result."""
        self.selection = offer.became
        self.do(offer.rule.title, edit.with_rewrite(self.sheet, self.active, offer))
        self.announced.emit(f"{offer.rule.title}: {offer.what}")

    def choose_revision(self, letter: str, number: int) -> None:
        self.active = letter
        self.do(f"revision {letter}{number}", edit.with_revision(self.sheet, letter, number))

    def add_draft(self, text: str, title: str = "") -> None:
        letter = edit.next_letter(self.sheet)
        self.active = letter
        self.do(f"formulation {letter}", edit.with_text(self.sheet, letter, text, title=title))

    def copy_draft(self) -> None:
        """A second formulation made of the active one, to rewrite it and compare."""
        if self.draft is None:
            return
        letter = edit.next_letter(self.sheet)
        source, self.active = self.active, letter
        self.do(f"formulation {letter} from {source}", edit.with_copy(self.sheet, source, letter))

    def remove_draft(self) -> None:
        if len(self.sheet.drafts) > 1:
            gone = self.active
            sheet = edit.without_draft(self.sheet, gone)
            self.active = sheet.drafts[0].letter
            self.do(f"without {gone}", sheet)

    def note(self, operator: Operator, text: str) -> None:
        self.do("note", edit.with_callout(self.sheet, self.active, operator, text))

    def undo(self) -> None:
        self.history.undo()
        self._settle()

    def redo(self) -> None:
        self.history.redo()
        self._settle()

    def amend(self, **changes: object) -> None:
        """Puts derived facts (verdict, measured counts) into the current state."""
        self.history.amend(replace(self.sheet, **changes))  # type: ignore[arg-type]
        self._settle()

    def select(self, operator: Operator | None, letter: str = "") -> None:
        if letter:
            self.active = letter
        self.selection = operator
        self.selected.emit()

    def activate(self, letter: str) -> None:
        if letter != self.active and self.sheet.draft(letter) is not None:
            self.active, self.selection = letter, None
            self.changed.emit()

    def _settle(self) -> None:
        if self.sheet.draft(self.active) is None and self.sheet.drafts:
            self.active = self.sheet.drafts[0].letter
        formulation = self.draft.formulation if self.draft is not None else None
        if formulation is None or self.selection not in formulation.operators():
            self.selection = None
        self.changed.emit()

    # --- files -------------------------------------------------------------------------------------------------------

    def open(self, sheet: Sheet, path: Path | None) -> None:
        self.history = History(sheet)
        self.saved, self.path = sheet, path
        self.active = sheet.drafts[0].letter if sheet.drafts else "A"
        self.selection = None
        self.changed.emit()

    def open_file(self, path: Path) -> None:
        self.open(load(path), path)

    def save_file(self, path: Path) -> None:
        save(self.sheet, path)
        self.path, self.saved = path, self.sheet
        self.changed.emit()

    def payload(self) -> bytes:
        """The sheet file, for an exported drawing to carry."""
        return to_json(self.sheet).encode()

    def sql(self) -> str:
        formulation = self.draft.formulation if self.draft is not None else None
        return "" if formulation is None else write_sql(formulation)

    # --- drawing -----------------------------------------------------------------------------------------------------

    def callouts(self) -> list[tuple[int, str, Operator, str]]:
        """The numbered callouts of what is shown: findings first, then notes, each with letter, operator and text."""
        found: list[tuple[str, Operator, str]] = []
        for draft in self.shown():
            for finding in self.findings(draft)[:_MOST_BALLOONS]:
                found.append((draft.letter, finding.operator, f"{finding.kind}: {finding.sentence}"))
        letters = {d.letter for d in self.shown()}
        found += [(c.letter, c.operator, c.text) for c in self.sheet.callouts if c.letter in letters]
        return [(i + 1, letter, operator, text) for i, (letter, operator, text) in enumerate(found)]

    def columns(self, selection: bool = True) -> tuple[list[Column], list[Dimension], Drawn]:
        """The drawings of all drafts shown, on one gauge, with what corresponds marked."""
        drafts = self.shown()
        everything = {op: s for d in drafts if d.formulation is not None for op, s in self.sizes(d.formulation).items()}
        decades = decades_for(everything)
        alignment = self.alignment()
        soft: set[Operator] = set()
        if alignment is not None:
            soft = {o for pair in alignment.same for o in pair}
        callouts = self.callouts()
        columns, drawn = [], Drawn(DisplayList())
        for draft in drafts:
            assert draft.formulation is not None
            mine = [Balloon(number, operator) for number, letter, operator, _ in callouts if letter == draft.letter]
            top = self.findings(draft)[:1]
            view = PlanView(
                notes={f.operator: _fan_note(f) for f in self.findings(draft) if f.kind == "fan-out join"},
                soft=frozenset(soft),
                accent=frozenset(f.operator for f in top),
                selected=self.selection if selection and draft.letter == self.active else None,
                balloons=mine,
            )
            plan = draw_plan(
                draft.formulation, self.sizes(draft.formulation), self.sheet.catalog, draft.letter, decades, view
            )
            columns.append(Column(draft.letter, draft.subtitle, plan.display))
            _remember(drawn, draft, plan)
        return columns, self._dimensions(alignment, drawn, everything), drawn

    def _dimensions(self, alignment: Alignment | None, drawn: Drawn, sizes: dict[Operator, Size]) -> list[Dimension]:
        """The matched operators whose rows differ most."""
        if alignment is None:
            return []
        found = []
        for a, b in alignment.matched:
            before, after = max(sizes[a].best, 1.0), max(sizes[b].best, 1.0)
            factor = max(before / after, after / before)
            if factor >= 2 and a in drawn.owners and b in drawn.owners:
                found.append((factor, Dimension(drawn.owners[a], drawn.owners[b], f"{ratio_text(before, after)} rows")))
        return [dimension for _, dimension in sorted(found, key=lambda pair: -pair[0])[:1]]

    def draw(self) -> Drawn:
        """The working view."""
        columns, dimensions, drawn = self.columns()
        drawn.display = draw_columns(columns, dimensions)
        return drawn

    def page(self) -> DisplayList:
        """The print view of what is shown."""
        columns, dimensions, _ = self.columns(selection=False)
        drafts = self.shown()
        revised = next((d for d in reversed(drafts) if d.current > 0), drafts[-1] if drafts else None)
        page = Page(
            title=self.sheet.title,
            callouts=[(number, text) for number, _, _, text in self.callouts()],
            revisions=self._revisions(revised),
            revisions_of=revised.letter if revised is not None else "A",
            verdict=self.sheet.verdict,
            figures=self._figures(drafts),
            facts=self._facts(),
            dimensions=dimensions,
        )
        return draw_page(columns, page)

    def _revisions(self, draft: Draft | None) -> list[tuple[str, str, str]]:
        if draft is None:
            return []
        rows = []
        for i in range(1, draft.current + 1):
            before, after = (self.total(r.formulation) for r in draft.revisions[i - 1 : i + 1])
            revision = draft.revisions[i]
            rows.append((f"{draft.letter}{i}", f"{revision.title}: {revision.what}", ratio_text(before, after)))
        return rows

    def _figures(self, drafts: list[Draft]) -> list[tuple[str, str]]:
        totals, moved = [], []
        for draft in drafts:
            assert draft.formulation is not None
            sizes = self.sizes(draft.formulation)
            totals.append(rows_text(self.total(draft.formulation)))
            moved.append(bytes_text(sum(s.bytes * s.best / max(s.rows, 1e-9) for s in sizes.values())))
        return [
            ("rows through all operators", " → ".join(totals)),
            ("bytes through all operators", " → ".join(moved)),
        ]

    def _facts(self) -> list[tuple[str, str]]:
        dates = sorted({f.as_of.isoformat() for f in self.sheet.catalog if f.as_of is not None})
        words = sorted({f.rows_evidence.word for f in self.sheet.catalog})
        statistics = f"{', '.join(words) or 'none'}{', ' + dates[-1] if dates else ''}"
        return [
            ("statistics", statistics),
            ("data", Path(self.sheet.data).resolve().name if self.sheet.data else "none"),
            ("site", self.sheet.site),
            ("drawn by", self.sheet.author or "–"),
            ("date", self.sheet.created.isoformat()),
        ]


def _fan_note(finding: Finding) -> str:
    """The second line of a join that multiplies rows: what a reader needs to know of it."""
    assert isinstance(finding.operator, Join)
    names = ", ".join(sorted({a.name for a in refs(finding.operator.condition)}))
    return f"{names}: a key of neither side"


def _remember(drawn: Drawn, draft: Draft, plan: PlanDrawing) -> None:
    for owner, operator in plan.operators.items():
        drawn.operators[owner] = (draft.letter, operator)
    drawn.owners.update(plan.owners)
