"""The drawing on screen: zoom at the pointer, pan, select by mouse and keyboard, told to screen readers."""

from __future__ import annotations

from PySide6.QtCore import QPointF, QRectF, Qt, Signal
from PySide6.QtGui import QColor, QKeyEvent, QMouseEvent, QPainter, QPaintEvent, QWheelEvent
from PySide6.QtWidgets import QSizePolicy, QWidget

from app.export.painter import paint
from app.model import Drawn, Workbench
from core.algebra.graph import inputs
from core.algebra.notation import line, name_of
from core.algebra.operators import Operator
from core.drawing.display import DisplayList
from core.drawing.palette import LIGHT, Palette
from core.size.numbers import rows_text

_LEAST, _MOST = 0.05, 6.0


class Canvas(QWidget):
    """Shows the working view, or the print view. Selection goes through the workbench."""

    note_wanted = Signal()

    def __init__(self, bench: Workbench) -> None:
        super().__init__()
        self.bench = bench
        self.palette_roles: Palette = LIGHT
        self.drawn = Drawn(DisplayList())
        self.print_view = False
        self.zoom = 1.0
        self.origin = QPointF(0, 0)
        self._drag: QPointF | None = None
        self._space = False
        self._fitted = False
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setMouseTracking(True)
        self.setMinimumSize(320, 240)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setAccessibleName("Drawing of the query")
        bench.changed.connect(self.refresh)
        bench.selected.connect(self.refresh)

    # --- content -----------------------------------------------------------------------------------------------------

    def refresh(self) -> None:
        """Draws anew what the workbench shows; the first drawing is fitted to the window."""
        self.drawn = self.bench.draw()
        if self.print_view:
            self.drawn = Drawn(self.bench.page())
        if not self._fitted and self.drawn.display.items and self.width() > 320:
            self._fitted = True
            self.fit()
        self._describe()
        self.update()

    def set_print_view(self, wanted: bool) -> None:
        self.print_view = wanted
        self.refresh()
        self.fit()

    def set_palette(self, palette: Palette) -> None:
        self.palette_roles = palette
        self.update()

    def _describe(self) -> None:
        """What a screen reader says of the selection."""
        operator = self.bench.selection
        draft = self.bench.draft
        if operator is None or draft is None or draft.formulation is None:
            count = len(self.drawn.operators)
            self.setAccessibleDescription(f"{count} operators. The arrow keys walk the tree.")
            return
        size = self.bench.sizes(draft.formulation).get(operator)
        rows = "" if size is None else f", {rows_text(size.best)} rows {size.best_evidence.word}"
        self.setAccessibleDescription(f"{name_of(operator)}: {line(operator)}{rows}")

    # --- view --------------------------------------------------------------------------------------------------------

    def fit(self) -> None:
        left, top, right, bottom = self.drawn.display.bounds()
        wide, high = max(1.0, right - left), max(1.0, bottom - top)
        margin = 28
        scale = min((self.width() - 2 * margin) / wide, (self.height() - 2 * margin) / high)
        self.zoom = max(_LEAST, min(1.25, scale))
        self.origin = QPointF(
            left - (self.width() / self.zoom - wide) / 2,
            top - max(margin / self.zoom, (self.height() / self.zoom - high) / 2),
        )
        self.update()

    def zoom_by(self, factor: float, at: QPointF | None = None) -> None:
        """Zooms so that what is under the pointer stays there."""
        place = at if at is not None else QPointF(self.width() / 2, self.height() / 2)
        before = self.to_sheet(place)
        self.zoom = max(_LEAST, min(_MOST, self.zoom * factor))
        after = self.to_sheet(place)
        self.origin += before - after
        self.update()

    def actual_size(self) -> None:
        self.zoom_by(1.0 / self.zoom)

    def to_sheet(self, point: QPointF) -> QPointF:
        return QPointF(point.x() / self.zoom + self.origin.x(), point.y() / self.zoom + self.origin.y())

    def to_window(self, x: float, y: float) -> QPointF:
        return QPointF((x - self.origin.x()) * self.zoom, (y - self.origin.y()) * self.zoom)

    def bring_into_view(self, operator: Operator) -> None:
        owner = self.drawn.owners.get(operator)
        if owner is None or owner not in self.drawn.display.boxes:
            return
        left, top, right, bottom = self.drawn.display.boxes[owner]
        a, b = self.to_window(left, top), self.to_window(right, bottom)
        dx = min(0.0, a.x() - 20) + max(0.0, b.x() + 20 - self.width())
        dy = min(0.0, a.y() - 20) + max(0.0, b.y() + 20 - self.height())
        if dx or dy:
            self.origin += QPointF(dx / self.zoom, dy / self.zoom)
            self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        painter = QPainter(self)
        painter.fillRect(self.rect(), QColor(self.palette_roles["paper"]))
        painter.scale(self.zoom, self.zoom)
        painter.translate(-self.origin)
        area = QRectF(self.to_sheet(QPointF(0, 0)), self.to_sheet(QPointF(self.width(), self.height())))
        # The print view is a page seen from further away or nearer: nothing is left out of it.
        paint(painter, self.drawn.display, self.palette_roles, area, 1.0 if self.print_view else self.zoom)
        painter.end()

    def resizeEvent(self, event: object) -> None:
        if not self._fitted and self.drawn.display.items:
            self._fitted = True
            self.fit()

    # --- mouse -------------------------------------------------------------------------------------------------------

    def owner_at(self, point: QPointF) -> str:
        place = self.to_sheet(point)
        for owner, (left, top, right, bottom) in reversed(self.drawn.display.boxes.items()):
            if left <= place.x() <= right and top <= place.y() <= bottom:
                return owner
        return ""

    def mousePressEvent(self, event: QMouseEvent) -> None:
        self.setFocus()
        pans = event.button() == Qt.MouseButton.MiddleButton or (
            event.button() == Qt.MouseButton.LeftButton and self._space
        )
        if pans:
            self._drag = event.position()
            self.setCursor(Qt.CursorShape.ClosedHandCursor)
            return
        if event.button() != Qt.MouseButton.LeftButton:
            return
        owner = self.owner_at(event.position())
        if owner.startswith("callout"):
            number = int(owner.removeprefix("callout"))
            for n, letter, operator, _ in self.bench.callouts():
                if n == number:
                    self.bench.select(operator, letter)
        elif owner in self.drawn.operators:
            letter, operator = self.drawn.operators[owner]
            self.bench.select(operator, letter)
        else:
            self._drag = event.position()
            self.bench.select(None)

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        if self._drag is not None:
            self.origin -= (event.position() - self._drag) / self.zoom
            self._drag = event.position()
            self.update()
            return
        hit = self.owner_at(event.position()) in self.drawn.operators
        self.setCursor(Qt.CursorShape.PointingHandCursor if hit else Qt.CursorShape.ArrowCursor)

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        self._drag = None
        self.setCursor(Qt.CursorShape.ArrowCursor)

    def mouseDoubleClickEvent(self, event: QMouseEvent) -> None:
        if self.owner_at(event.position()) in self.drawn.operators:
            self.note_wanted.emit()

    def wheelEvent(self, event: QWheelEvent) -> None:
        if event.modifiers() & Qt.KeyboardModifier.ShiftModifier:
            self.origin -= QPointF(event.angleDelta().y() / self.zoom / 2, 0)
            self.update()
        else:
            self.zoom_by(1.0015 ** event.angleDelta().y(), event.position())

    # --- keyboard ----------------------------------------------------------------------------------------------------

    def keyPressEvent(self, event: QKeyEvent) -> None:
        key = event.key()
        if key == Qt.Key.Key_Space and not event.isAutoRepeat():
            self._space = True
            self.setCursor(Qt.CursorShape.OpenHandCursor)
        elif key in _STEPS:
            self.walk(key)
        elif key == Qt.Key.Key_Escape:
            self.bench.select(None)
        else:
            super().keyPressEvent(event)

    def keyReleaseEvent(self, event: QKeyEvent) -> None:
        if event.key() == Qt.Key.Key_Space:
            self._space = False
            self.setCursor(Qt.CursorShape.ArrowCursor)
        super().keyReleaseEvent(event)

    def walk(self, key: int) -> None:
        """Down to the first input, up to who reads it, left and right among the inputs of one operator."""
        draft = self.bench.draft
        if draft is None or draft.formulation is None:
            return
        formulation = draft.formulation
        current = self.bench.selection
        if current is None:
            self.bench.select(formulation.root)
            self.bring_into_view(formulation.root)
            return
        readers = [op for op in formulation.operators() if current in inputs(op)]
        target: Operator | None = None
        if key == Qt.Key.Key_Down and inputs(current):
            target = inputs(current)[0]
        elif key == Qt.Key.Key_Up and readers:
            target = readers[0]
        elif key in (Qt.Key.Key_Left, Qt.Key.Key_Right) and readers:
            row = inputs(readers[0])
            place = row.index(current) + (1 if key == Qt.Key.Key_Right else -1)
            target = row[place] if 0 <= place < len(row) else None
        if target is not None:
            self.bench.select(target)
            self.bring_into_view(target)


_STEPS = (Qt.Key.Key_Up, Qt.Key.Key_Down, Qt.Key.Key_Left, Qt.Key.Key_Right)
