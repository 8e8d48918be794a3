"""The sheet: one or two formulations with headings and dimension lines; in print with frame, tables and title block."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from core.drawing.display import ACCENT, INK, PAPER, SOFT, Box, Circle, DisplayList, Line, Shape, Text
from core.drawing.metrics import cut, width, wrapped

CAUTION = (
    "An estimate is not a measurement. A rewrite that is equal here can meet another optimiser's quirks there: "
    "try it on the target engine before it runs in production."
)
_GAP = 130.0
_HEAD = 64.0
_DIMENSION = 12.5


@dataclass(frozen=True, slots=True)
class Dimension:
    """A dimension line between two operators that correspond: what changed between them."""

    left: str
    right: str
    text: str


@dataclass(slots=True)
class Column:
    """One formulation on the sheet: its letter, what it is, its drawing."""

    letter: str
    subtitle: str
    drawing: DisplayList


@dataclass(slots=True)
class Page:
    """Everything that stands on a printed sheet beside the drawings."""

    title: str = "Query plan"
    callouts: Sequence[tuple[int, str]] = ()
    revisions: Sequence[tuple[str, str, str]] = ()
    revisions_of: str = "A"
    verdict: str = ""
    figures: Sequence[tuple[str, str]] = ()
    facts: Sequence[tuple[str, str]] = ()
    dimensions: Sequence[Dimension] = field(default_factory=tuple)


def draw_columns(columns: Sequence[Column], dimensions: Sequence[Dimension] = ()) -> DisplayList:
    """The working view: formulations side by side under their letters, nothing else."""
    out = DisplayList()
    x = 0.0
    for column in columns:
        left, top, right, _ = column.drawing.bounds()
        out.add(Text(x, 26, column.letter, "serif-bold", 30, INK))
        start = x + width(column.letter, "serif-bold", 30) + 10
        out.add(Text(start, 26, column.subtitle, "serif-italic", 15, SOFT))
        heading = start + width(column.subtitle, "serif-italic", 15) - x
        out.extend(column.drawing, x - left, _HEAD - top)
        x += max(right - left, heading) + _GAP
    for dimension in dimensions:
        _dimension(out, dimension)
    return out


def _dimension(out: DisplayList, dimension: Dimension) -> None:
    """A line with two arrowheads between matched operators, under its text. It runs where nothing else is drawn."""
    if dimension.left not in out.boxes or dimension.right not in out.boxes:
        return
    a, b = out.boxes[dimension.left], out.boxes[dimension.right]
    room = width(dimension.text, "sans-bold", _DIMENSION) + 20
    obstacles = _obstacles(out, {dimension.left, dimension.right}, a[2], b[0])
    best = (0.0, 0.0, 0.0)
    for y in _heights(a, b):
        # Where something stands in the way, the line keeps to the widest gap.
        blocked = sorted(
            (left - 14, right + 14) for left, top, right, bottom in obstacles if top < y + 9 and bottom > y - 20
        )
        start = a[2] + 34
        for left, right in [*blocked, (b[0] - 14, b[0])]:
            if left - start > best[1] - best[0] + 1:
                best = (start, left, y)
            start = max(start, right)
        if best[1] - best[0] >= b[0] - a[2] - 50:
            break
    start, end, y = best
    if end - start < room:
        return
    for x in (start, end):
        out.add(Line(((x, y - 7), (x, y + 7)), ACCENT, 1.0))
    out.add(Line(((start, y), (end, y)), ACCENT, 1.0))
    for x, way in ((start, 1), (end, -1)):
        out.add(Line(((x + 7 * way, y - 3), (x, y), (x + 7 * way, y + 3)), ACCENT, 1.0))
    out.add(Text((start + end) / 2, y - 7, dimension.text, "sans-bold", _DIMENSION, ACCENT, "middle"))


def _heights(a: Box, b: Box) -> list[float]:
    """Heights to try: about the middle of either plate first, then further from it."""
    found = [(box[1] + box[3]) / 2 + shift for box in (a, b) for shift in (18.0, 0.0, -18.0)]
    return found + [(box[1] + box[3]) / 2 + shift for box in (a, b) for shift in (30.0, -30.0, 9.0, -9.0)]


def _obstacles(out: DisplayList, owners: set[str], left: float, right: float) -> list[Box]:
    """What is drawn between two heights' ends: plates other than the two, their edges, texts, balloons."""
    found = [box for owner, box in out.boxes.items() if owner not in owners]
    for item, box in out.boxed():
        if item.owner in owners:
            continue
        if isinstance(item, Line):
            found += [
                (min(x1, x2), min(y1, y2), max(x1, x2), max(y1, y2))
                for (x1, y1), (x2, y2) in zip(item.points, item.points[1:], strict=False)
            ]
        else:
            found.append(box)
    return [box for box in found if box[0] < right and box[2] > left]


