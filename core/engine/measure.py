"""Measured sizes: exact row counts of every operator, by the engine."""

from __future__ import annotations

import math
import threading
from collections.abc import Callable, Iterable

from core.algebra.formulation import Formulation
from core.algebra.graph import free, inputs
from core.algebra.notation import is_product
from core.algebra.operators import Operator, Values
from core.engine.duckdb_engine import Cancelled, DuckEngine, EngineError
from core.language.sql.write import WriteError, write_query


def measure(
    formulation: Formulation,
    engine: DuckEngine,
    progress: Callable[[float, str], None] | None = None,
    cancel: threading.Event | None = None,
    seconds: float = 60.0,
    operators: Iterable[Operator] | None = None,
) -> tuple[dict[Operator, int], dict[Operator, str]]:
    """Exact counts of rows by operator, and why an operator has none.

    Operators inside a correlated part have no count of their own: they run once for each outer row. `seconds` bounds
    each count. Raises `Cancelled` soon after `cancel` is set.
    """
    counts: dict[Operator, int] = {}
    reasons: dict[Operator, str] = {}
    todo = list(operators) if operators is not None else formulation.operators()
    for i, operator in enumerate(todo):
        if cancel is not None and cancel.is_set():
            raise Cancelled("measuring was stopped")
        if progress is not None:
            progress(i / max(1, len(todo)), f"{i} of {len(todo)} operators")
        if free(operator):
            reasons[operator] = "it runs once for each outer row"
            continue
        if isinstance(operator, Values):
            counts[operator] = len(operator.rows)
            continue
        if is_product(operator) and all(part in counts for part in inputs(operator)):
            # A product's count needs no product.
            counts[operator] = math.prod(counts[part] for part in inputs(operator))
            continue
        try:
            counts[operator] = _count(operator, engine, seconds)
        except Cancelled:
            if cancel is not None and cancel.is_set():
                raise
            reasons[operator] = f"counting took more than {seconds:g} s"
        except (EngineError, WriteError) as error:
            reasons[operator] = str(error).split("\n")[0]
    return counts, reasons


def _count(operator: Operator, engine: DuckEngine, seconds: float) -> int:
    sql = write_query(operator, dialect="duckdb")
    return int(engine.run_within(f"SELECT count(*) FROM (\n{sql}\n) AS counted", seconds).rows[0][0])
