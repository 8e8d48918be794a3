"""A tidy tree in linear time: the answer on top, inputs below in their order, nothing overlapping.

Contours are merged as in Reingold, Tilford (IEEE TSE 7(2) 1981), with widths of their own for every node. Nodes hang by
an anchor (the point where edges leave and arrive), so that a chain of operators is one straight line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


@dataclass(slots=True)
class Node:
    """`before` and `after` are the extents left and right of the anchor."""

    before: float
    after: float
    height: float
    children: list[Node] = field(default_factory=list)
    x: float = 0.0
    y: float = 0.0


def lay_out(root: Node, gap: float = 26.0, level_gap: float = 42.0) -> None:
    """Gives every node its x (of the anchor) and y (of the top). The leftmost extent is at 0."""
    order = _preorder(root)
    depth = {id(root): 0}
    for node in order:
        for child in node.children:
            depth[id(child)] = depth[id(node)] + 1
    shifts = _offsets(order, gap)
    _place(root, order, shifts)
    tops = _level_tops(order, depth, level_gap)
    least = min(node.x - node.before for node in order)
    for node in order:
        node.x -= least
        node.y = tops[depth[id(node)]]


def _preorder(root: Node) -> list[Node]:
    found, pending = [], [root]
    while pending:
        node = pending.pop()
        found.append(node)
        pending.extend(reversed(node.children))
    return found


def _level_tops(order: Sequence[Node], depth: dict[int, int], level_gap: float) -> list[float]:
    heights = [0.0] * (max(depth.values()) + 1)
    for node in order:
        heights[depth[id(node)]] = max(heights[depth[id(node)]], node.height)
    tops, y = [], 0.0
    for height in heights:
        tops.append(y)
        y += height + level_gap
    return tops


@dataclass(slots=True)
class _Contour:
    """Left and right extents by level below a node, deepest level first, relative to `shift`."""

    left: list[float]
    right: list[float]
    shift_left: float = 0.0
    shift_right: float = 0.0


def _offsets(order: Sequence[Node], gap: float) -> dict[int, float]:
    """For each node, its anchor relative to its parent's."""
    contours: dict[int, _Contour] = {}
    offsets: dict[int, float] = {}
    for node in reversed(order):
        if not node.children:
            contours[id(node)] = _Contour([-node.before], [node.after])
            continue
        merged = contours.pop(id(node.children[0]))
        places = [0.0]
        for child in node.children[1:]:
            other = contours.pop(id(child))
            place = _distance(merged, other, gap)
            places.append(place)
            merged = _merge(merged, other, place)
        middle = (places[0] + places[-1]) / 2
        for child, place in zip(node.children, places, strict=True):
            offsets[id(child)] = place - middle
        merged.shift_left -= middle
        merged.shift_right -= middle
        merged.left.append(-node.before - merged.shift_left)
        merged.right.append(node.after - merged.shift_right)
        contours[id(node)] = merged
    return offsets


def _distance(left: _Contour, right: _Contour, gap: float) -> float:
    """How far right the second subtree must go to clear the first on every level they share."""
    most = 0.0
    for i in range(1, min(len(left.right), len(right.left)) + 1):
        need = left.right[-i] + left.shift_right - (right.left[-i] + right.shift_left) + gap
        most = max(most, need)
    return most


def _merge(left: _Contour, right: _Contour, place: float) -> _Contour:
    """The contour of both subtrees; only the shorter one is copied, which makes the whole linear."""
    right.shift_left += place
    right.shift_right += place
    shared = min(len(left.left), len(right.left))
    if len(right.right) >= len(left.right):
        rights, shift_right = right.right, right.shift_right
    else:
        rights, shift_right = left.right, left.shift_right
        for i in range(1, shared + 1):
            rights[-i] = right.right[-i] + right.shift_right - shift_right
    if len(left.left) >= len(right.left):
        lefts, shift_left = left.left, left.shift_left
    else:
        lefts, shift_left = right.left, right.shift_left
        for i in range(1, shared + 1):
            lefts[-i] = left.left[-i] + left.shift_left - shift_left
    return _Contour(lefts, rights, shift_left, shift_right)


def _place(root: Node, order: Sequence[Node], offsets: dict[int, float]) -> None:
    root.x = 0.0
    for node in order:
        for child in node.children:
            child.x = node.x + offsets[id(child)]
