"""Paints a display list with QPainter: the window, PDF and PNG."""

from __future__ import annotations

from functools import lru_cache

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QPainter, QPen, QPolygonF

from app.fonts import font
from core.drawing.display import Circle, DisplayList, Line, Shape, Text
from core.drawing.metrics import runs, width
from core.drawing.palette import Palette

# Fonts are laid out at whole pixel sizes and scaled: a size of 11.5 is drawn at 23 and halved.
_SCALE = 2.0
_LEAST_TEXT = 5.5
_LEAST_DETAIL = 8.0
_NEAR = 0.7


def paint(
    painter: QPainter, display: DisplayList, palette: Palette, clip: QRectF | None = None, zoom: float = 1.0
) -> None:
    """Paints what lies within `clip` (sheet units). At a small `zoom` text that could not be read is left out."""
    painter.setRenderHint(QPainter.RenderHint.Antialiasing)
    painter.setRenderHint(QPainter.RenderHint.TextAntialiasing)
    far = zoom < _NEAR
    nothing = float("inf")
    first_x, first_y, last_x, last_y = -nothing, -nothing, nothing, nothing
    if clip is not None:
        first_x, first_y, last_x, last_y = clip.left() - 2, clip.top() - 2, clip.right() + 2, clip.bottom() + 2
    for item, (left, top, right, bottom) in display.boxed():
        if right < first_x or left > last_x or bottom < first_y or top > last_y:
            continue
        if isinstance(item, Text):
            if item.size * zoom >= (_LEAST_DETAIL if item.detail else _LEAST_TEXT):
                _text(painter, item, palette[item.role])
        elif isinstance(item, Line):
            if not (far and item.detail):
                painter.setPen(_pen(palette[item.role], item.weight, item.dash))
                painter.drawPolyline(QPolygonF([QPointF(x, y) for x, y in item.points]))
        elif isinstance(item, Shape):
            painter.setPen(_pen(palette[item.stroke], item.weight) if item.stroke else Qt.PenStyle.NoPen)
            painter.setBrush(_brush(palette[item.fill]))
            painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in item.points]))
        elif isinstance(item, Circle):
            painter.setPen(_pen(palette[item.stroke], item.weight))
            painter.setBrush(_brush(palette[item.fill]) if item.fill else Qt.BrushStyle.NoBrush)
            painter.drawEllipse(QPointF(item.x, item.y), item.radius, item.radius)


@lru_cache(maxsize=512)
def _pen(colour: str, weight: float, dash: tuple[float, ...] = ()) -> QPen:
    pen = QPen(QColor(colour), weight)
    pen.setCapStyle(Qt.PenCapStyle.FlatCap)
    pen.setJoinStyle(Qt.PenJoinStyle.MiterJoin)
    if dash:
        pen.setDashPattern([d / weight for d in dash])
    return pen


@lru_cache(maxsize=128)
def _brush(colour: str) -> QBrush:
    return QBrush(QColor(colour))


def _text(painter: QPainter, item: Text, colour: str) -> None:
    """One call a run of one face, each at its computed place: widths are the core's, whatever Qt would make of them."""
    painter.setPen(_pen(colour, 1.0))
    painter.scale(1 / _SCALE, 1 / _SCALE)
    x, y, scale = item.left * _SCALE, item.y * _SCALE, item.size * _SCALE
    for face, part in runs(item.text, item.face):
        painter.setFont(font(face, scale))
        painter.drawText(QPointF(x, y), part)
        x += width(part, face, scale)
    painter.scale(_SCALE, _SCALE)
