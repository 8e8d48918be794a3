"""The display list as SVG: real text with the fonts inside, a title and a description for screen readers."""

from __future__ import annotations

import base64
import binascii
import zlib
from collections.abc import Iterable
from functools import cache
from xml.sax.saxutils import escape, quoteattr

from core.drawing.display import Circle, DisplayList, Item, Line, Shape, Text
from core.drawing.metrics import FONTS, runs, width
from core.drawing.palette import Palette
from core.drawing.woff import packed

_CARRIED = '<metadata id="planimeter-sheet">'
_FAMILIES = {
    "serif": ("Planimeter Serif", "normal", "normal"),
    "serif-bold": ("Planimeter Serif", "bold", "normal"),
    "serif-italic": ("Planimeter Serif", "normal", "italic"),
    "sans": ("Planimeter Sans", "normal", "normal"),
    "sans-bold": ("Planimeter Sans", "bold", "normal"),
    "mono": ("Planimeter Mono", "normal", "normal"),
    "math": ("Planimeter Signs", "normal", "normal"),
}


def to_svg(display: DisplayList, palette: Palette, margin: float = 0.0, payload: bytes = b"") -> str:
    """The drawing as one SVG document. `payload` (the sheet file) travels in its metadata."""
    left, top, right, bottom = display.bounds()
    left, top, right, bottom = left - margin, top - margin, right + margin, bottom + margin
    box = f"{_n(left)} {_n(top)} {_n(right - left)} {_n(bottom - top)}"
    used = sorted({face for text in display.texts() for face, _ in runs(text.text, text.face)})
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="{box}" width="{_n(right - left)}" height="{_n(bottom - top)}" '
        'role="img" aria-labelledby="title description">',
        f'<title id="title">{escape(display.title or "Query plan")}</title>',
        f'<desc id="description">{escape(display.description or display.title or "Query plan")}</desc>',
    ]
    if payload:
        parts.append(f"{_CARRIED}{base64.b64encode(zlib.compress(payload)).decode()}</metadata>")
    parts.append(f"<style>{''.join(_font(face) for face in used)}text{{white-space:pre}}</style>")
    parts.append(
        f'<rect x="{_n(left)}" y="{_n(top)}" width="{_n(right - left)}" height="{_n(bottom - top)}" fill="{palette["paper"]}"/>'
    )
    parts.extend(_items(display.items, palette))
    parts.append("</svg>")
    return "\n".join(parts) + "\n"


def _n(value: float) -> str:
    return f"{value:.2f}".rstrip("0").rstrip(".")


@cache
def _font(face: str) -> str:
    family, weight, style = _FAMILIES[face]
    data = base64.b64encode(packed((FONTS / f"{face}.ttf").read_bytes())).decode()
    return (
        f"@font-face{{font-family:'{family}';font-weight:{weight};font-style:{style};"
        f"src:url(data:font/woff;base64,{data}) format('woff')}}"
    )


def _items(items: Iterable[Item], palette: Palette) -> Iterable[str]:
    for item in items:
        match item:
            case Line():
                points = " ".join(f"{_n(x)},{_n(y)}" for x, y in item.points)
                dash = f' stroke-dasharray="{" ".join(_n(d) for d in item.dash)}"' if item.dash else ""
                yield (
                    f'<polyline points="{points}" fill="none" stroke="{palette[item.role]}" '
                    f'stroke-width="{_n(item.weight)}"{dash}/>'
                )
            case Shape():
                points = " ".join(f"{_n(x)},{_n(y)}" for x, y in item.points)
                stroke = f' stroke="{palette[item.stroke]}" stroke-width="{_n(item.weight)}"' if item.stroke else ""
                yield f'<polygon points="{points}" fill="{palette[item.fill]}"{stroke}/>'
            case Circle():
                fill = palette[item.fill] if item.fill else "none"
                yield (
                    f'<circle cx="{_n(item.x)}" cy="{_n(item.y)}" r="{_n(item.radius)}" fill="{fill}" '
                    f'stroke="{palette[item.stroke]}" stroke-width="{_n(item.weight)}"/>'
                )
            case Text():
                yield from _text(item, palette)


def _text(item: Text, palette: Palette) -> Iterable[str]:
    """One element a run of one face, each at its own computed place, so that widths are the same everywhere."""
    x = item.left
    for face, part in runs(item.text, item.face):
        family, weight, style = _FAMILIES[face]
        own = width(part, face, item.size)
        yield (
            f'<text x="{_n(x)}" y="{_n(item.y)}" font-family={quoteattr(family)} font-size="{_n(item.size)}" '
            f'font-weight="{weight}" font-style="{style}" fill="{palette[item.role]}" textLength="{_n(own)}" '
            f'lengthAdjust="spacingAndGlyphs">{escape(part)}</text>'
        )
        x += own


def payload_of(svg: str) -> bytes | None:
    """The sheet file that an exported SVG carries, or None. ValueError where what it carries is damaged."""
    start = svg.find(_CARRIED)
    if start < 0:
        return None
    try:
        text = svg[start + len(_CARRIED) : svg.index("</metadata>", start)]
        return zlib.decompress(base64.b64decode(text, validate=True))
    except (binascii.Error, zlib.error, ValueError) as error:
        raise ValueError("the sheet in this drawing is damaged") from error
