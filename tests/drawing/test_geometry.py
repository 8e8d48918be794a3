"""Generated sheets: texts, balloons, plates and lines never meet, and nothing leaves the frame."""

from __future__ import annotations

import random
from collections import Counter
from itertools import combinations, pairwise

from hypothesis import given, settings
from hypothesis import strategies as st

from core.algebra.graph import inputs
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Evidence
from core.drawing.display import Box, Circle, DisplayList, Line, Shape, Text, box_of
from core.drawing.page import Column, Dimension, Page, draw_columns, draw_page
from core.drawing.plan import Balloon, PlanDrawing, PlanView, draw_plan
from core.language.diagnostic import ReadError
from core.language.sql.read import read_sql
from core.size import Size
from tests.generate.queries import SCHEMA, random_query

WORDS = [
    "parcel",
    "delivered_at",
    "a",
    "σ",
    "≥",
    "duplicates",
    "of_a_very_long_name_that_no_line_of_the_sheet_can_hold" * 3,
    "→",
    "12.5M",
]


def sentence(rng: random.Random, most: int) -> str:
    return " ".join(rng.choice(WORDS) for _ in range(rng.randint(1, most)))


def random_size(rng: random.Random) -> Size:
    rows = rng.choice([0.0, 0.4, 1.0, 412.0, 9999.0, 7.41e8, 3e21, 10.0 ** rng.uniform(0, 12)])
    low = rng.choice([0, int(rows)])
    high = rng.choice([None, int(rows) + 1, int(rows) * 50 + 1])
    measured = rng.choice([None, int(rows), 0])
    return Size(rows, low, high, rows * 8, rng.choice(list(Evidence)), (), "", measured)


def shared_query(rng: random.Random) -> str:
    """Steps that several others read: the drawing is a graph."""
    steps = ["x0 as (select a, b from t where h > 0)"]
    for i in range(1, rng.randint(2, 4)):
        one, other = rng.randrange(i), rng.randrange(i)
        kind = rng.choice(["join", "left join", "full join"])
        steps.append(f"x{i} as (select p.a, q.b from x{one} p {kind} x{other} q on p.a = q.b)")
    last = len(steps) - 1
    return f"with {', '.join(steps)} select p.a, q.b from x{last} p join x{rng.randint(0, last)} q on p.a = q.a join x0 z on z.a = q.a"


def random_column(rng: random.Random, letter: str, first: int) -> tuple[Column, PlanDrawing, int] | None:
    catalog = catalog_from_ddl(SCHEMA)
    text = shared_query(rng) if rng.random() < 0.25 else random_query(rng.randrange(1 << 30), rng.randint(1, 3))[0]
    try:
        formulation = read_sql(text, catalog)
    except ReadError:
        return None
    operators = formulation.operators()
    chosen = [rng.choice(operators) for _ in range(rng.randint(0, 6))]
    view = PlanView(
        notes={op: sentence(rng, 3) for op in operators if rng.random() < 0.3},
        soft=frozenset(op for op in operators if rng.random() < 0.3),
        accent=frozenset(op for op in operators if rng.random() < 0.1),
        selected=rng.choice(operators),
        balloons=[Balloon(first + i, op) for i, op in enumerate(chosen)],
    )
    sizes = {op: random_size(rng) for op in operators}
    plan = draw_plan(formulation, sizes, catalog, letter, rng.choice([3, 9, 22, 400]), view)
    return Column(letter, sentence(rng, 2)[:60], plan.display), plan, first + len(chosen)


def apart(one: Box, other: Box, by: float = 0.0) -> bool:
    return one[2] <= other[0] - by or other[2] <= one[0] - by or one[3] <= other[1] - by or other[3] <= one[1] - by


def inner(box: Box, by: float) -> Box:
    return box[0] + by, box[1] + by, box[2] - by, box[3] - by


def meets(line: Line, box: Box) -> bool:
    """Whether an orthogonal line runs through a box."""
    for (x1, y1), (x2, y2) in zip(line.points, line.points[1:], strict=False):
        if (
            max(min(x1, x2), box[0]) < min(max(x1, x2), box[2]) + 1e-9
            and max(min(y1, y2), box[1]) < min(max(y1, y2), box[3]) + 1e-9
        ):
            return True
    return False


