"""The display list: what is drawn, at which place, in which role of colour. Window, SVG, PDF and tests share it.

Coordinates are sheet units (one pixel at 100 %), y downwards. Colours are roles that a palette resolves.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from core.drawing.metrics import width

INK, SOFT, FAINT, PAPER, ACCENT, WASH = "ink", "soft", "faint", "paper", "accent", "wash"
Box = tuple[float, float, float, float]
"""Left, top, right, bottom."""


@dataclass(frozen=True, slots=True)
class Line:
    points: tuple[tuple[float, float], ...]
    role: str = INK
    weight: float = 1.2
    dash: tuple[float, ...] = ()
    owner: str = ""
    detail: bool = False


@dataclass(frozen=True, slots=True)
class Shape:
    """A closed polygon, filled and perhaps outlined."""

    points: tuple[tuple[float, float], ...]
    fill: str = INK
    stroke: str = ""
    weight: float = 1.0
    owner: str = ""


@dataclass(frozen=True, slots=True)
class Circle:
    x: float
    y: float
    radius: float
    stroke: str = INK
    fill: str = ""
    weight: float = 1.2
    owner: str = ""


@dataclass(frozen=True, slots=True)
class Text:
    """A text whose baseline starts (or, with anchor "middle" or "end", is centred or ends) at x, y."""

    x: float
    y: float
    text: str
    face: str = "sans"
    size: float = 12.0
    role: str = INK
    anchor: str = "start"
    owner: str = ""
    detail: bool = False

    @property
    def left(self) -> float:
        if self.anchor == "start":
            return self.x
        own = width(self.text, self.face, self.size)
        return self.x - (own / 2 if self.anchor == "middle" else own)

    @property
    def box(self) -> Box:
        """Where ink can be: the width, from above the capitals to below the descenders."""
        left = self.left
        return (
            left,
            self.y - 0.78 * self.size,
            left + width(self.text, self.face, self.size),
            self.y + 0.22 * self.size,
        )


Item = Line | Shape | Circle | Text


@dataclass(slots=True)
class DisplayList:
    """Items in order of painting, and the rectangle each owner (operator, callout) can be touched in."""

    items: list[Item] = field(default_factory=list)
    _boxed: list[tuple[Item, Box]] = field(default_factory=list, init=False, repr=False, compare=False)
    boxes: dict[str, Box] = field(default_factory=dict)
    title: str = ""
    description: str = ""

    def add(self, *items: Item) -> None:
        self.items.extend(items)

    def extend(self, other: DisplayList, dx: float = 0.0, dy: float = 0.0) -> None:
        self.items.extend(moved(item, dx, dy) for item in other.items)
        self.boxes.update({k: (a + dx, b + dy, c + dx, d + dy) for k, (a, b, c, d) in other.boxes.items()})

    def boxed(self) -> list[tuple[Item, Box]]:
        """Every item with the rectangle it covers. Items are only ever added, so what is known of the others is kept."""
        for item in self.items[len(self._boxed) :]:
            self._boxed.append((item, box_of(item)))
        return self._boxed

    def bounds(self) -> Box:
        """The rectangle that holds everything."""
        return _hull(box for _, box in self.boxed())

    def texts(self) -> list[Text]:
        return [item for item in self.items if isinstance(item, Text)]


def moved(item: Item, dx: float, dy: float) -> Item:
    # Written out: `dataclasses.replace` takes most of the time that a large drawing needs.
    match item:
        case Line(points, role, weight, dash, owner, detail):
            return Line(tuple([(x + dx, y + dy) for x, y in points]), role, weight, dash, owner, detail)
        case Shape(points, fill, stroke, weight, owner):
            return Shape(tuple([(x + dx, y + dy) for x, y in points]), fill, stroke, weight, owner)
        case Circle(x, y, radius, stroke, fill, weight, owner):
            return Circle(x + dx, y + dy, radius, stroke, fill, weight, owner)
        case Text(x, y, text, face, size, role, anchor, owner, detail):
            return Text(x + dx, y + dy, text, face, size, role, anchor, owner, detail)


def box_of(item: Item) -> Box:
    match item:
        case Line(points=points) | Shape(points=points):
            xs, ys = [x for x, _ in points], [y for _, y in points]
            return min(xs), min(ys), max(xs), max(ys)
        case Circle(x=x, y=y, radius=r):
            return x - r, y - r, x + r, y + r
        case Text():
            return item.box


def _hull(boxes: Iterable[Box]) -> Box:
    found = list(boxes)
    if not found:
        return 0.0, 0.0, 0.0, 0.0
    return (min(b[0] for b in found), min(b[1] for b in found), max(b[2] for b in found), max(b[3] for b in found))
