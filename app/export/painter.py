"""Paints a display list with QPainter: the window, PDF and PNG."""

from __future__ import annotations

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QPainter, QPen, QPolygonF

from app.fonts import font
from core.drawing.display import Circle, DisplayList, Line, Shape, Text, box_of
from core.drawing.metrics import runs, width
from core.drawing.palette import Palette

# Fonts are laid out at whole pixel sizes and scaled: a size of 11.5 is drawn at 23 and halved.
_SCALE = 2.0
_LEAST_TEXT = 5.5
_NEAR = 0.7


def paint(painter: QPainter, display: DisplayList, palette: Palette, clip: QRectF | None = None, zoom: float = 1.0) -> None:
    """Paints what lies within `clip` (sheet units). At a small `zoom` text that could not be read is left out."""
    painter.setRenderHint(QPainter.RenderHint.Antialiasing)
    painter.setRenderHint(QPainter.RenderHint.TextAntialiasing)
    colours = {role: QColor(value) for role, value in palette.items()}
    for item in display.items:
        if clip is not None:
            left, top, right, bottom = box_of(item)
            if right < clip.left() - 2 or left > clip.right() + 2 or bottom < clip.top() - 2 or top > clip.bottom() + 2:
                continue
        match item:
            case Line(detail=True) if zoom < _NEAR:
                pass
            case Line():
                pen = QPen(colours[item.role], item.weight)
                pen.setCapStyle(Qt.PenCapStyle.FlatCap)
                pen.setJoinStyle(Qt.PenJoinStyle.MiterJoin)
                if item.dash:
                    pen.setDashPattern([d / item.weight for d in item.dash])
                painter.setPen(pen)
                painter.setBrush(Qt.BrushStyle.NoBrush)
                painter.drawPolyline(QPolygonF([QPointF(x, y) for x, y in item.points]))
            case Shape():
                painter.setPen(QPen(colours[item.stroke], item.weight) if item.stroke else Qt.PenStyle.NoPen)
                painter.setBrush(QBrush(colours[item.fill]))
                painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in item.points]))
            case Circle():
                painter.setPen(QPen(colours[item.stroke], item.weight))
                painter.setBrush(QBrush(colours[item.fill]) if item.fill else Qt.BrushStyle.NoBrush)
                painter.drawEllipse(QPointF(item.x, item.y), item.radius, item.radius)
            case Text():
                if item.size * zoom >= (8.0 if item.detail else _LEAST_TEXT):
                    _text(painter, item, colours[item.role])


def _text(painter: QPainter, item: Text, colour: QColor) -> None:
    painter.setPen(QPen(colour))
    x = item.left
    painter.save()
    painter.scale(1 / _SCALE, 1 / _SCALE)
    for face, part in runs(item.text, item.face):
        painter.setFont(font(face, item.size * _SCALE))
        painter.drawText(QPointF(x * _SCALE, item.y * _SCALE), part)
        x += width(part, face, item.size)
    painter.restore()
