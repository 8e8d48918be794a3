"""Below the drawing, closed until wanted: findings, verdict, revisions, catalog."""

from __future__ import annotations

from html import escape

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QTabWidget, QTextBrowser, QTreeWidget, QTreeWidgetItem, QVBoxLayout, QWidget

from app.fonts import font
from app.model import Workbench
from core.compare import Kind, Verdict
from core.drawing.palette import LIGHT, Palette
from core.finding import Finding
from core.size.numbers import ratio_text, rows_text


class Below(QWidget):
    """Four lists in one strip."""

    def __init__(self, bench: Workbench) -> None:
        super().__init__()
        self.bench = bench
        self.roles: Palette = LIGHT
        self.verdict: Verdict | None = None
        self.tabs = QTabWidget()
        self.tabs.setDocumentMode(True)
        self.findings = _tree("Findings", ["finding", "in words", "mended by"])
        self.findings.itemSelectionChanged.connect(self._to_finding)
        self.findings.itemActivated.connect(self._cure)
        self.revisions = _tree("Revisions", ["revision", "rewrite", "rows in all", "change"])
        self.revisions.itemActivated.connect(self._to_revision)
        self.catalog = _tree(
            "Catalog", ["relation or attribute", "type", "rows or distinct", "nulls", "least", "greatest", "evidence"]
        )
        self.verdict_text = QTextBrowser()
        self.verdict_text.setFont(font("sans", 13))
        self.verdict_text.document().setDocumentMargin(10)
        self.verdict_text.setAccessibleName("Verdict")
        for widget, name in (
            (self.findings, "Findings"),
            (self.verdict_text, "Verdict"),
            (self.revisions, "Revisions"),
            (self.catalog, "Catalog"),
        ):
            self.tabs.addTab(widget, name)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.addWidget(self.tabs)
        self._found: list[tuple[str, Finding]] = []
        self._catalog_of: object = None
        bench.changed.connect(self.refresh)

    def set_palette(self, palette: Palette) -> None:
        self.roles = palette
        self.show_verdict(self.verdict)

    def show_tab(self, name: str) -> None:
        for i in range(self.tabs.count()):
            if self.tabs.tabText(i).startswith(name):
                self.tabs.setCurrentIndex(i)

    def refresh(self) -> None:
        self._list_findings()
        self._list_revisions()
        if self._catalog_of is not self.bench.sheet.catalog:
            self._catalog_of = self.bench.sheet.catalog
            self._list_catalog()
        if not self.bench.sheet.verdict:
            self.verdict = None
            self.show_verdict(None)

    # --- findings ----------------------------------------------------------------------------------------------------

    def _list_findings(self) -> None:
        self.findings.blockSignals(True)
        self.findings.clear()
        self._found = [(d.letter, f) for d in self.bench.shown() for f in self.bench.findings(d)]
        for letter, finding in self._found:
            cure = finding.offer.rule.title if finding.offer is not None else f"– {finding.why_not}"
            item = QTreeWidgetItem([f"{letter}  {finding.kind}", finding.sentence, cure])
            item.setToolTip(1, f"{finding.sentence}\nevidence: {finding.evidence.word}")
            item.setToolTip(2, cure)
            self.findings.addTopLevelItem(item)
        self.findings.blockSignals(False)
        self.tabs.setTabText(0, f"Findings ({len(self._found)})")

    def _picked(self) -> tuple[str, Finding] | None:
        item = self.findings.currentItem()
        row = -1 if item is None else self.findings.indexOfTopLevelItem(item)
        return self._found[row] if 0 <= row < len(self._found) else None

    def _to_finding(self) -> None:
        found = self._picked()
        if found is not None:
            self.bench.select(found[1].operator, found[0])

    def _cure(self) -> None:
        found = self._picked()
        if found is not None and found[1].offer is not None:
            self.bench.active = found[0]
            self.bench.apply(found[1].offer)

    # --- revisions ---------------------------------------------------------------------------------------------------

    def _list_revisions(self) -> None:
        self.revisions.clear()
        for draft in self.bench.sheet.drafts:
            before: float | None = None
            for i, revision in enumerate(draft.revisions):
                total = self.bench.total(revision.formulation)
                change = "" if before is None else ratio_text(before, total)
                text = revision.title + (f": {revision.what}" if revision.what else "")
                item = QTreeWidgetItem([f"{draft.letter}{i}", text, rows_text(total), change])
                item.setData(0, Qt.ItemDataRole.UserRole, (draft.letter, i))
                if i == draft.current:
                    made = item.font(0)
                    made.setBold(True)
                    item.setFont(0, made)
                self.revisions.addTopLevelItem(item)
                before = total

    def _to_revision(self, item: QTreeWidgetItem) -> None:
        letter, number = item.data(0, Qt.ItemDataRole.UserRole)
        self.bench.choose_revision(letter, number)

    # --- catalog -----------------------------------------------------------------------------------------------------

    def _list_catalog(self) -> None:
        self.catalog.clear()
        for facts in sorted(self.bench.sheet.catalog, key=lambda f: f.name):
            rows = "" if facts.rows is None else f"{facts.rows:,}"
            when = f"{facts.rows_evidence.word} {facts.as_of or ''}".strip()
            top = QTreeWidgetItem([facts.name, "", rows, "", "", "", when])
            for attribute in facts.attributes:
                known = attribute.statistics
                cells = ["", "", "", ""]
                if known is not None:
                    cells = [
                        "" if known.distinct is None else f"{known.distinct:,}",
                        "" if known.nulls is None else f"{known.nulls:,}",
                        "" if known.low is None else str(known.low),
                        "" if known.high is None else str(known.high),
                    ]
                key = " (key)" if facts.primary is not None and attribute.name in facts.primary else ""
                null = "" if attribute.nullable else " not null"
                evidence = "" if known is None else known.evidence.word
                top.addChild(QTreeWidgetItem([f"{attribute.name}{key}", f"{attribute.type}{null}", *cells, evidence]))
            self.catalog.addTopLevelItem(top)

    # --- verdict -----------------------------------------------------------------------------------------------------

    def show_verdict(self, verdict: Verdict | None) -> None:
        self.verdict = verdict
        soft = self.roles["soft"]
        if verdict is None:
            self.verdict_text.setHtml(
                f"<p style='color:{soft}'>Compare two formulations to see whether they are equal, or the smallest data on which they differ.</p>"
            )
            return
        parts = [f"<h3>{escape(verdict.sentence)}</h3>"]
        parts += [f"<p>{escape(reason)}</p>" for reason in verdict.reasons]
        if verdict.kind is Kind.DIFFERENT and verdict.witness is not None:
            parts.append(_witness_html(verdict, soft))
        if verdict.proof:
            steps = "".join(
                f"<li>{escape(s.side)}: {escape(s.title)} <span style='color:{soft}'>{escape(s.law)}</span><br>{escape(s.what)}</li>"
                for s in verdict.proof
            )
            parts.append(f"<ol>{steps}</ol>")
        parts += [f"<p style='color:{soft}'>rests on: {escape(text)}</p>" for text in verdict.rests_on]
        parts += [f"<p style='color:{soft}'>{escape(text)}</p>" for text in verdict.asides]
        parts.append(f"<p style='color:{soft}'>meaning: {escape(verdict.dialect)}</p>")
        self.verdict_text.setHtml("".join(parts))


