"""The window: text on the left, the drawing in the middle, the operator on the right, lists below."""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

from PySide6.QtCore import QMimeData, Qt, QTimer
from PySide6.QtGui import QAction, QCloseEvent, QDragEnterEvent, QDropEvent, QGuiApplication, QKeySequence
from PySide6.QtWidgets import (
    QApplication,
    QDockWidget,
    QFileDialog,
    QInputDialog,
    QLabel,
    QMainWindow,
    QMessageBox,
    QProgressBar,
    QWidget,
)

from app import demo_sheet, tasks
from app.actions import ENTRIES
from app.canvas.view import Canvas
from app.command_search import CommandSearch
from app.editor import Editor
from app.export.files import KINDS, ExportError, carried, export, to_image
from app.fonts import font
from app.model import Workbench
from app.panels.below import Below
from app.panels.operator import OperatorPanel
from app.tasks import Counted, Profiled
from app.theme import qt_palette, style_sheet, system_is_dark
from app.work import Worker
from core.algebra.notation import tree_text
from core.catalog.ddl import CatalogError, catalog_from_ddl
from core.catalog.files import load_catalog
from core.catalog.model import Catalog
from core.compare import Verdict
from core.drawing.page import CAUTION
from core.drawing.palette import PALETTES
from core.rewrite.improve import Revision as Step
from core.sheet import ENDING, edit
from core.sheet.document import Sheet, new_sheet
from core.sheet.file import SheetError, from_json

_DRAWINGS = "Drawings (*.svg *.pdf *.png)"


