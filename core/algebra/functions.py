"""What is known of functions by name: the facts that rules, derivations and proofs may use.

A function that is not listed is unknown: it may return NULL for non-NULL input and the reverse, and rules that need
more are refused. Facts are those of ISO/IEC 9075-2 and of DuckDB's and PostgreSQL's manuals.
"""

from __future__ import annotations

from collections.abc import Iterator

from core.algebra.scalars import Aggregate, Call, Node, walk

STRICT = frozenset(
    [
        "abs",
        "ceil",
        "ceiling",
        "floor",
        "round",
        "sqrt",
        "exp",
        "ln",
        "log",
        "log2",
        "log10",
        "power",
        "pow",
        "sign",
        "mod",
        "trunc",
        "lower",
        "upper",
        "length",
        "char_length",
        "character_length",
        "trim",
        "ltrim",
        "rtrim",
        "substring",
        "substr",
        "left",
        "right",
        "replace",
        "reverse",
        "lpad",
        "rpad",
        "repeat",
        "starts_with",
        "strpos",
        "position",
        "like",
        "ilike",
        "similar_to",
        "regexp_like",
        "regexp_matches",
        "contains",
        "extract",
        "year",
        "month",
        "day",
        "hour",
        "minute",
        "second",
        "quarter",
        "week",
        "dayofweek",
        "dayofyear",
        "date_trunc",
        "timestamp_trunc",
        "date_part",
        "date_diff",
        "datediff",
        "date_add",
        "date_sub",
        "strftime",
        "strptime",
        "to_timestamp",
    ]
)
"""NULL whenever an argument is NULL."""

VOLATILE = frozenset(["random", "rand", "uuid", "gen_random_uuid", "newid", "nextval", "setseed"])
"""May differ from call to call within one statement: never duplicated, never removed, never moved over a join."""

SESSION = frozenset(
    [
        "current_date",
        "current_time",
        "current_timestamp",
        "now",
        "today",
        "localtime",
        "localtimestamp",
        "current_user",
        "current_schema",
        "transaction_timestamp",
    ]
)
"""Fixed within a statement, but different from session to session."""

NEVER_NULL = frozenset(
    ["count", "count_if", "row_number", "rank", "dense_rank", "ntile", "cume_dist", "percent_rank", "grouping"]
)
"""Results (of functions and aggregates) that are never NULL."""

NULL_ON_EMPTY = frozenset(
    [
        "sum",
        "avg",
        "min",
        "max",
        "any_value",
        "first",
        "last",
        "bool_and",
        "bool_or",
        "string_agg",
        "group_concat",
        "array_agg",
        "list",
        "median",
        "mode",
        "stddev",
        "stddev_samp",
        "stddev_pop",
        "variance",
        "var_samp",
        "var_pop",
        "arg_min",
        "arg_max",
        "product",
    ]
)
"""Aggregates that ignore or lack rows give NULL over an empty input."""

DUPLICATE_INSENSITIVE = frozenset(["min", "max", "bool_and", "bool_or", "bit_and", "bit_or"])
"""Aggregates whose result does not depend on how often a value occurs."""

ORDER_SENSITIVE = frozenset(
    ["string_agg", "group_concat", "array_agg", "list", "first", "last", "arg_min", "arg_max", "any_value"]
)
"""Aggregates whose result depends on the order of rows, or on a choice among them."""

RANKING = frozenset(["row_number", "rank", "dense_rank", "ntile", "cume_dist", "percent_rank"])

AGGREGATES = frozenset({"count", "count_if"}) | NULL_ON_EMPTY | DUPLICATE_INSENSITIVE


def volatile(*roots: Node) -> bool:
    """Whether a scalar calls a function that may differ from call to call."""
    return any(call.name in VOLATILE for call in calls(*roots))


def calls(*roots: Node) -> Iterator[Call]:
    return (node for node in walk(*roots) if isinstance(node, Call))


def duplicate_insensitive(aggregate: Aggregate) -> bool:
    """Whether the aggregate gives the same for a bag and for its set of rows."""
    return aggregate.name in DUPLICATE_INSENSITIVE or (aggregate.distinct and not order_sensitive(aggregate))


def order_sensitive(aggregate: Aggregate) -> bool:
    return aggregate.name in ORDER_SENSITIVE or bool(aggregate.order)
