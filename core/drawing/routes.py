"""Orthogonal edges of a graph in rows: from the foot of a plate to the head of each input, round whatever stands between.

An edge that passes a row of plates takes a lane of its own between them; edges that run level in the same gap take tracks
of their own, unless they end at the same plate.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

Point = tuple[float, float]
_CLEAR, _LANE, _NEAR, _TRACK, _PORTS = 10.0, 9.0, 6.0, 7.0, 20.0


@dataclass(frozen=True, slots=True)
class Spot:
    """Where a plate stands: its row (0 is the topmost), left edge, width, width with balloons, height, and the point
    where edges arrive, from its left."""

    row: int
    left: float
    width: float
    room: float
    height: float
    anchor: float

    @property
    def head(self) -> float:
        return self.left + self.anchor


@dataclass(frozen=True, slots=True)
class Routed:
    """The top of each row, and the corners of each edge."""

    tops: Sequence[float]
    edges: Sequence[tuple[Point, ...]]


def straightened(spots: Mapping[str, Spot], edges: Sequence[tuple[str, str]], gap: float = 26.0) -> dict[str, Spot]:
    """The spots with every plate that one operator reads, and nothing else beside it, under that operator's head.

    A plate moves within its row as far as its neighbours let it.
    """
    found = dict(spots)
    inputs, readers = Counter(above for above, _ in edges), Counter(below for _, below in edges)
    rows: dict[int, list[str]] = {}
    for owner, spot in sorted(spots.items(), key=lambda pair: pair[1].left):
        rows.setdefault(spot.row, []).append(owner)
    for above, below in sorted(edges, key=lambda edge: spots[edge[1]].row):
        spot = found[below]
        if inputs[above] > 1 or readers[below] > 1 or found[above].row + 1 != spot.row:
            continue
        row = rows[spot.row]
        place = row.index(below)
        before, after = row[:place][-1:], row[place + 1 : place + 2]
        left = found[above].head - spot.anchor
        left = min([left, *(found[o].left - gap - spot.room for o in after)])
        left = max([left, *(found[o].left + found[o].room + gap for o in before)])
        found[below] = replace(spot, left=left)
    return found


def routed(spots: Mapping[str, Spot], edges: Sequence[tuple[str, str]]) -> Routed:
    """Gives rows their heights and edges their corners. Every edge leads to a lower row."""
    starts = _starts(spots, edges)
    passes = _lanes(spots, edges, starts)
    rows = 1 + max(spot.row for spot in spots.values())
    tracks = _tracks(spots, edges, passes, rows)
    heights = [0.0] * rows
    for spot in spots.values():
        heights[spot.row] = max(heights[spot.row], spot.height)
    tops = [0.0]
    for row in range(rows - 1):
        needed = 1 + max((t for (gap, _), t in tracks.items() if gap == row), default=0)
        tops.append(tops[-1] + heights[row] + 32 + _TRACK * needed)
    corners = []
    for number, (above, below) in enumerate(edges):
        first, last = spots[above], spots[below]
        xs = passes[number]
        points: list[Point] = [(xs[0], tops[first.row] + first.height + 4)]
        for step, (x, after) in enumerate(pairwise(xs)):
            row = first.row + step
            if abs(x - after) > 0.5:
                y = tops[row + 1] - 15 - _TRACK * tracks[row, number]
                points += [(x, y), (after, y)]
        points.append((xs[-1], tops[last.row] - 4))
        corners.append(tuple(points))
    return Routed(tops, corners)


def _starts(spots: Mapping[str, Spot], edges: Sequence[tuple[str, str]]) -> list[float]:
    """Where each edge leaves its plate: above the head it goes to where it can, in the order of the inputs, and apart."""
    starts = [0.0] * len(edges)
    leaving: dict[str, list[int]] = {}
    for number, (above, _) in enumerate(edges):
        leaving.setdefault(above, []).append(number)
    for above, numbers in leaving.items():
        spot = spots[above]
        least, most = spot.left + 22, max(spot.left + 22, spot.left + spot.width - 14)
        for place, number in enumerate(numbers):
            head = spots[edges[number][1]].head
            # A straight line is worth leaving nearer to an end of the plate.
            straight = least - 14 <= head <= most + 10
            wanted = head if straight else min(max(head, least), most)
            starts[number] = wanted if place == 0 else max(wanted, starts[numbers[place - 1]] + _PORTS)
        over = max(0.0, starts[numbers[-1]] - most - 10)
        for place in range(len(numbers) - 1, -1, -1):
            limit = most - _PORTS * (len(numbers) - 1 - place)
            starts[numbers[place]] = min(starts[numbers[place]], limit) if over else starts[numbers[place]]
    return starts


def _lanes(spots: Mapping[str, Spot], edges: Sequence[tuple[str, str]], starts: Sequence[float]) -> list[list[float]]:
    """For each edge its place at its own row, in each row that it passes, and at its head."""
    blocked: dict[int, list[tuple[float, float]]] = {}
    for spot in spots.values():
        blocked.setdefault(spot.row, []).append((spot.left - _CLEAR, spot.left + spot.room + _CLEAR))
    # In the gap above a row edges come from where others leave theirs, in the gap below they go where others arrive:
    # a lane in line with one of those would seem to be part of it.
    ends: dict[int, list[tuple[float, str, int]]] = {}
    for number, (above, below) in enumerate(edges):
        ends.setdefault(spots[above].row + 1, []).append((starts[number], "", number))
        ends.setdefault(spots[below].row - 1, []).append((spots[below].head, below, number))
    passes = []
    for number, (above, below) in enumerate(edges):
        xs, head = [starts[number]], spots[below].head
        for row in range(spots[above].row + 1, spots[below].row):
            others = [(x - _NEAR, x + _NEAR) for x, to, who in ends.get(row, ()) if who != number and to != below]
            x = _free([*blocked.setdefault(row, []), *others], xs[-1], head)
            blocked[row].append((x - _LANE, x + _LANE))
            xs.append(x)
        passes.append([*xs, head])
    return passes


def _free(blocked: Sequence[tuple[float, float]], here: float, head: float) -> float:
    """The place in a row that is free and means the least way from here to the head."""
    places = [here, head, *(edge for interval in blocked for edge in interval)]
    free = [x for x in places if not any(left < x < right for left, right in blocked)]
    return min(free, key=lambda x: (abs(x - here) + abs(x - head), x))


def _tracks(
    spots: Mapping[str, Spot], edges: Sequence[tuple[str, str]], passes: Sequence[Sequence[float]], rows: int
) -> dict[tuple[int, int], int]:
    """The track of each edge in each gap that it runs level in: the gap below a row, the edge, its track from below."""
    tracks: dict[tuple[int, int], int] = {}
    for gap in range(rows - 1):
        runs = []
        for number, (above, below) in enumerate(edges):
            step = gap - spots[above].row
            if 0 <= step < len(passes[number]) - 1 and abs(passes[number][step] - passes[number][step + 1]) > 0.5:
                left, right = sorted(passes[number][step : step + 2])
                ends = below if spots[below].row == gap + 1 else ""
                runs.append((left, right, ends, number))
        taken: list[list[tuple[float, float, str]]] = []
        for left, right, ends, number in sorted(runs):
            track = 0
            while track < len(taken) and any(
                left < r + 6 and right > le - 6 and not (ends and ends == other) for le, r, other in taken[track]
            ):
                track += 1
            if track == len(taken):
                taken.append([])
            taken[track].append((left, right, ends))
            tracks[gap, number] = track
    return tracks
