"""One operator drawn: bracket, sign, condition, gauge."""

from __future__ import annotations

import math
from dataclasses import dataclass

from core.algebra.graph import attributes
from core.algebra.notation import Naming, condition_text, scalar_text, sign, sign_mark
from core.algebra.operators import Operator, Project, Relation
from core.algebra.scalars import Ref
from core.catalog.model import Catalog
from core.drawing.display import ACCENT, INK, SOFT, WASH, Circle, DisplayList, Line, Shape, Text
from core.drawing.metrics import cut, width
from core.size import Size
from core.size.numbers import rows_text

GAUGE = 124.0
ANCHOR = 74.0
"""Where edges meet a plate, from its left."""
WIDEST = 300.0
_TEXT_LEFT = 42.0
_SIGN = 22.0
_HEIGHT = 68.0
_NOTED = 81.0


@dataclass(frozen=True, slots=True)
class Plate:
    """What is drawn for an operator. `attributes` are a base relation's, each with whether it is part of the key."""

    owner: str
    sign: str
    mark: str
    title: str
    attributes: tuple[tuple[str, bool], ...] = ()
    note: str = ""
    size: Size | None = None
    accent: bool = False
    soft: bool = False
    selected: bool = False

    @property
    def height(self) -> float:
        return _NOTED if self.note else _HEIGHT

    @property
    def width(self) -> float:
        """Wide enough for the title (up to a limit) and for the gauge with its number."""
        if self.sign:
            title = _TEXT_LEFT + min(width(self.title, "mono", 11.5), WIDEST)
        else:
            listed = min(width(_listed(self.attributes), "mono", 11.5), WIDEST - 80) if self.attributes else 0.0
            title = 10 + width(self.name, "serif-bold", 15) + 6 + listed
        gauge = 12 + GAUGE + 8 + 64 if self.size is not None else 0.0
        note = _TEXT_LEFT + min(width(self.note, "mono", 10), WIDEST)
        return max(title, gauge, note) + 8

    @property
    def name(self) -> str:
        """A relation's name as it is drawn: cut where it is very long."""
        return cut(self.title, "serif-bold", 15, WIDEST)


def _listed(names: tuple[tuple[str, bool], ...]) -> str:
    return "(" + ", ".join(name for name, _ in names) + ")"


def plate_of(
    operator: Operator,
    owner: str,
    catalog: Catalog,
    size: Size | None,
    naming: Naming,
    note: str = "",
    accent: bool = False,
    soft: bool = False,
    selected: bool = False,
) -> Plate:
    """The plate of an operator."""
    if isinstance(operator, Relation):
        facts = catalog.relation(operator.name)
        key = {n.lower() for n in facts.primary} if facts is not None and facts.primary is not None else set()
        names = tuple((a.name, a.name.lower() in key) for a in operator.attributes)
        title = operator.name.rpartition(".")[2]
        alias = f"as {operator.alias}" if operator.alias and operator.alias.lower() != title.lower() else ""
        return Plate(owner, "", "", title, names, note or alias, size, accent, soft, selected)
    text = _extended(operator, naming) or condition_text(operator, naming)
    return Plate(owner, sign(operator), sign_mark(operator), text, (), note, size, accent, soft, selected)


def _extended(operator: Operator, naming: Naming) -> str:
    """A projection that keeps everything and adds columns: only the new ones are worth reading."""
    if not isinstance(operator, Project):
        return ""
    kept = [c for c in operator.columns if c.value == Ref(c.attribute)]
    added = [c for c in operator.columns if c.value != Ref(c.attribute)]
    if not added or len(kept) < 4 or len(kept) < len(attributes(operator.input)):
        return ""
    return "… + " + ", ".join(f"{scalar_text(c.value, naming)} → {naming(c.attribute)}" for c in added)


def draw_plate(plate: Plate, left: float, top: float, decades: int) -> DisplayList:
    """The plate with its upper left corner at (left, top), on a gauge of so many decades."""
    out = DisplayList()
    own, height, wide = plate.owner, plate.height, plate.width
    line = SOFT if plate.soft else INK
    edge = ACCENT if plate.accent or plate.selected else line
    if plate.accent or plate.selected:
        out.add(
            Shape(((left, top), (left + wide, top), (left + wide, top + height), (left, top + height)), WASH, owner=own)
        )
    bracket = ((left + 10, top), (left, top), (left, top + height), (left + 10, top + height))
    out.add(Line(bracket, edge, 2.2 if plate.accent or plate.selected else 1.3, owner=own))
    if plate.sign:
        _sign(out, plate, left, top, line)
        title = cut(plate.title, "mono", 11.5, WIDEST)
        out.add(Text(left + _TEXT_LEFT, top + 18, title, "mono", 11.5, line, owner=own))
        note_left = left + _TEXT_LEFT
    else:
        _relation(out, plate, left, top, line)
        note_left = left + 10
    if plate.note:
        out.add(
            Text(note_left, top + 33, cut(plate.note, "mono", 10, WIDEST), "mono", 10, SOFT, owner=own, detail=True)
        )
    if plate.size is not None:
        _gauge(out, plate.size, left + 12, top + height - 27, decades, line, own)
    out.boxes[own] = (left, top, left + wide, top + height)
    return out


