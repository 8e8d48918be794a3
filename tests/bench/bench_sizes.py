"""How far estimates are off: q-errors over every operator of the TPC-H queries, beside those of DuckDB's own planner.

The q-error is max(estimate/true, true/estimate), both floored at 1 (Moerkotte, Neumann, Steidl, PVLDB 2(1) 2009).
"""

from __future__ import annotations

import json
from typing import Any

from core.algebra.notation import is_product
from core.algebra.operators import Join, JoinKind, Operator, Relation, Select
from core.catalog.ddl import catalog_from_ddl
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.measure import measure
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.language.sql.write import write_query
from core.size import size
from tests.bench import Row
from tests.data import tpch

SCALE = 0.01


def q_error(estimate: float, true: float) -> float:
    a, b = max(1.0, estimate), max(1.0, true)
    return max(a / b, b / a)


def percentile(values: list[float], share: float) -> float:
    """The smallest value that at least this share of the values does not exceed."""
    ordered = sorted(values)
    return ordered[max(0, -(-int(share * 1000) * len(ordered) // 1000) - 1)]


def kind_of(operator: Operator) -> str:
    """Filters are selections on one relation, joins the inner equi-joins and the selections over products."""
    match operator:
        case Select(input=Relation()):
            return "filters"
        case Join(kind=JoinKind.INNER) | Select(input=Join(kind=JoinKind.INNER)):
            return "joins"
        case _:
            return "others"


def planner_estimate(engine: DuckEngine, sql: str) -> float | None:
    """The rows that DuckDB's planner expects of a query; None where its plan does not say."""
    try:
        plan: list[dict[str, Any]] = json.loads(engine.run(f"EXPLAIN (FORMAT json) {sql}").rows[0][1])
    except (EngineError, ValueError, IndexError):
        return None
    # Operators that keep every row may be silent: then the one below speaks for them.
    while len(plan) == 1:
        found = plan[0].get("extra_info", {}).get("Estimated Cardinality")
        if found is not None:
            return float(found)
        if plan[0]["name"] not in ("PROJECTION", "ORDER_BY"):
            return None
        plan = plan[0].get("children", [])
    return None


def errors() -> dict[str, list[tuple[float, float | None]]]:
    """By kind: our q-error and the planner's, for every operator that can be counted."""
    engine = DuckEngine.over_folder(tpch.folder(SCALE))
    catalog, _ = profile(engine, catalog_from_ddl(tpch.schema()))
    found: dict[str, list[tuple[float, float | None]]] = {}
    for text in tpch.queries().values():
        formulation = read_sql(text, catalog)
        counts, _ = measure(formulation, engine)
        sizes = size(formulation, catalog)
        for operator, true in counts.items():
            if isinstance(operator, Relation) or is_product(operator):
                continue
            theirs = planner_estimate(engine, write_query(operator))
            pair = (q_error(sizes[operator].rows, true), None if theirs is None else q_error(theirs, true))
            found.setdefault(kind_of(operator), []).append(pair)
    engine.close()
    return found


def run() -> list[Row]:
    rows = []
    found = errors()
    for kind in ("filters", "joins", "others"):
        # Side by side only where both say something.
        pairs = [(ours, theirs) for ours, theirs in found[kind] if theirs is not None]
        for label, share in (("median", 0.5), ("95 %", 0.95), ("99 %", 0.99)):
            name = f"sizes: q-error of {len(pairs)} {kind} of TPC-H, {label}, by the engine's planner"
            rows.append(Row(name, *(percentile([pair[side] for pair in pairs], share) for side in (0, 1)), ""))
    return rows
