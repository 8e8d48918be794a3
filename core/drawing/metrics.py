"""Widths of texts, from the advance widths that ship with the fonts: the same on every machine, without a screen."""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import cache, lru_cache
from pathlib import Path

FONTS = Path(__file__).resolve().parents[2] / "assets" / "fonts"
FACES = ("serif", "serif-bold", "serif-italic", "sans", "sans-bold", "mono", "math")
_FALLBACKS = ("math", "sans", "serif")


@dataclass(frozen=True, slots=True)
class Face:
    """One font: units per em, ascent and descent, and the advance of each character."""

    em: int
    ascent: int
    descent: int
    widths: dict[str, int]


@cache
def faces() -> dict[str, Face]:
    found = json.loads((FONTS / "advances.json").read_text(encoding="utf-8"))
    return {name: Face(f["em"], f["ascent"], f["descent"], f["widths"]) for name, f in found.items()}


@lru_cache(maxsize=1 << 15)
def runs(text: str, face: str) -> tuple[tuple[str, str], ...]:
    """The text cut into (face, text) so that each character stands in a face that has it."""
    known = faces()
    found: list[tuple[str, str]] = []
    for character in text:
        chosen = face
        if character not in known[face].widths:
            chosen = next((other for other in _FALLBACKS if character in known[other].widths), face)
        if found and found[-1][0] == chosen:
            found[-1] = (chosen, found[-1][1] + character)
        else:
            found.append((chosen, character))
    return tuple(found)


def width(text: str, face: str, size: float) -> float:
    """The width of a text in sheet units; a character that no face has counts as wide as an em dash."""
    return _ems(text, face) * size


@lru_cache(maxsize=1 << 15)
def _ems(text: str, face: str) -> float:
    known = faces()
    total = 0.0
    for chosen, part in runs(text, face):
        font = known[chosen]
        total += sum(font.widths.get(character, font.em) for character in part) / font.em
    return total


def cut(text: str, face: str, size: float, most: float) -> str:
    """The text, cut with an ellipsis where it is wider than `most`."""
    if width(text, face, size) <= most:
        return text
    low, high = 0, len(text)
    while low < high:
        middle = (low + high + 1) // 2
        if width(text[:middle].rstrip() + "…", face, size) <= most:
            low = middle
        else:
            high = middle - 1
    return text[:low].rstrip(" ,") + "…"


def wrapped(text: str, face: str, size: float, most: float) -> list[str]:
    """The text in lines no wider than `most`; a single word that is wider is cut."""
    lines: list[str] = []
    for paragraph in text.split("\n"):
        current = ""
        for word in paragraph.split():
            candidate = f"{current} {word}".strip()
            if width(candidate, face, size) <= most:
                current = candidate
                continue
            if current:
                lines.append(current)
            current = word if width(word, face, size) <= most else cut(word, face, size, most)
        lines.append(current)
    return lines
