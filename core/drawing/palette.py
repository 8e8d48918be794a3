"""Palettes: what the roles of colour are on paper, on the blueprint and in print."""

from __future__ import annotations

from core.drawing.display import ACCENT, FAINT, INK, PAPER, SOFT, WASH

Palette = dict[str, str]

LIGHT: Palette = {
    INK: "#1b2733",
    SOFT: "#5e6a76",
    FAINT: "#c9ccc6",
    PAPER: "#fcfbf6",
    ACCENT: "#b3410e",
    WASH: "#f4eadb",
    "panel": "#f3f1e9",
    "field": "#fffef9",
    "word": "#24507a",
    "text": "#45661f",
    "number": "#7a3d86",
}
DARK: Palette = {
    INK: "#eef3f7",
    SOFT: "#a9bccd",
    FAINT: "#335573",
    PAPER: "#10304e",
    ACCENT: "#f2bf4f",
    WASH: "#1c4368",
    "panel": "#0d2842",
    "field": "#0b2239",
    "word": "#8cc4f5",
    "text": "#b9d98a",
    "number": "#dcb3ea",
}
PRINT: Palette = {
    **LIGHT,
    INK: "#000000",
    SOFT: "#4a4a4a",
    FAINT: "#bdbdbd",
    PAPER: "#ffffff",
    ACCENT: "#b3410e",
    WASH: "#f1f1f1",
}
PALETTES = {"light": LIGHT, "dark": DARK, "print": PRINT}


def luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour (WCAG 2.2)."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    red, green, blue = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels)
    return float(0.2126 * red + 0.7152 * green + 0.0722 * blue)


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours (WCAG 2.2): 1 to 21."""
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)