def _sign(out: DisplayList, plate: Plate, left: float, top: float, role: str) -> None:
    if plate.sign == "fix":
        out.add(Text(left + 9, top + 20, "fix", "serif-italic", 15, role, owner=plate.owner))
        return
    out.add(Text(left + 10, top + 21, plate.sign, "serif", _SIGN, role, owner=plate.owner))
    if plate.mark:
        out.add(
            Text(
                left + 11 + width(plate.sign, "serif", _SIGN),
                top + 25,
                plate.mark,
                "sans-bold",
                9,
                role,
                owner=plate.owner,
            )
        )


def _relation(out: DisplayList, plate: Plate, left: float, top: float, role: str) -> None:
    """Name in bold, attributes in parentheses, key underlined."""
    out.add(Text(left + 10, top + 20, plate.name, "serif-bold", 15, role, owner=plate.owner))
    x = left + 10 + width(plate.name, "serif-bold", 15) + 6
    most = left + plate.width - 8
    if not plate.attributes:
        return
    pieces: list[tuple[str, bool]] = [("(", False)]
    for i, (name, key) in enumerate(plate.attributes):
        tail = ")" if i == len(plate.attributes) - 1 else ", "
        need = width(name + tail, "mono", 11.5)
        used = sum(width(piece, "mono", 11.5) for piece, _ in pieces)
        if x + used + need > most - (0 if tail == ")" else width("…)", "mono", 11.5)) + 0.01:
            pieces.append(("…)", False))
            break
        pieces += [(name, key), (tail, False)]
    for text, key in pieces:
        own = width(text, "mono", 11.5)
        out.add(Text(x, top + 19, text, "mono", 11.5, role, owner=plate.owner, detail=True))
        if key:
            out.add(Line(((x, top + 22.5), (x + own, top + 22.5)), role, 0.9, owner=plate.owner, detail=True))
        x += own


def gauge_place(value: float, decades: int) -> float:
    """Where a number of rows stands on a gauge, from 0 to its length."""
    return GAUGE * min(1.0, math.log10(max(1.0, value)) / max(1, decades))


def evidence_word(size: Size) -> str:
    """The evidence under a number; "exact" where structure alone leaves no other number, though nothing was counted."""
    if size.measured is None and size.high is not None and size.low == size.high:
        return "exact"
    return size.best_evidence.word


def tick_step(decades: int) -> int:
    """How many decades from tick to tick, so that ticks stay apart on a scale of any length."""
    step = 1
    while decades / step > 18:
        step *= 3
    return step


def _gauge(out: DisplayList, size: Size, left: float, y: float, decades: int, role: str, own: str) -> None:
    """A strip of decades: I-beam for the guaranteed range, circle for the estimate, triangle for a measured count."""
    out.add(Line(((left, y), (left + GAUGE, y)), SOFT, 0.9, owner=own))
    step = tick_step(decades)
    for i in range(0, decades + 1, step):
        x = left + GAUGE * i / decades
        out.add(Line(((x, y), (x, y + (5 if i % (3 * step) == 0 else 3))), SOFT, 0.8, owner=own, detail=True))
    low = left + gauge_place(size.low, decades)
    open_end = size.high is None or size.high > 10**decades
    high = left + GAUGE + 3 if open_end or size.high is None else left + gauge_place(size.high, decades)
    beam = y - 5
    if size.high is None or size.low != size.high:
        out.add(Line(((low, beam), (high, beam)), role, 1.5, owner=own))
        out.add(Line(((low, beam - 3), (low, beam + 3)), role, 1.5, owner=own))
        if open_end:
            out.add(Line(((high - 4, beam - 3), (high, beam), (high - 4, beam + 3)), role, 1.5, owner=own))
        else:
            out.add(Line(((high, beam - 3), (high, beam + 3)), role, 1.5, owner=own))
    out.add(Circle(left + gauge_place(size.rows, decades), beam, 3.6, role, "paper", 1.4, own))
    if size.measured is not None:
        x = left + gauge_place(size.measured, decades)
        out.add(Shape(((x, y + 1.5), (x - 4.5, y + 9.5), (x + 4.5, y + 9.5)), role, owner=own))
    number, word = rows_text(size.best), evidence_word(size)
    out.add(Text(left + GAUGE + 9, y + 2, number, "sans-bold", 12, role, owner=own))
    out.add(Text(left + GAUGE + 9, y + 14, word, "sans", 9.5, SOFT, owner=own, detail=True))
