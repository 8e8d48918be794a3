"""SVG, PDF and PNG files of a drawing; each carries the sheet inside, so that it opens again."""

from __future__ import annotations

import base64
import re
import zlib
from pathlib import Path

from PySide6.QtCore import QMarginsF, QRectF, QSizeF
from PySide6.QtGui import QColor, QImage, QPageSize, QPainter, QPdfWriter

from app.export.painter import paint
from core.drawing.display import DisplayList
from core.drawing.palette import Palette
from core.drawing.svg import payload_of, to_svg

KINDS = (".svg", ".pdf", ".png")
_ATTACHMENT = "sheet.planimeter"
_CHUNK = "planimeter-sheet"


class ExportError(ValueError):
    """A drawing that cannot be written as asked."""


def export(display: DisplayList, palette: Palette, path: str | Path, payload: bytes = b"", dpi: int = 144) -> None:
    """Writes the drawing; the file's ending decides the kind. `payload` is the sheet file."""
    target = Path(path)
    kind = target.suffix.lower()
    if kind not in KINDS:
        raise ExportError(f"{target.name}: a drawing is written as {', '.join(KINDS)}")
    if kind == ".svg":
        target.write_text(to_svg(display, palette, 0.0, payload), encoding="utf-8")
    elif kind == ".pdf":
        _pdf(display, palette, target, payload)
    else:
        image = to_image(display, palette, dpi)
        if payload:
            image.setText(_CHUNK, base64.b64encode(zlib.compress(payload)).decode())
        if display.title:
            image.setText("Title", display.title)
        if not image.save(str(target)):
            raise ExportError(f"{target} could not be written")


def to_image(display: DisplayList, palette: Palette, dpi: int = 144) -> QImage:
    """The drawing as an image; 96 dpi is one pixel for a sheet unit."""
    left, top, right, bottom = display.bounds()
    scale = dpi / 96
    image = QImage(
        max(1, round((right - left) * scale)), max(1, round((bottom - top) * scale)), QImage.Format.Format_RGB32
    )
    image.setDotsPerMeterX(round(dpi / 0.0254))
    image.setDotsPerMeterY(round(dpi / 0.0254))
    image.fill(QColor(palette["paper"]))
    painter = QPainter(image)
    painter.scale(scale, scale)
    painter.translate(-left, -top)
    paint(painter, display, palette)
    painter.end()
    return image


def _pdf(display: DisplayList, palette: Palette, target: Path, payload: bytes) -> None:
    left, top, right, bottom = display.bounds()
    wide, high = right - left, bottom - top
    writer = QPdfWriter(str(target))
    writer.setTitle(display.title)
    writer.setCreator("Planimeter")
    writer.setResolution(288)
    # One sheet unit is 1/96 inch, 0.75 point: the page is exactly the drawing.
    writer.setPageSize(
        QPageSize(QSizeF(wide * 0.75, high * 0.75), QPageSize.Unit.Point, "", QPageSize.SizeMatchPolicy.ExactMatch)
    )
    writer.setPageMargins(QMarginsF(0, 0, 0, 0))
    if payload:
        writer.addFileAttachment(_ATTACHMENT, payload, "application/json")
    painter = QPainter(writer)
    if not painter.isActive():
        raise ExportError(f"{target} could not be written")
    painter.scale(3, 3)
    painter.fillRect(QRectF(0, 0, wide, high), QColor(palette["paper"]))
    painter.translate(-left, -top)
    paint(painter, display, palette)
    painter.end()


def carried(path: str | Path) -> bytes | None:
    """The sheet file that an exported drawing carries; None where there is none."""
    source = Path(path)
    kind = source.suffix.lower()
    if kind == ".svg":
        return payload_of(source.read_text(encoding="utf-8"))
    if kind == ".png":
        text = QImage(str(source)).text(_CHUNK)
        return zlib.decompress(base64.b64decode(text)) if text else None
    if kind == ".pdf":
        return _attached(source.read_bytes())
    return None


def _attached(data: bytes) -> bytes | None:
    """The attachment of a PDF that we wrote: the stream that its file specification points to."""
    reference = re.search(rb"/EF\s*<<\s*/F\s+(\d+)\s+0\s+R", data)
    if reference is None:
        return None
    head = re.search(rb"(?:^|[\r\n])" + reference[1] + rb"\s+0\s+obj(.*?)stream\r?\n", data, re.DOTALL)
    if head is None:
        return None
    raw = data[head.end() : data.find(b"endstream", head.end())]
    try:
        return zlib.decompressobj().decompress(raw) if b"FlateDecode" in head[1] else raw.rstrip(b"\r\n")
    except zlib.error:
        return None
