"""Keys of parts of a plan, kept: drawing and findings ask for them again at every change of the sheet."""

from __future__ import annotations

from weakref import WeakKeyDictionary

from core.algebra.graph import postorder
from core.algebra.operators import Operator
from core.compare.canonical import part_key

_LARGEST = 60
"""A part of more operators has no key here: its canonical text would take longer than its use is worth."""

_known: WeakKeyDictionary[Operator, str | None] = WeakKeyDictionary()


def kept_key(operator: Operator) -> str | None:
    """`part_key` of an operator, made once; None for parts that are too large or have none."""
    if operator not in _known:
        _known[operator] = part_key(operator) if len(postorder(operator)) <= _LARGEST else None
    return _known[operator]