class Window(QMainWindow):
    """One sheet. Each public method is an action of `app.actions`."""

    def __init__(self, bench: Workbench | None = None, dark: bool | None = None) -> None:
        super().__init__()
        self.bench = bench if bench is not None else Workbench()
        self.dark = system_is_dark() if dark is None else dark
        self.worker = Worker()
        self.canvas = Canvas(self.bench)
        self.editor = Editor(self.bench)
        self.panel = OperatorPanel(self.bench)
        self.below = Below(self.bench)
        self.setCentralWidget(self.canvas)
        self._dock("Text", self.editor, Qt.DockWidgetArea.LeftDockWidgetArea, 380)
        self._dock("Operator", self.panel, Qt.DockWidgetArea.RightDockWidgetArea, 400)
        self.below_dock = self._dock("Lists", self.below, Qt.DockWidgetArea.BottomDockWidgetArea, 230)
        self.below_dock.hide()
        self.setAcceptDrops(True)
        self.resize(1560, 960)
        self.actions_by_method: dict[str, QAction] = {}
        self._menus()
        self._status()
        self.canvas.note_wanted.connect(self.note_dialog)
        self.bench.changed.connect(self._update)
        self.bench.selected.connect(self._update)
        self.bench.announced.connect(self.say)
        self.worker.started.connect(self._began)
        self.worker.progressed.connect(self._progress)
        self.worker.finished.connect(self._ended)
        self.worker.failed.connect(self.complain)
        QGuiApplication.styleHints().colorSchemeChanged.connect(lambda *_: self.set_dark(system_is_dark()))
        self.set_dark(self.dark)
        self.bench.changed.emit()

    # --- building ----------------------------------------------------------------------------------------------------

    def _dock(self, name: str, widget: QWidget, area: Qt.DockWidgetArea, size: int) -> QDockWidget:
        dock = QDockWidget(name, self)
        dock.setObjectName(name)
        dock.setWidget(widget)
        dock.setFeatures(QDockWidget.DockWidgetFeature.DockWidgetClosable)
        self.addDockWidget(area, dock)
        across = area == Qt.DockWidgetArea.BottomDockWidgetArea
        self.resizeDocks([dock], [size], Qt.Orientation.Vertical if across else Qt.Orientation.Horizontal)
        dock.setTitleBarWidget(QWidget())
        return dock

    def _menus(self) -> None:
        menus = {}
        for entry in ENTRIES:
            if entry.menu not in menus:
                menus[entry.menu] = self.menuBar().addMenu(entry.menu)
            action = QAction(entry.name, self)
            if entry.shortcut:
                action.setShortcut(QKeySequence(entry.shortcut))
            action.setCheckable(entry.checkable)
            action.triggered.connect(lambda _=False, method=entry.method: getattr(self, method)())
            menus[entry.menu].addAction(action)
            self.actions_by_method[entry.method] = action

    def _status(self) -> None:
        self.progress = QProgressBar()
        self.progress.setRange(0, 1000)
        self.progress.setMaximumWidth(220)
        self.progress.setTextVisible(False)
        self.progress.hide()
        self.message = QLabel("")
        self.message.setAccessibleName("Messages")
        self.statusBar().addWidget(self.message, 1)
        self.statusBar().addPermanentWidget(self.progress)

    def set_dark(self, dark: bool) -> None:
        self.dark = dark
        palette = PALETTES["dark" if dark else "light"]
        application = QApplication.instance()
        if isinstance(application, QApplication):
            application.setPalette(qt_palette(palette))
        self.setStyleSheet(style_sheet(palette))
        drawn = PALETTES["print"] if self.canvas.print_view and not dark else palette
        self.canvas.set_palette(drawn)
        self.editor.set_palette(palette)
        self.panel.set_palette(palette)
        self.below.set_palette(palette)
        self.actions_by_method["toggle_dark"].setChecked(dark)

    # --- state -------------------------------------------------------------------------------------------------------

    def _update(self) -> None:
        bench = self.bench
        history, draft = bench.history, bench.draft
        drawn = any(d.formulation is not None for d in bench.sheet.drafts)
        there = {
            "a drawing": drawn,
            "an edit": bool(history.undoable),
            "an edit taken back": bool(history.redoable),
            "a selected operator": bench.selection is not None,
            "two formulations": len([d for d in bench.sheet.drafts if d.formulation is not None]) >= 2,
            "data": bool(bench.sheet.data) and drawn,
            "an earlier revision": draft is not None and draft.current > 0,
            "a later revision": draft is not None and draft.current + 1 < len(draft.revisions),
            "a witness": self.below.verdict is not None and self.below.verdict.witness is not None,
            "work under way": self.worker.busy,
        }
        for entry in ENTRIES:
            action = self.actions_by_method[entry.method]
            allowed = not entry.needs or there[entry.needs]
            action.setEnabled(allowed)
            action.setStatusTip("" if allowed else f"needs {entry.needs}")
        self.actions_by_method["undo"].setText(f"Undo {history.undoable}".strip())
        self.actions_by_method["redo"].setText(f"Redo {history.redoable}".strip())
        self.actions_by_method["toggle_beside"].setChecked(bench.beside)
        star = "*" if bench.dirty else ""
        self.setWindowTitle(f"{bench.sheet.title}{star} – Planimeter")

    def say(self, text: str) -> None:
        self.message.setText(text)

    def complain(self, text: str) -> None:
        """An error: said in the status line, and in a box where someone can see it."""
        self.say(text)
        if QGuiApplication.platformName() != "offscreen":
            QMessageBox.warning(self, "Planimeter", text)

    def _began(self, name: str) -> None:
        self.say(f"{name} … (Ctrl+. stops it)")
        self.progress.setValue(0)
        self.progress.show()
        self._update()

    def _progress(self, share: float, text: str) -> None:
        self.progress.setValue(round(share * 1000))
        if text:
            self.say(f"{text}  ({share:.0%})")

    def _ended(self) -> None:
        self.progress.hide()
        self._update()

    # --- sheet -------------------------------------------------------------------------------------------------------

    def new_sheet(self) -> None:
        if self._may_leave():
            self.bench.open(
                edit.with_text(new_sheet("Query plan", self.bench.sheet.catalog, self.bench.sheet.data), "A", ""), None
            )
            self.focus_text()

    def _may_leave(self) -> bool:
        """Asks before unsaved work is left."""
        if not self.bench.dirty or QGuiApplication.platformName() == "offscreen":
            return True
        answer = QMessageBox.question(
            self, "Planimeter", "The sheet has changes that are not saved. Leave them?",
            QMessageBox.StandardButton.Discard | QMessageBox.StandardButton.Cancel | QMessageBox.StandardButton.Save,
        )  # fmt: skip
        if answer == QMessageBox.StandardButton.Save:
            self.save()
            return not self.bench.dirty
        return answer == QMessageBox.StandardButton.Discard

    def open_dialog(self) -> None:
        filters = f"Sheets, drawings, queries, catalogs (*{ENDING} *.svg *.pdf *.png *.sql *.toml)"
        path, _ = QFileDialog.getOpenFileName(self, "Open", "", filters)
        if path:
            self.open_path(Path(path))

    def open_path(self, path: Path) -> None:
        """Opens a sheet, a drawing that carries one, a query, a catalog, or data: whatever the path is."""
        try:
            if path.suffix.lower() in KINDS:
                payload = carried(path)
                if payload is None:
                    self.complain(f"{path.name} carries no sheet")
                    return
                self.bench.open(from_json(payload.decode()), None)
            elif path.suffix.lower() == ENDING:
                self.bench.open_file(path)
            elif path.suffix.lower() == ".toml":
                self._use_catalog(load_catalog(path))
            elif path.suffix.lower() == ".sql":
                self._open_sql(path)
            else:
                self.read_data(path)
        except (SheetError, CatalogError, ExportError, OSError, UnicodeDecodeError) as error:
            self.complain(str(error))

    def _open_sql(self, path: Path) -> None:
        text = path.read_text(encoding="utf-8")
        if text.lower().lstrip().startswith("create"):
            self._use_catalog(catalog_from_ddl(text))
            return
        empty = [d for d in self.bench.sheet.drafts if not d.text.strip()]
        if empty:
            self.bench.active = empty[0].letter
            self.bench.do(f"open {path.name}", edit.with_text(self.bench.sheet, empty[0].letter, text, title=path.stem))
        else:
            self.bench.add_draft(text, path.stem)
        self.canvas.fit()

    def _use_catalog(self, catalog: Catalog) -> None:
        sheet = replace(self.bench.sheet, catalog=catalog, measured={})
        for draft in sheet.drafts:
            sheet = edit.with_text(sheet, draft.letter, draft.text, draft.dialect, draft.title)
        self.bench.do("catalog", sheet)
        self.say(f"{len(catalog)} relations in the catalog")

    def open_demo(self) -> None:
        if self._may_leave():
            self.worker.start(
                "making the demo", lambda cancel, progress: demo_sheet.demo(progress, cancel), self._demo_ready
            )

    def _demo_ready(self, sheet: object) -> None:
        assert isinstance(sheet, Sheet)
        self.bench.open(sheet, None)
        self.canvas.fit()

    def demo_dialog(self) -> None:
        names = demo_sheet.query_names()
        name, accepted = QInputDialog.getItem(self, "Demo", "A query of the demo", names, 0, False)
        if accepted:
            self.open_demo_query(name)

    def open_demo_query(self, name: str) -> None:
        self.bench.add_draft(demo_sheet.query_text(name), name)
        self.canvas.fit()

    def data_dialog(self) -> None:
        path = QFileDialog.getExistingDirectory(self, "A folder of Parquet, CSV or JSON files")
        if path:
            self.read_data(Path(path))

    def read_data(self, path: Path) -> None:
        """Profiles data and makes its catalog the sheet's."""
        declared = self.bench.sheet.catalog

        def then(result: Profiled) -> None:
            catalog, notes = result
            self.bench.history.amend(replace(self.bench.sheet, data=str(path)))
            self._use_catalog(catalog)
            if notes:
                self.say("; ".join(notes))

        self.worker.start(f"profiling {path.name}", tasks.profiling(path, declared), then)

    def save(self) -> None:
        if self.bench.path is None:
            self.save_dialog()
        else:
            self._save(self.bench.path)

    def save_dialog(self) -> None:
        path, _ = QFileDialog.getSaveFileName(
            self, "Save the sheet", f"{self.bench.sheet.title}{ENDING}", f"Sheets (*{ENDING})"
        )
        if path:
            target = Path(path)
            self._save(target if target.suffix else target.with_suffix(ENDING))

    def _save(self, path: Path) -> None:
        try:
            self.bench.save_file(path)
            self.say(f"saved {path.name}")
        except OSError as error:
            self.complain(f"{path}: {error.strerror}")

    def export_dialog(self) -> None:
        path, _ = QFileDialog.getSaveFileName(self, "Export the sheet", f"{self.bench.sheet.title}.svg", _DRAWINGS)
        if path:
            self.export_to(Path(path))

    def export_to(self, path: Path) -> None:
        """Writes the print view; the file carries the sheet."""
        palette = PALETTES["dark"] if self.dark and path.suffix.lower() == ".png" else PALETTES["print"]
        try:
            export(self.bench.page(), palette, path, self.bench.payload())
            self.say(f"exported {path.name}")
        except (OSError, ValueError) as error:
            self.complain(str(error))

    def title_dialog(self) -> None:
        title, accepted = QInputDialog.getText(self, "Name of the sheet", "Name", text=self.bench.sheet.title)
        if accepted and title.strip():
            self.bench.do("name of the sheet", replace(self.bench.sheet, title=title.strip()))

    # --- edit --------------------------------------------------------------------------------------------------------

    def undo(self) -> None:
        self.bench.undo()

    def redo(self) -> None:
        self.bench.redo()

    def copy_sql(self) -> None:
        QGuiApplication.clipboard().setText(self.bench.sql())
        self.say("the SQL is on the clipboard; try it on the target engine before production")

    def copy_tree(self) -> None:
        draft = self.bench.draft
        if draft is not None and draft.formulation is not None:
            QGuiApplication.clipboard().setText(tree_text(draft.formulation.root))

    def copy_drawing(self) -> None:
        mime = QMimeData()
        mime.setImageData(to_image(self.bench.page(), PALETTES["print"], 192))
        QGuiApplication.clipboard().setMimeData(mime)

    def note_dialog(self) -> None:
        operator = self.bench.selection
        if operator is None:
            return
        known = next((c.text for c in self.bench.sheet.callouts if c.operator is operator), "")
        text, accepted = QInputDialog.getMultiLineText(
            self, "Note", "A note at this operator (empty takes it away)", known
        )
        if accepted:
            self.bench.note(operator, text)

    def search_commands(self) -> None:
        CommandSearch(self, self.actions_by_method).exec()

    # --- query -------------------------------------------------------------------------------------------------------

    def add_draft(self) -> None:
        self.bench.add_draft("")
        self.focus_text()

    def copy_draft(self) -> None:
        self.bench.copy_draft()
        self.canvas.fit()

    def remove_draft(self) -> None:
        self.bench.remove_draft()

    def next_draft(self) -> None:
        letters = [d.letter for d in self.bench.sheet.drafts]
        place = letters.index(self.bench.active) if self.bench.active in letters else -1
        self.bench.activate(letters[(place + 1) % len(letters)])

    def measure(self) -> None:
        """Counts the rows of every operator of all formulations on the sheet."""
        sheet = self.bench.sheet
        formulations = [d.formulation for d in sheet.drafts if d.formulation is not None]
        data = sheet.data

        def then(result: Counted) -> None:
            counts, reasons = result
            self.bench.amend(measured={**self.bench.sheet.measured, **counts})
            left = f"; {len(reasons)} could not be counted: {next(iter(reasons.values()))}" if reasons else ""
            self.say(f"{len(counts)} operators counted{left}")

        self.worker.start("measuring", tasks.counting(data, formulations), then)

    def improve(self) -> None:
        """Searches the cheapest chain of rewrites, and puts it on the sheet as a second formulation's revisions."""
        draft = self.bench.draft
        if draft is None or draft.formulation is None:
            return
        formulation, catalog, letter = draft.formulation, self.bench.sheet.catalog, draft.letter

        def then(result: object) -> None:
            self._take_chain(letter, result)  # type: ignore[arg-type]

        self.worker.start("looking for a better formulation", tasks.improving(formulation, catalog), then)

    def _take_chain(self, letter: str, chain: list[Step]) -> None:
        if not chain:
            self.say("no offered rewrite lowers the total of rows")
            return
        sheet = self.bench.sheet
        if len(sheet.drafts) == 1:
            target = edit.next_letter(sheet)
            sheet = edit.with_copy(sheet, letter, target)
        else:
            target = letter
        for step in chain:
            sheet = edit.with_rewrite(sheet, target, step.offer)
        self.bench.active = target
        self.bench.selection = None
        self.bench.do(f"better formulation {target}", sheet)
        self.canvas.fit()
        self.say(
            f"{len(chain)} rewrites; estimated rows in all ÷ {max(1.0, chain[0].before / max(1.0, chain[-1].after)):.1f}"
        )

    def apply_rewrite(self) -> None:
        self.panel.apply_current()

    def earlier(self) -> None:
        draft = self.bench.draft
        if draft is not None:
            self.bench.choose_revision(draft.letter, draft.current - 1)

    def later(self) -> None:
        draft = self.bench.draft
        if draft is not None:
            self.bench.choose_revision(draft.letter, draft.current + 1)

    def compare(self) -> None:
        drafts = [d for d in self.bench.sheet.drafts if d.formulation is not None][:2]
        if len(drafts) < 2:
            return
        a, b = (d.formulation for d in drafts)
        catalog, sheet = self.bench.sheet.catalog, self.bench.sheet
        assert a is not None and b is not None
        names = (drafts[0].letter, drafts[1].letter)

        def then(result: Verdict) -> None:
            if self.bench.sheet is not sheet:
                self.say("the formulations have changed since; compare again")
                return
            sentence = result.sentence
            self.bench.amend(verdict=sentence)
            self.below.show_verdict(result)
            self.show_verdict()
            self.say(sentence)
            self._update()

        self.worker.start("comparing", tasks.comparing(a, b, catalog, names), then)

    def witness_dialog(self) -> None:
        verdict = self.below.verdict
        if verdict is None or verdict.witness is None:
            return
        path, _ = QFileDialog.getSaveFileName(self, "Save the witness", "witness.sql", "SQL (*.sql)")
        if path:
            Path(path).write_text(verdict.witness.sql(), encoding="utf-8")

    def stop(self) -> None:
        self.worker.cancel()
        self.say("stopped")

    # --- view --------------------------------------------------------------------------------------------------------

    def focus_canvas(self) -> None:
        self.canvas.setFocus()

    def focus_text(self) -> None:
        self.editor.field.setFocus()

    def focus_rewrites(self) -> None:
        self.panel.list.setFocus()

    def show_findings(self) -> None:
        self._show_below("Findings", self.below.findings)

    def show_verdict(self) -> None:
        self._show_below("Verdict", self.below.verdict_text)

    def show_revisions(self) -> None:
        self._show_below("Revisions", self.below.revisions)

    def show_catalog(self) -> None:
        self._show_below("Catalog", self.below.catalog)

    def _show_below(self, name: str, widget: QWidget) -> None:
        if self.below_dock.isVisible() and widget.isVisible() and widget.hasFocus():
            self.below_dock.hide()
            self.canvas.setFocus()
            return
        self.below_dock.show()
        self.below.show_tab(name)
        widget.setFocus()

    def toggle_beside(self) -> None:
        self.bench.beside = not self.bench.beside
        self.bench.changed.emit()
        self.canvas.fit()

    def toggle_print(self) -> None:
        self.canvas.set_print_view(not self.canvas.print_view)
        self.set_dark(self.dark)

    def toggle_dark(self) -> None:
        self.set_dark(not self.dark)

    def fit(self) -> None:
        self.canvas.fit()

    def larger(self) -> None:
        self.canvas.zoom_by(1.2)

    def smaller(self) -> None:
        self.canvas.zoom_by(1 / 1.2)

    def actual_size(self) -> None:
        self.canvas.actual_size()

    def about(self) -> None:
        text = (
            "I-beam: the guaranteed range, true for every data set with the catalog's exact facts.\n"
            "Circle: the estimate. Triangle: a measured count.\n"
            "Evidence, from weak to strong: assumed, declared, profiled, sampled, measured.\n\n" + CAUTION
        )
        if QGuiApplication.platformName() == "offscreen":
            self.say(text)
        else:
            QMessageBox.information(self, "About these numbers", text)

    # --- window ------------------------------------------------------------------------------------------------------

    def dragEnterEvent(self, event: QDragEnterEvent) -> None:
        if event.mimeData().hasUrls():
            event.acceptProposedAction()

    def dropEvent(self, event: QDropEvent) -> None:
        for url in event.mimeData().urls():
            if url.isLocalFile():
                self.open_path(Path(url.toLocalFile()))

    def closeEvent(self, event: QCloseEvent) -> None:
        if not self._may_leave():
            event.ignore()
            return
        self.worker.cancel()
        self.worker.wait(2.0)
        event.accept()


def application() -> QApplication:
    """The one QApplication, in the shared style."""
    existing = QApplication.instance()
    made = existing if isinstance(existing, QApplication) else QApplication(sys.argv[:1])
    made.setApplicationName("Planimeter")
    made.setStyle("Fusion")
    made.setFont(font("sans", 13))
    return made


def run(paths: list[str]) -> int:
    """Opens the window with these files; without any it shows the demo."""
    made = application()
    window = Window()
    window.show()
    if paths:
        window.bench.open(edit.with_text(new_sheet("Query plan", window.bench.sheet.catalog), "A", ""), None)
        for path in paths:
            window.open_path(Path(path))
    else:
        QTimer.singleShot(0, window.open_demo)
    return made.exec()
