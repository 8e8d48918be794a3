"""How far estimates are off: q-errors over every operator of the TPC-H queries, beside those of DuckDB's own planner.

The q-error is max(estimate/true, true/estimate), both floored at 1 (Moerkotte, Neumann, Steidl, PVLDB 2(1) 2009).
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any, NamedTuple

from core.algebra.operators import Join, JoinKind, Operator, Relation, Select
from core.catalog.ddl import catalog_from_ddl
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.measure import measure
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.language.sql.write import write_query
from core.size import size
from tests.data import tpch

SCALE = 0.01


class Row(NamedTuple):
    """One printed figure, and the reference beside it where there is one."""

    name: str
    figure: float
    reference: float | None = None

    @property
    def ratio(self) -> float | None:
        return None if not self.reference else self.figure / self.reference


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
    """The rows that DuckDB's planner expects of a query's topmost operator that says so."""
    try:
        plan = json.loads(engine.run(f"EXPLAIN (FORMAT json) {sql}").rows[0][1])
    except (EngineError, ValueError, IndexError):
        return None
    for node in _nodes(plan):
        found = node.get("extra_info", {}).get("Estimated Cardinality")
        if found is not None:
            return float(found)
    return None


def _nodes(plan: list[dict[str, Any]]) -> Iterator[dict[str, Any]]:
    pending = list(reversed(plan))
    while pending:
        node = pending.pop()
        yield node
        pending.extend(reversed(node.get("children", [])))


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
            if isinstance(operator, Relation):
                continue
            theirs = planner_estimate(engine, write_query(operator))
            pair = (q_error(sizes[operator].rows, true), None if theirs is None else q_error(theirs, true))
            found.setdefault(kind_of(operator), []).append(pair)
    engine.close()
    return found


def run() -> list[Row]:
    rows = []
    found = errors()
    found["all"] = [pair for pairs in found.values() for pair in pairs]
    for kind, pairs in found.items():
        ours, theirs = [a for a, _ in pairs], [b for _, b in pairs if b is not None]
        for label, share in (("median", 0.5), ("95 %", 0.95), ("99 %", 0.99)):
            name = f"q-error of {kind} ({len(ours)} operators), {label}"
            rows.append(Row(name, percentile(ours, share), percentile(theirs, share) if theirs else None))
    return rows


if __name__ == "__main__":
    for row in run():
        reference = "" if row.reference is None else f"   planner {row.reference:10.2f}"
        print(f"{row.name:55} {row.figure:10.2f}{reference}")
