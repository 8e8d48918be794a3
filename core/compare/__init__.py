"""Are two formulations equal? A proof that can be read, or the smallest data on which they differ."""

from __future__ import annotations

import sys
from types import ModuleType

from core.algebra.formulation import Formulation
from core.catalog.model import Catalog
from core.compare.align import Alignment, align
from core.compare.verdict import Kind, Verdict, compare
from core.compare.witness import Witness

__all__ = ["Alignment", "Kind", "Verdict", "Witness", "align", "compare"]


class _Room(ModuleType):
    """The library's `core.compare(...)` has the name of this package, so the package answers to a call."""

    def __call__(self, a: Formulation, b: Formulation, catalog: Catalog, seconds: float = 10.0) -> Verdict:
        return compare(a, b, catalog, seconds)


sys.modules[__name__].__class__ = _Room
