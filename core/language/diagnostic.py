"""What is wrong with a text: one object, shown in the terminal, in the editor and as JSON."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from difflib import get_close_matches

from core.algebra.formulation import Span


@dataclass(frozen=True, slots=True)
class Diagnostic:
    """`code` is stable and made of words; `message` is a sentence in lower case without a full stop.

    `notes` tell causes, `help` the cure. `severity` is "error" or "note".
    """

    code: str
    message: str
    span: Span | None = None
    severity: str = "error"
    notes: tuple[str, ...] = ()
    help: str = ""


class ReadError(ValueError):
    """A text that cannot be read, with everything found wrong in it."""

    def __init__(self, diagnostics: Iterable[Diagnostic], text: str = "", name: str = "") -> None:
        self.diagnostics = tuple(diagnostics)
        self.text = text
        self.name = name
        super().__init__("\n".join(render(diagnostic, text, name) for diagnostic in self.diagnostics))


def position(text: str, offset: int) -> tuple[int, int]:
    """Line and column of an offset, both from 1."""
    before = text[:offset]
    return before.count("\n") + 1, offset - (before.rfind("\n") + 1) + 1


def render(diagnostic: Diagnostic, text: str, name: str = "") -> str:
    """The diagnostic for a terminal: where, the line, a caret under the spot, notes and help."""
    lines = []
    where = name
    if diagnostic.span is not None:
        row, column = position(text, diagnostic.span.start)
        where = f"{name}:{row}:{column}" if name else f"line {row}, column {column}"
    lines.append(f"{where}: {diagnostic.message}" if where else diagnostic.message)
    if diagnostic.span is not None and text:
        source = text.split("\n")[row - 1]
        length = max(1, min(diagnostic.span.end - diagnostic.span.start, len(source) - column + 1))
        lines.append(f"  {source.expandtabs(1)}")
        lines.append("  " + " " * (column - 1) + "^" * length)
    lines.extend(f"  note: {note}" for note in diagnostic.notes)
    if diagnostic.help:
        lines.append(f"  help: {diagnostic.help}")
    return "\n".join(lines)


def nearest(name: str, known: Iterable[str]) -> str:
    """The known name that was probably meant, or an empty string."""
    by_folded = {candidate.lower(): candidate for candidate in known}
    found = get_close_matches(name.lower(), by_folded, n=1, cutoff=0.6)
    return by_folded[found[0]] if found else ""
