"""SVG, PDF and PNG files of a drawing; each carries the sheet inside, so that it opens again."""

from __future__ import annotations

import base64
import re
import zlib
from pathlib import Path

from PySide6.QtCore import QBuffer, QIODevice, QMarginsF, QRectF, QSaveFile, QSizeF
from PySide6.QtGui import QColor, QImage, QPageSize, QPainter, QPdfWriter

from app.export.painter import paint
from core.drawing.display import DisplayList
from core.drawing.palette import Palette
from core.drawing.svg import payload_of, to_svg

KINDS = (".svg", ".pdf", ".png")
_ATTACHMENT = "sheet.planimeter"
_CHUNK = "planimeter-sheet"
_MOST_SIDE, _MOST_PIXELS = 32_000, 200_000_000
_MOST_POINTS = 14_400.0
"""The longest side of a page that readers of PDF must accept (ISO 32000-1, annex C)."""


class ExportError(ValueError):
    """A drawing that cannot be written as asked."""


def export(display: DisplayList, palette: Palette, path: str | Path, payload: bytes = b"", dpi: int = 144) -> None:
    """Writes the drawing; the file's ending decides the kind. `payload` is the sheet file.

    A file that stands there already is replaced only when the new one is whole. ExportError where it cannot be written.
    """
    target = Path(path)
    kind = target.suffix.lower()
    if kind not in KINDS:
        raise ExportError(f"{target.name}: a drawing is written as {', '.join(KINDS)}")
    if kind == ".svg":
        data = to_svg(display, palette, 0.0, payload).encode()
    elif kind == ".pdf":
        data = _pdf(display, palette, payload)
    else:
        data = _png(display, palette, payload, dpi)
    file = QSaveFile(str(target))
    whole = file.open(QIODevice.OpenModeFlag.WriteOnly) and file.write(data) == len(data) and file.commit()
    if not whole:
        raise ExportError(f"{target} could not be written: {file.errorString()}")


def to_image(display: DisplayList, palette: Palette, dpi: int = 144) -> QImage:
    """The drawing as an image; 96 dpi is one pixel for a sheet unit. ExportError where it would be too large."""
    left, top, right, bottom = display.bounds()
    scale = dpi / 96
    wide, high = max(1, round((right - left) * scale)), max(1, round((bottom - top) * scale))
    if max(wide, high) > _MOST_SIDE or wide * high > _MOST_PIXELS:
        raise ExportError(
            f"an image of {wide} × {high} pixels is too large: write it as .svg or .pdf, or with fewer dpi"
        )
    image = QImage(wide, high, QImage.Format.Format_RGB32)
    if image.isNull():
        raise ExportError(f"there is no memory for an image of {wide} × {high} pixels")
    image.setDotsPerMeterX(round(dpi / 0.0254))
    image.setDotsPerMeterY(round(dpi / 0.0254))
    image.fill(QColor(palette["paper"]))
    painter = QPainter(image)
    painter.scale(scale, scale)
    painter.translate(-left, -top)
    paint(painter, display, palette)
    painter.end()
    return image


def _png(display: DisplayList, palette: Palette, payload: bytes, dpi: int) -> bytes:
    image = to_image(display, palette, dpi)
    if payload:
        image.setText(_CHUNK, base64.b64encode(zlib.compress(payload)).decode())
    if display.title:
        image.setText("Title", display.title)
    if display.description:
        image.setText("Description", display.description)
    buffer = QBuffer()
    buffer.open(QIODevice.OpenModeFlag.WriteOnly)
    if not image.save(buffer, "PNG"):  # type: ignore[call-overload]
        raise ExportError("the image could not be packed")
    return bytes(buffer.data().data())


def _pdf(display: DisplayList, palette: Palette, payload: bytes) -> bytes:
    left, top, right, bottom = display.bounds()
    wide, high = max(1.0, right - left), max(1.0, bottom - top)
    # One sheet unit is 1/96 inch, 0.75 point: the page is exactly the drawing, reduced where no reader could show it.
    reduced = min(1.0, _MOST_POINTS / (0.75 * max(wide, high)))
    buffer = QBuffer()
    buffer.open(QIODevice.OpenModeFlag.WriteOnly)
    writer = QPdfWriter(buffer)
    writer.setTitle(display.title)
    writer.setCreator("Planimeter")
    writer.setResolution(288)
    size = QSizeF(wide * 0.75 * reduced, high * 0.75 * reduced)
    writer.setPageSize(QPageSize(size, QPageSize.Unit.Point, "", QPageSize.SizeMatchPolicy.ExactMatch))
    writer.setPageMargins(QMarginsF(0, 0, 0, 0))
    if payload:
        writer.addFileAttachment(_ATTACHMENT, payload, "application/json")
    painter = QPainter(writer)
    painter.scale(3 * reduced, 3 * reduced)
    painter.fillRect(QRectF(0, 0, wide, high), QColor(palette["paper"]))
    painter.translate(-left, -top)
    paint(painter, display, palette)
    painter.end()
    return bytes(buffer.data().data())


def carried(path: str | Path) -> bytes | None:
    """The sheet file that an exported drawing carries; None where there is none. ExportError where it is damaged."""
    source = Path(path)
    kind = source.suffix.lower()
    data = source.read_bytes()
    try:
        if kind == ".svg":
            return payload_of(data.decode("utf-8"))
        if kind == ".png":
            text = QImage.fromData(data).text(_CHUNK)
            return zlib.decompress(base64.b64decode(text, validate=True)) if text else None
        return _attached(data) if kind == ".pdf" else None
    except (ValueError, zlib.error) as error:
        raise ExportError(f"{source.name}: the sheet in this drawing is damaged") from error


def _attached(data: bytes) -> bytes | None:
    """The attachment of a PDF that we wrote: the stream that its file specification points to."""
    reference = re.search(rb"/EF\s*<<\s*/F\s+(\d+)\s+0\s+R", data)
    if reference is None:
        return None
    head = re.search(rb"(?:^|[\r\n])" + reference[1] + rb"\s+0\s+obj(.*?)stream\r?\n", data, re.DOTALL)
    if head is None:
        return None
    raw = data[head.end() : data.find(b"endstream", head.end())]
    return zlib.decompressobj().decompress(raw) if b"FlateDecode" in head[1] else raw.rstrip(b"\r\n")
