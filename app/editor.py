"""The text on the left: SQL coloured by tokens, errors under the offending word, marks between text and drawing."""

from __future__ import annotations

import re
from collections.abc import Sequence

from PySide6.QtCore import QTimer, Signal
from PySide6.QtGui import QColor, QSyntaxHighlighter, QTextCharFormat, QTextCursor, QTextDocument
from PySide6.QtWidgets import QLabel, QPlainTextEdit, QTextEdit, QVBoxLayout, QWidget

from app.fonts import font
from app.model import Workbench
from core.drawing.palette import LIGHT, Palette
from core.language.diagnostic import Diagnostic, position

_WORDS = """
all and any as asc between by case cast cross desc distinct else end except exists false fetch filter first following from full
group grouping having in inner intersect into is join lateral last left like limit natural not null nulls offset on or order
outer over partition preceding qualify range recursive right row rows select semi sets some then ties true unbounded union
unnest using values when where window with anti
""".split()
_TOKENS = re.compile(
    r"(?P<comment>--[^\n]*)|(?P<text>'(?:[^']|'')*'?)|(?P<name>\"[^\"]*\"?)|(?P<number>\b\d+(?:\.\d+)?\b)|(?P<word>\b[A-Za-z_]\w*\b)"
)
_PAUSE = 120


class Colours(QSyntaxHighlighter):
    """Colours a line at a time with a small lexer of its own, so that half-typed text is no trouble."""

    def __init__(self, document: QTextDocument) -> None:
        super().__init__(document)
        self.palette: Palette = LIGHT

    def highlightBlock(self, text: str) -> None:
        for match in _TOKENS.finditer(text):
            kind = match.lastgroup
            role = {"comment": "soft", "text": "text", "number": "number"}.get(kind or "")
            if kind == "word" and match.group().lower() in _WORDS:
                role = "word"
            if role is not None:
                made = QTextCharFormat()
                made.setForeground(QColor(self.palette[role]))
                made.setFontItalic(kind == "comment")
                self.setFormat(match.start(), match.end() - match.start(), made)


