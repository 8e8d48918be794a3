"""Small instances of a catalog's relations, made in memory: for witnesses and tests."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any

from core.catalog.ddl import ddl_of, in_reference_order
from core.catalog.model import Catalog, RelationFacts, catalog_of
from core.engine.duckdb_engine import DuckEngine, quoted

Instance = Mapping[str, Sequence[tuple[Any, ...]]]
"""Rows by lower-case relation name, values in the order of the catalog's attributes, NULL as None."""


def value_sql(value: object) -> str:
    """A value as SQL."""
    if value is None:
        return "NULL"
    if isinstance(value, bool):
        return "TRUE" if value else "FALSE"
    if isinstance(value, (int, Decimal)):
        return str(value)
    if isinstance(value, float):
        return f"CAST('{value!r}' AS DOUBLE)"
    if isinstance(value, datetime):
        return f"TIMESTAMP '{value.isoformat(sep=' ')}'"
    if isinstance(value, date):
        return f"DATE '{value.isoformat()}'"
    if isinstance(value, time):
        return f"TIME '{value.isoformat()}'"
    if isinstance(value, timedelta):
        return f"INTERVAL '{value.total_seconds()} seconds'"
    return "'" + str(value).replace("'", "''") + "'"


def instance_sql(catalog: Catalog, data: Instance) -> str:
    """A script that recreates the instance: CREATE TABLE with all constraints, then INSERT."""
    return "\n".join([ddl_of(catalog), *_inserts(catalog, data)]) + "\n"


def _inserts(catalog: Catalog, data: Instance) -> list[str]:
    statements = []
    for facts in in_reference_order(catalog):
        table = ".".join(quoted(part) if not part.isidentifier() else part for part in facts.name.split("."))
        for rows in _batches(facts, data.get(facts.name.lower(), ())):
            listed = ",\n  ".join("(" + ", ".join(value_sql(value) for value in row) + ")" for row in rows)
            statements.append(f"INSERT INTO {table} VALUES\n  {listed};")
    return statements


def _batches(facts: RelationFacts, rows: Sequence[tuple[Any, ...]]) -> list[Sequence[tuple[Any, ...]]]:
    """The rows in the order they can be inserted. DuckDB looks for the row that a row of the same relation refers to
    before the statement, so such rows come one by one, those referred to first."""
    own = [key for key in facts.foreign_keys if key.relation.lower() == facts.name.lower()]
    if not own or not rows:
        return [rows] if rows else []
    place = {a.name.lower(): i for i, a in enumerate(facts.attributes)}

    def waits(row: tuple[Any, ...], left: list[tuple[Any, ...]]) -> bool:
        for key in own:
            wanted = tuple(row[place[n.lower()]] for n in key.attributes)
            there = [tuple(other[place[n.lower()]] for n in key.target) for other in left if other is not row]
            if None not in wanted and wanted in there:
                return True
        return False

    left, ordered = list(rows), []
    while left:
        ready = next((row for row in left if not waits(row, left)), left[0])
        left.remove(ready)
        ordered.append([ready])
    return list(ordered)


def table_scripts(catalog: Catalog) -> list[str]:
    """CREATE TABLE statements with types and CHECKs only, for data whose keys are kept by whoever makes it."""
    loose = catalog_of(
        replace(
            facts,
            primary=None,
            unique=(),
            foreign_keys=(),
            attributes=tuple(replace(a, nullable=True) for a in facts.attributes),
        )
        for facts in catalog
    )
    return [statement for statement in ddl_of(loose).split(";\n") if statement.strip()]


def create_instance(catalog: Catalog, data: Instance) -> DuckEngine:
    """The instance in an engine of its own, with every constraint enforced: `EngineError` where the data break one."""
    engine = DuckEngine(memory_limit="1GB", threads=1)
    engine.load(statement for statement in ddl_of(catalog).split(";\n") if statement.strip())
    engine.load(_inserts(catalog, data))
    return engine