# --- print -----------------------------------------------------------------------------------------------------------

_MARGIN = 16.0
_INSET = 30.0


def draw_page(columns: Sequence[Column], page: Page, least: tuple[float, float] = (1500.0, 1000.0)) -> DisplayList:
    """The print view: frame with zones, drawing, callouts, revisions, verdict, title block, legend."""
    body = draw_columns(columns, page.dimensions)
    left, top, right, bottom = body.bounds()
    wide = max(least[0], right - left + 2 * (_MARGIN + _INSET) + 40)
    table = _Tables(page, wide - 2 * (_MARGIN + 14))
    high = max(least[1], bottom - top + table.height + 2 * (_MARGIN + 14) + 90)
    out = DisplayList(title=page.title, description=_described(columns, page))
    # The paper reaches beyond the frame.
    out.add(Shape(((0, 0), (wide, 0), (wide, high), (0, high)), PAPER))
    frame = (_MARGIN + 14, _MARGIN + 14, wide - _MARGIN - 14, high - _MARGIN - 14)
    _frame(out, wide, high, frame)
    out.extend(body, frame[0] + 28 - left, frame[1] + 22 - top)
    table.draw(out, frame[0], frame[3] - table.height)
    return out


def _described(columns: Sequence[Column], page: Page) -> str:
    """The sheet in words, for those who do not see it."""
    parts = [page.title + "."]
    parts += [f"Formulation {c.letter}, {c.subtitle}." for c in columns]
    if page.verdict:
        parts.append(f"Verdict: {page.verdict}.")
    parts += [f"Callout {number}: {text}" for number, text in page.callouts]
    return " ".join(parts)


def _frame(out: DisplayList, wide: float, high: float, inner: Box) -> None:
    outer = (_MARGIN, _MARGIN, wide - _MARGIN, high - _MARGIN)
    for box, weight, role in ((outer, 0.8, SOFT), (inner, 1.6, INK)):
        a, b, c, d = box
        out.add(Line(((a, b), (c, b), (c, d), (a, d), (a, b)), role, weight))
    across, down = max(4, round((inner[2] - inner[0]) / 190)), max(3, round((inner[3] - inner[1]) / 200))
    for i in range(across):
        x = inner[0] + (inner[2] - inner[0]) * i / across
        middle = x + (inner[2] - inner[0]) / across / 2
        if i:
            out.add(Line(((x, outer[1]), (x, inner[1])), SOFT, 0.8))
        out.add(Text(middle, inner[1] - 3.5, str(i + 1), "sans", 9, SOFT, "middle"))
    for i in range(down):
        y = inner[1] + (inner[3] - inner[1]) * i / down
        middle = y + (inner[3] - inner[1]) / down / 2
        if i:
            out.add(Line(((outer[0], y), (inner[0], y)), SOFT, 0.8))
        out.add(
            Text((outer[0] + inner[0]) / 2, middle + 3, "ABCDEFGHJKLMNPQRSTUVWXYZ"[i % 24], "sans", 9, SOFT, "middle")
        )


