"""Are two formulations equal? A proof that can be read, or the smallest data on which they differ."""

from core.compare.align import Alignment, align
from core.compare.verdict import Kind, Verdict, compare
from core.compare.witness import Witness

__all__ = ["Alignment", "Kind", "Verdict", "Witness", "align", "compare"]
