"""The shipped fonts in Qt: no hinting, no kerning, so that widths are those the core computed."""

from __future__ import annotations

from functools import cache

from PySide6.QtGui import QFont, QFontDatabase

from core.drawing.metrics import FACES, FONTS


@cache
def families() -> dict[str, str]:
    """Qt's family name of each face. A QGuiApplication must exist."""
    found = {}
    for face in FACES:
        number = QFontDatabase.addApplicationFont(str(FONTS / f"{face}.ttf"))
        names = QFontDatabase.applicationFontFamilies(number)
        found[face] = names[0] if names else ""
    return found


@cache
def font(face: str, size: float) -> QFont:
    """The font of a face at a size in pixels."""
    made = QFont(families()[face])
    made.setPixelSize(max(1, round(size)))
    if abs(size - round(size)) > 0.01:
        made.setPointSizeF(size)
        made.setPixelSize(max(1, round(size)))
    made.setBold(face.endswith("bold"))
    made.setItalic(face.endswith("italic"))
    made.setHintingPreference(QFont.HintingPreference.PreferNoHinting)
    made.setKerning(False)
    return made