class Editor(QWidget):
    """The text of the active draft. The drawing follows the typing after a short pause."""

    pointed = Signal(int)

    def __init__(self, bench: Workbench) -> None:
        super().__init__()
        self.bench = bench
        self.colours_of: Palette = LIGHT
        self.field = QPlainTextEdit()
        self.field.setFont(font("mono", 13))
        self.field.setTabStopDistance(28)
        self.field.document().setDocumentMargin(10)
        self.field.setLineWrapMode(QPlainTextEdit.LineWrapMode.NoWrap)
        self.field.setTabChangesFocus(True)
        self.field.setAccessibleName("Text of the formulation")
        self.colours = Colours(self.field.document())
        self.problem = QLabel()
        self.problem.setWordWrap(True)
        self.problem.setVisible(False)
        self.problem.setAccessibleName("Problems in the text")
        self.problem.setContentsMargins(10, 6, 10, 8)
        self.notes = QLabel()
        self.notes.setWordWrap(True)
        self.notes.setVisible(False)
        self.notes.setAccessibleName("Assumptions made in reading")
        self.notes.setContentsMargins(10, 6, 10, 8)
        self.head = QLabel()
        self.head.setContentsMargins(10, 8, 10, 6)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(0)
        layout.addWidget(self.head)
        layout.addWidget(self.field, 1)
        layout.addWidget(self.notes)
        layout.addWidget(self.problem)
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(_PAUSE)
        self._timer.timeout.connect(self.read_now)
        self._letter = ""
        self._loading = False
        self._pointing = False
        self.field.textChanged.connect(self._typed)
        self.field.cursorPositionChanged.connect(self._moved)
        bench.changed.connect(self.refresh)
        bench.selected.connect(self.mark_selection)

    def set_palette(self, palette: Palette) -> None:
        self.colours_of = palette
        self.colours.palette = palette
        self.colours.rehighlight()
        self.problem.setStyleSheet(f"color: {palette['accent']}; background: {palette['panel']};")
        for label in (self.head, self.notes):
            label.setStyleSheet(f"color: {palette['soft']};")
        self.mark_selection()

    def refresh(self) -> None:
        """Takes over the text of the active draft; a rewritten draft shows the SQL of its revision, read-only."""
        draft = self.bench.draft
        if draft is None:
            return
        rewritten = draft.current > 0
        text = self.bench.sql() if rewritten else draft.text
        if self.field.toPlainText() != text or draft.letter != self._letter:
            self._loading = True
            self.field.setPlainText(text)
            self._loading = False
        self._letter = draft.letter
        self.field.setReadOnly(rewritten)
        self.head.setText(f"{draft.name}  ·  {draft.subtitle}" + ("  ·  written by Planimeter" if rewritten else ""))
        self._show_problems(() if rewritten else draft.problems)
        notes = (
            draft.formulation.notes if draft.formulation is not None and not draft.problems and not rewritten else ()
        )
        self.notes.setText("\n".join(notes))
        self.notes.setVisible(bool(notes))
        self.mark_selection()

    def _typed(self) -> None:
        if not self._loading and not self.field.isReadOnly():
            self._timer.start()

    def read_now(self) -> None:
        """Reads what was typed without waiting for the pause."""
        self._timer.stop()
        if self._letter and not self.field.isReadOnly():
            self.bench.type_text(self._letter, self.field.toPlainText())

    def _show_problems(self, problems: Sequence[Diagnostic]) -> None:
        lines = []
        text = self.field.toPlainText()
        for problem in problems:
            where = ""
            if problem.span is not None:
                row, column = position(text, problem.span.start)
                where = f"{row}:{column}  "
            extra = "".join(f"\n    {note}" for note in problem.notes) + (
                f"\n    {problem.help}" if problem.help else ""
            )
            lines.append(f"{where}{problem.message}{extra}")
        self.problem.setText("\n".join(lines))
        self.problem.setVisible(bool(lines))

    def mark_selection(self) -> None:
        """Marks the text that the selected operator came from, and waves under what is wrong."""
        marks: list[QTextEdit.ExtraSelection] = []
        draft = self.bench.draft
        if draft is not None and draft.current == 0:
            formulation = draft.formulation
            span = None
            if formulation is not None and self.bench.selection is not None and not draft.problems:
                span = formulation.spans.get(self.bench.selection)
            if span is not None and not self._pointing:
                marks.append(self._mark(span.start, span.end, QColor(self.colours_of["wash"]), None))
            for problem in draft.problems:
                if problem.span is not None:
                    marks.append(
                        self._mark(problem.span.start, problem.span.end, None, QColor(self.colours_of["accent"]))
                    )
        self.field.setExtraSelections(marks)

    def _mark(self, start: int, end: int, fill: QColor | None, wave: QColor | None) -> QTextEdit.ExtraSelection:
        mark = QTextEdit.ExtraSelection()
        cursor = QTextCursor(self.field.document())
        last = max(0, self.field.document().characterCount() - 1)
        cursor.setPosition(min(start, last))
        cursor.setPosition(min(max(end, start + 1), last), QTextCursor.MoveMode.KeepAnchor)
        made = QTextCharFormat()
        if fill is not None:
            made.setBackground(fill)
        if wave is not None:
            made.setUnderlineStyle(QTextCharFormat.UnderlineStyle.WaveUnderline)
            made.setUnderlineColor(wave)
        mark.cursor, mark.format = cursor, made
        return mark

    def _moved(self) -> None:
        """Pointing into the text selects the operator that came from there: the smallest span around the caret."""
        if self._loading or not self.field.hasFocus():
            return
        draft = self.bench.draft
        if draft is None or draft.current > 0 or draft.problems or draft.formulation is None:
            return
        if draft.text != self.field.toPlainText():
            return
        place = self.field.textCursor().position()
        known = set(draft.formulation.operators())
        inside = [
            (span.end - span.start, operator)
            for operator, span in draft.formulation.spans.items()
            if operator in known and span.start <= place <= span.end
        ]
        if inside:
            self._pointing = True
            self.bench.select(min(inside, key=lambda pair: pair[0])[1])
            self._pointing = False
