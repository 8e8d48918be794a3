"""A formulation drawn as a tree: plates, edges, callout balloons, stage outlines."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from core.algebra.formulation import Formulation
from core.algebra.graph import dependent, inputs, parents, scalars
from core.algebra.notation import Naming
from core.algebra.operators import Join, Operator, Relation
from core.algebra.scalars import Attribute, refs
from core.catalog.model import Catalog
from core.drawing.display import ACCENT, INK, SOFT, Circle, DisplayList, Line, Text
from core.drawing.graph_layout import place
from core.drawing.plates import ANCHOR, Plate, draw_plate, plate_of
from core.drawing.routes import Spot, routed, straightened
from core.drawing.tidy import Node, lay_out
from core.size import Size

_FIRST_BALLOON, _BALLOON = 44.0, 26.0


@dataclass(frozen=True, slots=True)
class Balloon:
    """A numbered callout at an operator."""

    number: int
    operator: Operator


@dataclass(slots=True)
class PlanView:
    """What is shown of a formulation besides its operators."""

    notes: Mapping[Operator, str] = field(default_factory=dict)
    soft: frozenset[Operator] = frozenset()
    accent: frozenset[Operator] = frozenset()
    selected: Operator | None = None
    balloons: Sequence[Balloon] = ()


@dataclass(slots=True)
class PlanDrawing:
    """The drawing, and which operator each owner stands for. A shared operator is drawn once; `owners` maps both ways."""

    display: DisplayList
    operators: dict[str, Operator]
    owners: dict[Operator, str]


def decades_for(sizes: Mapping[Operator, Size]) -> int:
    """The decades a gauge needs so that all sizes of a sheet stand on one scale: three at least."""
    most = 1000.0
    for size in sizes.values():
        most = max(most, size.best, size.rows)
        if size.high is not None and size.high <= 1e4 * max(size.best, size.rows, 1.0):
            most = max(most, size.high)
    return max(3, math.ceil(math.log10(most) - 1e-9))


def draw_plan(
    formulation: Formulation,
    sizes: Mapping[Operator, Size],
    catalog: Catalog,
    prefix: str,
    decades: int,
    view: PlanView | None = None,
) -> PlanDrawing:
    """The tree of a formulation, upper left corner near (0, 0). Owners are `prefix` and a number from the answer down."""
    shown = view or PlanView()
    naming = _unclear(formulation)
    graph = _draw_graph(formulation, sizes, catalog, prefix, decades, shown, naming)
    if graph is not None:
        return graph
    room = _balloon_room(shown.balloons)
    plates: dict[str, Plate] = {}
    operators: dict[str, Operator] = {}
    owners: dict[Operator, str] = {}
    nodes: dict[str, Node] = {}
    edges: list[tuple[str, str]] = []
    pending: list[tuple[Operator, str]] = [(root, "") for root in reversed(formulation.roots())]
    roots: list[str] = []
    while pending:
        operator, above = pending.pop()
        again = operator in owners
        owner = f"{prefix}{len(plates) + 1}"
        plates[owner] = (
            _reference(operator, owner, formulation)
            if again
            else _plate(operator, owner, formulation, sizes, catalog, naming, shown)
        )
        operators[owner] = operator
        owners.setdefault(operator, owner)
        after = max(10.0, plates[owner].width - ANCHOR) + (0.0 if again else room.get(operator, 0.0))
        nodes[owner] = Node(ANCHOR, after, plates[owner].height)
        if above:
            edges.append((above, owner))
            nodes[above].children.append(nodes[owner])
        else:
            roots.append(owner)
        if not again:
            pending.extend((below, owner) for below in reversed(inputs(operator)))
    out = DisplayList()
    dx = 0.0
    for root in roots:
        lay_out(nodes[root])
        for node in _all(nodes[root]):
            node.x += dx
        dx = max(node.x + node.after for node in _all(nodes[root])) + 60
    _edges(out, nodes, edges, operators, shown)
    for owner, plate in plates.items():
        node = nodes[owner]
        out.extend(draw_plate(plate, node.x - ANCHOR, node.y, decades))
    _balloons(out, shown.balloons, owners)
    return PlanDrawing(out, operators, owners)


def _draw_graph(
    formulation: Formulation,
    sizes: Mapping[Operator, Size],
    catalog: Catalog,
    prefix: str,
    decades: int,
    shown: PlanView,
    naming: Naming,
) -> PlanDrawing | None:
    """A formulation with shared parts as a graph: each operator once, an edge from everyone who reads it.

    None where nothing is shared, or where Graphviz is not at hand.
    """
    readers = parents(*formulation.roots())
    if all(len(several) < 2 for several in readers.values()):
        return None
    operators = list(reversed(formulation.operators()))
    owners = {operator: f"{prefix}{i + 1}" for i, operator in enumerate(operators)}
    plates = {o: _plate(op, o, formulation, sizes, catalog, naming, shown) for op, o in owners.items()}
    edges = [(owners[op], owners[below]) for op in operators for below in inputs(op)]
    room = {owners[op]: wide for op, wide in _balloon_room(shown.balloons).items() if op in owners}
    placed = place({o: (round(p.width + room.get(o, 0.0), 1), p.height + 8) for o, p in plates.items()}, edges)
    if placed is None:
        return None
    out = DisplayList()
    by_owner = {owner: operator for operator, owner in owners.items()}
    rows = {y: row for row, y in enumerate(sorted({y for _, y in placed.values()}))}
    spots = {}
    for owner, plate in plates.items():
        x, y = placed[owner]
        wide = plate.width + room.get(owner, 0.0)
        spots[owner] = Spot(rows[y], x - wide / 2, plate.width, wide, plate.height, ANCHOR)
    spots = straightened(spots, edges)
    ways = routed(spots, edges)
    for (above, below), corners in zip(edges, ways.edges, strict=True):
        soft = by_owner[below] in shown.soft
        accent = by_owner[below] in shown.accent and by_owner[above] not in shown.soft
        out.add(Line(corners, ACCENT if accent else SOFT if soft else INK, 1.8 if accent else 1.2))
    for owner, plate in plates.items():
        out.extend(draw_plate(plate, spots[owner].left, ways.tops[spots[owner].row], decades))
    _balloons(out, shown.balloons, owners)
    return PlanDrawing(out, by_owner, owners)


def _all(root: Node) -> list[Node]:
    found, pending = [], [root]
    while pending:
        node = pending.pop()
        found.append(node)
        pending.extend(node.children)
    return found


def _unclear(formulation: Formulation) -> Naming:
    """Names as they are, but with the relation's alias where the text uses two attributes of one name in one place."""
    owner: dict[Attribute, str] = {}
    for operator in formulation.operators():
        if isinstance(operator, Relation):
            owner.update(dict.fromkeys(operator.attributes, operator.alias or operator.name))
    clashes: set[Attribute] = set()
    for operator in formulation.operators():
        by_name: dict[str, set[Attribute]] = {}
        for attribute in refs(*scalars(operator)):
            by_name.setdefault(attribute.name, set()).add(attribute)
        clashes.update(a for several in by_name.values() if len(several) > 1 for a in several)
    return lambda a: f"{owner[a]}.{a.name}" if a in clashes and a in owner else a.name


