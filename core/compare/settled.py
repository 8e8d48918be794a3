"""Whether an answer is settled by the data, or depends on the order in which rows happen to come.

Rows that tie under an order come in any order, and rows without an order more so. What depends on it is no function of
the data, so nothing is proved of it: two queries with one canonical text may still part on an engine.
"""

from __future__ import annotations

from collections.abc import Iterable

from core.algebra.graph import attributes, postorder
from core.algebra.operators import Group, Limit, Operator, Project, Select, Sort, Window
from core.algebra.scalars import Aggregate, Attribute, Frame, Ref, SortKey, WindowCall, refs
from core.derive.facts import Facts

SETTLED = frozenset(
    (
        "count count_if sum avg min max bool_and bool_or bit_and bit_or bit_xor product median stddev stddev_samp "
        "stddev_pop variance var_samp var_pop corr covar_pop covar_samp regr_slope regr_intercept regr_r2 grouping "
        "quantile quantile_cont quantile_disc percentile_cont percentile_disc approx_count_distinct"
    ).split()
)
"""Aggregates whose result is a function of the bag of values (floating-point rounding apart)."""

_PEER_FUNCTIONS = frozenset({"rank", "dense_rank", "percent_rank", "cume_dist"})
"""Window functions that give tied rows the same."""

_LISTS = frozenset({"string_agg", "group_concat", "array_agg", "list"})


def unsettled(root: Operator, facts: Facts) -> str | None:
    """Why the answer depends on the order of rows, in words; None where the data settle it.

    A limit over an order that leaves ties is let pass: verdicts say that they rest on it (`loose_limit`).
    """
    for operator in postorder(root):
        if isinstance(operator, Group):
            for column in operator.aggregates:
                if not _settled_aggregate(column.aggregate, operator.input, operator.keys, facts):
                    return f"{column.aggregate.name}() depends on the order of rows"
        elif isinstance(operator, Window):
            for window in operator.columns:
                if not _settled_window(window.call, operator.input, facts):
                    return f"{window.call.function.name}() over a window depends on how ties are broken"
        elif isinstance(operator, Limit) and operator.count is not None and _order_below(operator) is None:
            return "a limit without an order keeps any rows"
    return None


def loose_limit(limit: Limit, facts: Facts) -> bool:
    """Whether rows that a reader can tell apart may tie at a limit."""
    sort = _order_below(limit)
    if sort is None:
        return limit.count is not None or limit.offset is not None
    if limit.with_ties and sort is limit.input:
        return False
    return not _total(sort.keys, (), sort.input, facts)


def _order_below(limit: Limit) -> Sort | None:
    below = limit.input
    while isinstance(below, (Project, Select)):
        below = below.input
    return below if isinstance(below, Sort) else None


def _total(keys: Iterable[SortKey], more: Iterable[Attribute], below: Operator, facts: Facts) -> bool:
    """Whether rows that tie under the keys are alike in everything."""
    given = {key.term.attribute for key in keys if isinstance(key.term, Ref)}
    return facts.determined(below, given.union(more)) >= set(attributes(below))


def _settled_aggregate(call: Aggregate, below: Operator, keys: Iterable[Attribute], facts: Facts) -> bool:
    if call.name in SETTLED:
        return True
    if call.name not in _LISTS or not call.order:
        return False
    given = {key.term.attribute for key in call.order if isinstance(key.term, Ref)}
    return facts.determined(below, given.union(keys)) >= refs(*call.arguments)


def _settled_window(call: WindowCall, below: Operator, facts: Facts) -> bool:
    name = call.function.name
    if name in _PEER_FUNCTIONS:
        return True
    if name in SETTLED and not (call.order and _counts_rows(call.frame)):
        return True
    partition = {p.attribute for p in call.partition if isinstance(p, Ref)}
    return _total(call.order, partition, below, facts)


def _counts_rows(frame: Frame | None) -> bool:
    """Whether a frame's ends fall between tied rows."""
    if frame is None or frame.unit.lower() != "rows":
        return False
    return not (frame.start == (None, "preceding") and frame.end == (None, "following"))
