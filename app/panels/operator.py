"""The selected operator: its schema, its size with the derivation, the rewrites offered and refused here."""

from __future__ import annotations

from html import escape

from PySide6.QtCore import Qt, QUrl
from PySide6.QtWidgets import QLabel, QListWidget, QListWidgetItem, QPushButton, QTextBrowser, QVBoxLayout, QWidget

from app.fonts import font
from app.model import Workbench
from core.algebra.functions import calls
from core.algebra.graph import attributes, free, scalars
from core.algebra.notation import condition_text, name_of, sign
from core.algebra.operators import Operator
from core.derive.facts import Facts
from core.derive.lineage import lineage_text
from core.drawing.palette import LIGHT, Palette
from core.rewrite import Offer, Refusal
from core.size import Size
from core.size.numbers import bytes_text, ratio_text, rows_text


class OperatorPanel(QWidget):
    """What is known of the selected operator, and what can be done there."""

    def __init__(self, bench: Workbench) -> None:
        super().__init__()
        self.bench = bench
        self.roles: Palette = LIGHT
        self.text = QTextBrowser()
        self.text.setFont(font("sans", 13))
        self.text.setOpenLinks(False)
        self.text.setAccessibleName("The selected operator")
        self.text.document().setDocumentMargin(10)
        self.text.anchorClicked.connect(self._clicked)
        self.list = QListWidget()
        self.list.setAccessibleName("Rewrites at this operator")
        self.list.setWordWrap(True)
        self.list.setFont(font("sans", 13))
        self.list.itemActivated.connect(self._activate)
        self.list.currentItemChanged.connect(lambda *_: self._explain())
        self.reason = QLabel()
        self.reason.setWordWrap(True)
        self.reason.setContentsMargins(10, 6, 10, 6)
        self.reason.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.button = QPushButton("Apply this rewrite")
        self.button.clicked.connect(self.apply_current)
        self.caption = QLabel("Rewrites here")
        self.caption.setContentsMargins(10, 8, 10, 4)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(0)
        layout.addWidget(self.text, 3)
        layout.addWidget(self.caption)
        layout.addWidget(self.list, 2)
        layout.addWidget(self.reason)
        layout.addWidget(self.button)
        self._answers: list[Offer | Refusal] = []
        bench.changed.connect(self.refresh)
        bench.selected.connect(self.refresh)

    def set_palette(self, palette: Palette) -> None:
        self.roles = palette
        self.caption.setStyleSheet(f"color: {palette['soft']};")
        self.refresh()

    def refresh(self) -> None:
        operator, draft = self.bench.selection, self.bench.draft
        self.list.clear()
        self._answers = []
        if operator is None or draft is None or draft.formulation is None:
            self.caption.setText("Rewrites here")
            self.text.setHtml(self._welcome())
            self._explain()
            return
        size = self.bench.sizes(draft.formulation).get(operator)
        self.text.setHtml(self._describe(operator, size))
        self._list_answers(operator)
        self._explain()

    def _welcome(self) -> str:
        soft = self.roles["soft"]
        return (
            f"<p style='color:{soft}'>Select an operator in the drawing, or point into the text.</p>"
            f"<p style='color:{soft}'>The arrow keys walk the tree. Here you then read its attributes, how its size was "
            "estimated line by line, and which rewrites are legal there; the others say why they are not.</p>"
        )

    def _list_answers(self, operator: Operator) -> None:
        answers = self.bench.answers(operator)
        totals = {id(a): self.bench.totals(a) for a in answers if isinstance(a, Offer)}
        # What saves most stands first, then what changes nothing, then what costs, then what is refused.
        answers.sort(key=lambda a: _rank(totals.get(id(a))))
        for answer in answers:
            if isinstance(answer, Offer):
                effect = ratio_text(*totals[id(answer)])
                text = f"{answer.rule.title}   {'' if effect == '=' else effect + ' rows in all'}\n{answer.what}"
            else:
                text = f"{answer.rule.title}\nrefused: {answer.reason}"
            item = QListWidgetItem(text)
            if isinstance(answer, Refusal):
                item.setForeground(self.palette().placeholderText())
            item.setToolTip(answer.rule.law)
            self._answers.append(answer)
            self.list.addItem(item)
        offered = sum(isinstance(a, Offer) for a in answers)
        self.caption.setText(f"Rewrites here: {offered} offered, {len(answers) - offered} refused")
        if answers:
            self.list.setCurrentRow(0)

    def _current(self) -> Offer | Refusal | None:
        row = self.list.currentRow()
        return self._answers[row] if 0 <= row < len(self._answers) else None

    def _explain(self) -> None:
        answer = self._current()
        self.button.setEnabled(isinstance(answer, Offer))
        if answer is None:
            self.reason.setText("")
            return
        lines = [answer.rule.law]
        for check in answer.checks:
            lines.append(f"{'holds' if check.passed else check.outcome}: {check.sentence}")
            if check.cure and not check.passed:
                lines.append(f"    {check.cure}")
        lines += [f"caution: {caution}" for caution in answer.cautions]
        lines.append(answer.rule.source)
        self.reason.setText("\n".join(lines))

    def _activate(self, item: QListWidgetItem) -> None:
        self.apply_current()

    def apply_current(self) -> None:
        answer = self._current()
        if isinstance(answer, Offer):
            self.bench.apply(answer)

    def _clicked(self, url: QUrl) -> None:
        number = url.toString().removeprefix("operator:")
        draft = self.bench.draft
        if draft is not None and draft.formulation is not None and number.isdigit():
            self.bench.select(draft.formulation.operators()[int(number)])

    # --- text --------------------------------------------------------------------------------------------------------

    def _describe(self, operator: Operator, size: Size | None) -> str:
        head = f"{sign(operator)} {name_of(operator)}".strip()
        parts = [f"<h3 style='margin-bottom:2px'>{escape(head)}</h3>"]
        parts.append(f"<p style='font-family:\"Planimeter Mono\"'>{escape(condition_text(operator))}</p>")
        carried = sorted({c.name for c in calls(*scalars(operator)) if c.form})
        if carried:
            parts.append(self._soft(f"carried whole: {', '.join(carried)}"))
        if free(operator):
            outer = ", ".join(sorted(a.name for a in free(operator)))
            parts.append(self._soft(f"runs once for each outer row: it reads {outer}"))
        if size is not None:
            parts.append(self._size(size))
        parts.append(self._schema(operator))
        return "".join(parts)

    def _soft(self, text: str) -> str:
        return f"<p style='color:{self.roles['soft']}'>{escape(text)}</p>"

    def _size(self, size: Size) -> str:
        high = "no bound" if size.high is None else f"{size.high:,}"
        rows = [("estimate", f"{rows_text(size.rows)} rows", size.evidence.word)]
        if size.measured is not None:
            rows.append(("measured", f"{size.measured:,} rows", f"the estimate is {_off(size)}"))
        rows.append(("guaranteed", f"{size.low:,} to {high}", size.range_reason))
        rows.append(("bytes", bytes_text(size.bytes), "rows × width"))
        soft = self.roles["soft"]
        cells = "".join(
            f"<tr><td style='color:{soft}; padding-right:10px'>{escape(a)}</td><td style='padding-right:10px'><b>{escape(b)}</b></td>"
            f"<td style='color:{soft}'>{escape(c)}</td></tr>"
            for a, b, c in rows
        )
        lines = "".join(
            f"<tr><td style='padding-right:8px'>{escape(line.text)}<br><span style='font-family:\"Planimeter Mono\"; color:{soft}'>"
            f"{escape(line.formula)} = {line.value:.6g}</span><br><span style='color:{soft}'>{escape(line.evidence.word)}"
            f"{': ' + escape(line.source) if line.source else ''}</span></td></tr>"
            for line in size.derivation
        )
        return f"<table cellspacing='0'>{cells}</table><h4 style='margin-bottom:0'>How it was estimated</h4><table cellspacing='4'>{lines}</table>"

    def _schema(self, operator: Operator) -> str:
        facts = Facts(self.bench.sheet.catalog)
        known = facts.of(operator)
        keys = sorted(known.keys, key=lambda k: (len(k), sorted(a.id for a in k)))
        soft = self.roles["soft"]
        if keys:
            named = [
                "(" + ", ".join(sorted(a.name for a in key)) + ")" if key else "at most one row" for key in keys[:4]
            ]
            text = f"keys: {', '.join(named)}"
        else:
            text = "keys: none known"
        rows = "".join(
            f"<tr><td style='padding-right:10px'>{escape(a.name)}</td><td style='color:{soft}; padding-right:10px'>{escape(str(a.type))}</td>"
            f"<td style='color:{soft}; padding-right:10px'>{'never null' if a in known.never_null else 'may be null'}</td>"
            f"<td style='color:{soft}'>{escape(lineage_text(a, operator))}</td></tr>"
            for a in attributes(operator)
        )
        return f"<h4 style='margin-bottom:0'>Attributes</h4><p style='color:{soft}; margin-top:2px'>{escape(text)}</p><table cellspacing='0'>{rows}</table>"


def _rank(totals: tuple[float, float] | None) -> tuple[int, float]:
    if totals is None:
        return 3, 0.0
    if ratio_text(*totals) == "=":
        return 1, 0.0
    before, after = totals
    return (0 if after < before else 2), after


def _off(size: Size) -> str:
    assert size.measured is not None
    estimate, true = max(1.0, size.rows), max(1.0, float(size.measured))
    factor = max(estimate / true, true / estimate)
    if factor < 1.05:
        return "right"
    return f"{factor:.1f} times too {'high' if estimate > true else 'low'}"