def check(display: DisplayList) -> None:
    texts = [t for t in display.texts() if t.text.strip()]
    for one, other in combinations(texts, 2):
        # Descenders of one line may come within a unit of the capitals of the next.
        assert apart(inner(one.box, 0.5), inner(other.box, 0.5)), f"{one.text!r} meets {other.text!r}"
    balloons = [c for c in display.items if isinstance(c, Circle) and c.radius > 9]
    for circle in balloons:
        for text in texts:
            if abs(text.x - circle.x) < 0.01 and text.anchor == "middle":
                continue
            assert apart(box_of(circle), inner(text.box, 0.5)), f"a balloon meets {text.text!r}"
    for one, other in combinations(balloons, 2):
        assert apart(box_of(one), box_of(other))
    plates = [box for owner, box in display.boxes.items() if not owner.startswith("callout")]
    for one, other in combinations(plates, 2):
        assert apart(one, other)
    for owner, box in display.boxes.items():
        if owner.startswith("callout"):
            assert all(apart(box, plate) for plate in plates), owner
    edges = [item for item in display.items if isinstance(item, Line) and not item.owner]
    for line in edges:
        for text in texts:
            assert not meets(line, inner(text.box, 0.8)), f"a line runs through {text.text!r}"
        for box in plates:
            assert not meets(line, inner(box, 0.8)), "a line runs through a plate"
        for circle in balloons:
            assert not meets(line, inner(box_of(circle), 0.8)), "a line runs through a balloon"


def inside(display: DisplayList) -> None:
    """A page's first item is its paper."""
    paper = display.items[0]
    assert isinstance(paper, Shape)
    left, top, right, bottom = box_of(paper)
    for item in display.items:
        a, b, c, d = box_of(item)
        what = item.text if isinstance(item, Text) else item
        assert left <= a and top <= b and c <= right + 1e-6 and d <= bottom + 1e-6, what


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 1 << 30))
def test_nothing_meets_on_generated_sheets(seed: int) -> None:
    rng = random.Random(seed)
    columns: list[Column] = []
    plans: list[PlanDrawing] = []
    number = 1
    for letter in "AB"[: rng.randint(1, 2)]:
        made = random_column(rng, letter, number)
        if made is None:
            return
        columns.append(made[0])
        plans.append(made[1])
        number = made[2]
    dimensions = []
    if len(plans) == 2:
        left, right = (rng.choice(sorted(p.operators)) for p in plans)
        dimensions.append(Dimension(left, right, "÷ 157 rows"))
    check(draw_columns(columns, dimensions))
    page = Page(
        title=sentence(rng, 8),
        callouts=[(i, sentence(rng, 30)) for i in range(1, number)],
        revisions=[
            (f"B{i + 1}", sentence(rng, 14), rng.choice(["÷ 14.3", "=", "× 1.05k"])) for i in range(rng.randint(0, 7))
        ],
        verdict=rng.choice(["", sentence(rng, 24)]),
        figures=[("rows through all operators", sentence(rng, 2))],
        facts=[("statistics", sentence(rng, 9)), ("site", sentence(rng, 3))],
        dimensions=dimensions,
    )
    printed = draw_page(columns, page)
    check(printed)
    inside(printed)


@settings(deadline=None, max_examples=30)
@given(st.integers(0, 1 << 30))
def test_edges_lead_from_a_foot_to_a_head(seed: int) -> None:
    """Every edge of the algebra is drawn once: from below its reader to above its input, in straight lines."""
    formulation = read_sql(shared_query(random.Random(seed)), catalog_from_ddl(SCHEMA))
    rng = random.Random(seed)
    sizes = {op: random_size(rng) for op in formulation.operators()}
    plan = draw_plan(formulation, sizes, catalog_from_ddl(SCHEMA), "A", 9)
    found = []
    for item in plan.display.items:
        if isinstance(item, Line) and not item.owner:
            assert all(abs(x1 - x2) < 1e-6 or abs(y1 - y2) < 1e-6 for (x1, y1), (x2, y2) in pairwise(item.points))
            (x1, y1), (x2, y2) = item.points[0], item.points[-1]
            boxes = plan.display.boxes.items()
            above = [o for o, b in boxes if b[0] < x1 < b[2] + 11 and abs(b[3] + 4 - y1) < 1e-6]
            below = [o for o, b in boxes if b[0] < x2 < b[2] and abs(b[1] - 4 - y2) < 1e-6]
            assert len(above) == len(below) == 1
            found.append((plan.operators[above[0]], plan.operators[below[0]]))
    wanted = [(op, below) for op in formulation.operators() for below in inputs(op)]
    assert Counter(found) == Counter(wanted)