def _witness_html(verdict: Verdict, soft: str) -> str:
    witness = verdict.witness
    assert witness is not None
    parts = []
    for name, rows in witness.data.items():
        facts = witness.catalog.relation(name)
        if facts is None:
            continue
        parts.append(_table(facts.name, [a.name for a in facts.attributes], rows, soft))
    parts.append(_table(f"{verdict.names[0]} gives", list(witness.columns), witness.result_a, soft))
    parts.append(_table(f"{verdict.names[1]} gives", list(witness.columns), witness.result_b, soft))
    return "<table><tr>" + "".join(f"<td style='padding-right:24px'>{part}</td>" for part in parts) + "</tr></table>"


def _solid(text: str) -> str:
    """Text that is not broken across lines."""
    return escape(text).replace(" ", "&nbsp;").replace("_", "_\u2060").replace("-", "-\u2060")


def _table(title: str, names: list[str], rows: object, soft: str) -> str:
    head = "".join(
        f"<th align='left' style='color:{soft}; padding-right:8px; white-space:nowrap'>{_solid(n)}</th>" for n in names
    )
    body = "".join(
        "<tr>"
        + "".join(
            f"<td style='padding-right:8px; white-space:nowrap'>{'NULL' if v is None else _solid(str(v))}</td>"
            for v in row
        )
        + "</tr>"
        for row in rows  # type: ignore[attr-defined]
    )
    empty = "" if body else f"<tr><td style='color:{soft}'>no rows</td></tr>"
    return f"<p><b>{_solid(title)}</b></p><table cellspacing='0'><tr>{head}</tr>{body}{empty}</table>"


def _tree(name: str, columns: list[str]) -> QTreeWidget:
    made = QTreeWidget()
    made.setAccessibleName(name)
    made.setFont(font("sans", 13))
    made.setHeaderLabels(columns)
    made.setRootIsDecorated(name == "Catalog")
    made.setUniformRowHeights(True)
    made.setColumnWidth(0, 230)
    made.setColumnWidth(1, 520 if name in ("Findings", "Revisions") else 150)
    return made
