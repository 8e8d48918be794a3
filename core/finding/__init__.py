"""Findings: named defects and dangers, each with its evidence and the rewrite that mends it. One file a kind."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping

from core.algebra.formulation import Formulation
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.derive.facts import Facts
from core.finding import (
    correlated_rerun,
    count_of_null,
    duplicates,
    fan_out,
    hidden_predicate,
    idle_distinct,
    idle_sort,
    key_types,
    late_predicate,
    multiplied_sum,
    no_evidence,
    null_trap,
    product,
    range_join,
    same_work,
    undone_outer_join,
)
from core.finding.model import Finding, View
from core.rewrite.context import Context
from core.size import Size

__all__ = ["KINDS", "Finding", "findings"]

KINDS: tuple[Callable[[View], Iterator[Finding]], ...] = (
    fan_out.find,
    product.find,
    duplicates.find,
    late_predicate.find,
    hidden_predicate.find,
    null_trap.find,
    undone_outer_join.find,
    correlated_rerun.find,
    same_work.find,
    idle_sort.find,
    idle_distinct.find,
    count_of_null.find,
    multiplied_sum.find,
    range_join.find,
    key_types.find,
    no_evidence.find,
)


def findings(formulation: Formulation, catalog: Catalog, sizes: Mapping[Operator, Size]) -> list[Finding]:
    """What is wrong or dangerous in a formulation, the most work first."""
    facts = Facts(catalog)
    view = View(formulation, facts, Context(formulation, facts), sizes)
    found = [finding for kind in KINDS for finding in kind(view)]
    return sorted(found, key=lambda f: -f.work)