class _Tables:
    """The strip at the foot: callouts and legend, revisions and verdict, title block."""

    def __init__(self, page: Page, wide: float) -> None:
        self.page = page
        self.cells = [wide * 0.40, wide * 0.33, wide * 0.27]
        self.left = self._callouts(self.cells[0])
        self.middle = self._revisions(self.cells[1])
        self.right = self._title(self.cells[2])
        self.height = max(part.bounds()[3] for part in (self.left, self.middle, self.right)) + 18

    def draw(self, out: DisplayList, x: float, y: float) -> None:
        total = sum(self.cells)
        out.add(Line(((x, y), (x + total, y)), INK, 1.4))
        for part, wide in zip((self.left, self.middle, self.right), self.cells, strict=True):
            if part is not self.left:
                out.add(Line(((x, y), (x, y + self.height)), INK, 1.4))
            out.extend(part, x, y)
            x += wide

    def _callouts(self, wide: float) -> DisplayList:
        out = DisplayList()
        out.add(Text(16, 26, "Callouts", "serif-bold", 15, INK))
        y = 52.0
        if not self.page.callouts:
            out.add(Text(16, y, "none", "sans", 12, SOFT))
            y += 22
        for number, text in self.page.callouts:
            out.add(Circle(27, y - 4, 9.5, ACCENT, "paper", 1.2))
            out.add(Text(27, y - 0.2, str(number), "sans-bold", 10.5, ACCENT, "middle"))
            for line in wrapped(text, "sans", 12, wide - 62):
                out.add(Text(46, y, line, "sans", 12, INK))
                y += 17
            y += 7
        y += 6
        self._legend(out, y)
        for i, line in enumerate(wrapped(CAUTION, "sans", 9.5, wide - 32)):
            out.add(Text(16, y + 24 + 13 * i, line, "sans", 9.5, SOFT))
        return out

    def _legend(self, out: DisplayList, y: float) -> None:
        x = 16.0
        label = "gauge: decades of rows"
        out.add(Text(x, y, label, "sans", 10, SOFT))
        x += width(label, "sans", 10) + 18
        out.add(Line(((x, y - 4), (x + 22, y - 4)), INK, 1.4))
        out.add(Line(((x, y - 7), (x, y - 1)), INK, 1.4), Line(((x + 22, y - 7), (x + 22, y - 1)), INK, 1.4))
        out.add(Text(x + 28, y, "guaranteed range", "sans", 10, SOFT))
        x += 28 + width("guaranteed range", "sans", 10) + 16
        out.add(Circle(x + 4, y - 4, 3.6, INK, "paper", 1.3))
        out.add(Text(x + 13, y, "estimate", "sans", 10, SOFT))
        x += 13 + width("estimate", "sans", 10) + 16
        out.add(Shape(((x + 4, y - 8), (x, y), (x + 9, y)), INK))
        out.add(Text(x + 14, y, "measured", "sans", 10, SOFT))

    def _revisions(self, wide: float) -> DisplayList:
        out = DisplayList()
        out.add(Text(16, 26, f"Revisions of {self.page.revisions_of}", "serif-bold", 15, INK))
        y = 52.0
        if not self.page.revisions:
            out.add(Text(16, y, "as written", "sans", 12, SOFT))
            y += 20
        for name, text, effect in self.page.revisions:
            out.add(Text(16, y, name, "sans-bold", 11, INK))
            out.add(Text(wide - 16, y, effect, "sans", 11, SOFT, "end"))
            room = wide - 52 - 28 - width(effect, "sans", 11)
            for line in wrapped(text, "sans", 11.5, room):
                out.add(Text(52, y, line, "sans", 11.5, INK))
                y += 16
            y += 6
        if self.page.verdict:
            y += 14
            for i, line in enumerate(wrapped("Verdict:  " + self.page.verdict, "serif-bold", 13, wide - 32)):
                out.add(Text(16, y + 18 * i, line, "serif-bold", 13, INK))
        return out

    def _title(self, wide: float) -> DisplayList:
        out = DisplayList()
        out.add(Text(16, 26, cut(self.page.title, "serif-bold", 15, wide - 32), "serif-bold", 15, INK))
        y = 52.0
        for label, value in (*self.page.figures, *self.page.facts):
            out.add(Text(16, y, label, "sans", 11, SOFT))
            room = wide - 48 - width(label, "sans", 11)
            for line in wrapped(value, "sans-bold", 11.5, room) or [""]:
                out.add(Text(wide - 16, y, line, "sans-bold", 11.5, INK, "end"))
                y += 17
            y += 6
        return out