def _plate(
    operator: Operator,
    owner: str,
    formulation: Formulation,
    sizes: Mapping[Operator, Size],
    catalog: Catalog,
    naming: Naming,
    shown: PlanView,
) -> Plate:
    note = shown.notes.get(operator, "")
    name = formulation.names.get(operator)
    if name and not note and not isinstance(operator, Relation):
        note = f"step {name}"
    if not note and isinstance(operator, Join) and dependent(operator):
        note = "for each row: " + ", ".join(sorted(a.name for a in dependent(operator)))
    return plate_of(
        operator,
        owner,
        catalog,
        sizes.get(operator),
        naming,
        note,
        operator in shown.accent,
        operator in shown.soft,
        operator is shown.selected,
    )


def _reference(operator: Operator, owner: str, formulation: Formulation) -> Plate:
    """A shared part at its second place: its name stands for it."""
    name = formulation.names.get(operator, "shared part")
    return Plate(owner, "", "", name, (), "drawn beside: one result, used again", None, False, True)


def _edges(
    out: DisplayList,
    nodes: Mapping[str, Node],
    edges: Sequence[tuple[str, str]],
    operators: Mapping[str, Operator],
    shown: PlanView,
) -> None:
    """Orthogonal lines from the foot of a plate to the head of each input."""
    below: dict[str, list[str]] = {}
    for above, child in edges:
        below.setdefault(above, []).append(child)
    for above, children in below.items():
        parent = nodes[above]
        spread = 48.0 if len(children) > 1 else 0.0
        for i, child in enumerate(children):
            node = nodes[child]
            share = 0.0 if len(children) == 1 else i / (len(children) - 1) - 0.5
            start = parent.x + spread * share
            foot, head = parent.y + parent.height + 4, node.y - 4
            bend = head - 18
            role = SOFT if operators[child] in shown.soft else INK
            if operators[child] in shown.accent and operators[above] not in shown.soft:
                role = ACCENT
            points: tuple[tuple[float, float], ...] = ((start, foot), (start, bend), (node.x, bend), (node.x, head))
            if abs(start - node.x) < 0.5:
                points = ((node.x, foot), (node.x, head))
            out.add(Line(points, role, 1.8 if role == ACCENT else 1.2))


def _balloon_room(balloons: Sequence[Balloon]) -> dict[Operator, float]:
    """How much wider a plate's place must be for the balloons at its right."""
    room: dict[Operator, float] = {}
    for balloon in balloons:
        room[balloon.operator] = room.get(balloon.operator, _FIRST_BALLOON - _BALLOON) + _BALLOON
    return room


def _balloons(out: DisplayList, balloons: Sequence[Balloon], owners: Mapping[Operator, str]) -> None:
    """Numbered circles right of their plates, with a leader to the plate; several at one plate stand in a row."""
    beside: dict[str, int] = {}
    for balloon in balloons:
        owner = owners.get(balloon.operator)
        if owner is None:
            continue
        _, top, right, _ = out.boxes[owner]
        place = beside.get(owner, 0)
        beside[owner] = place + 1
        x, y = right + _FIRST_BALLOON - 12 + _BALLOON * place, top + 6
        if place == 0:
            out.add(Line(((right - 4, top + 14), (x - 9.6, y + 2.8)), ACCENT, 1.1, owner=f"callout{balloon.number}"))
            out.add(Circle(right - 4, top + 14, 1.8, ACCENT, ACCENT, 1.0))
        out.add(Circle(x, y, 10, ACCENT, "paper", 1.3, f"callout{balloon.number}"))
        out.add(Text(x, y + 4, str(balloon.number), "sans-bold", 11, ACCENT, "middle", f"callout{balloon.number}"))
        out.boxes[f"callout{balloon.number}"] = (x - 10, y - 10, x + 10, y + 10)
