"""Profiles: what the data itself says of its relations, as catalog facts with the evidence *profiled*."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterable
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

from core.algebra.types import Family, Type, type_named
from core.catalog.model import (
    AttributeFacts,
    Catalog,
    Evidence,
    HeavyHitter,
    Joint,
    RelationFacts,
    Statistics,
    catalog_of,
)
from core.engine.duckdb_engine import Cancelled, DuckEngine, quoted

HEAVY = 20
BUCKETS = 100
_EXACT = frozenset({"distinct", "nulls", "low", "high", "heavy", "largest_group"})
_ORDERED = (
    Family.INTEGER,
    Family.DECIMAL,
    Family.FLOAT,
    Family.TEXT,
    Family.DATE,
    Family.TIMESTAMP,
    Family.TIME,
    Family.BOOLEAN,
)
Progress = Callable[[float, str], None]


def profile(
    engine: DuckEngine,
    declared: Catalog | None = None,
    progress: Progress | None = None,
    cancel: threading.Event | None = None,
    today: date | None = None,
) -> tuple[Catalog, list[str]]:
    """A catalog of the engine's relations, and notes on declared constraints that the data breaks (those are dropped).

    Figures are exact but for histograms and widths. Raises `Cancelled` soon after `cancel` is set.
    """
    notes: list[str] = []
    found: list[RelationFacts] = []
    names = engine.relations()
    total = sum(len(engine.columns(name)) + 1 for name in names)
    done = 0
    for name in names:
        facts = None if declared is None else declared.relation(name)
        relation = _shape(engine, name, facts, today or date.today())
        done = _step(done, total, name, progress, cancel)
        attributes = []
        for attribute in relation.attributes:
            attributes.append(_attribute(engine, relation, attribute))
            done = _step(done, total, f"{name}.{attribute.name}", progress, cancel)
        relation = replace(relation, attributes=tuple(attributes))
        found.append(_with_joints(engine, relation))
    catalog = catalog_of(_trusted(facts, found, engine, notes) for facts in found)
    return catalog, notes


def _step(done: int, total: int, what: str, progress: Progress | None, cancel: threading.Event | None) -> int:
    if cancel is not None and cancel.is_set():
        raise Cancelled("profiling was stopped")
    if progress is not None:
        progress(min(1.0, (done + 1) / max(1, total)), what)
    return done + 1


def _shape(engine: DuckEngine, name: str, declared: RelationFacts | None, today: date) -> RelationFacts:
    rows = int(engine.value(f"SELECT count(*) FROM {quoted(name)}"))
    attributes = []
    for column, kind in engine.columns(name):
        known = None if declared is None else declared.attribute(column)
        nullable = True if known is None else known.nullable
        attributes.append(AttributeFacts(column, type_named(kind), nullable))
    location = engine.locations.get(name, "")
    size = Path(location).stat().st_size if location and Path(location).is_file() else None
    base = declared if declared is not None else RelationFacts(name, ())
    return replace(
        base,
        name=name,
        attributes=tuple(attributes),
        rows=rows,
        rows_exact=True,
        rows_evidence=Evidence.PROFILED,
        bytes=size,
        source=Path(location).name if location else engine.source,
        as_of=today,
        location=location,
    )


def _attribute(engine: DuckEngine, relation: RelationFacts, attribute: AttributeFacts) -> AttributeFacts:
    column, table = quoted(attribute.name), quoted(relation.name)
    rows = relation.rows or 0
    if attribute.type.family not in _ORDERED:
        nulls = int(engine.value(f"SELECT count(*) - count({column}) FROM {table}"))
        exact = frozenset({"nulls"})
        known = Statistics(nulls=nulls, exact=exact, evidence=Evidence.PROFILED, source="profile", as_of=relation.as_of)
        return replace(attribute, statistics=known)
    counted = f"WITH counted AS MATERIALIZED (SELECT {column} AS v, count(*) AS n FROM {table} WHERE {column} IS NOT NULL GROUP BY 1) "
    distinct, present, low, high, largest = engine.run(
        counted + "SELECT count(*), coalesce(sum(n), 0), min(v), max(v), max(n) FROM counted"
    ).rows[0]
    top = engine.run(counted + f"SELECT v, n FROM counted ORDER BY n DESC, v LIMIT {HEAVY + 1}").rows
    heavy = _heavy(top, int(distinct), rows)
    bounds = _histogram(engine, column, table, heavy, int(distinct), attribute.type)
    statistics = Statistics(
        distinct=int(distinct),
        nulls=rows - int(present),
        low=low,
        high=high,
        heavy=heavy,
        histogram=bounds,
        width=_width(engine, column, table, attribute.type),
        largest_group=int(largest or 0),
        exact=_EXACT,
        evidence=Evidence.PROFILED,
        source="profile",
        as_of=relation.as_of,
    )
    return replace(attribute, statistics=statistics)


def _heavy(top: list[tuple[Any, ...]], distinct: int, rows: int) -> tuple[HeavyHitter, ...]:
    """All values where there are few, else those that occur clearly more often than the average."""
    if distinct <= HEAVY:
        return tuple(HeavyHitter(value, int(n)) for value, n in top)
    average = rows / max(1, distinct)
    return tuple(HeavyHitter(value, int(n)) for value, n in top[:HEAVY] if n > 1.25 * average and n > 1)


def _histogram(
    engine: DuckEngine, column: str, table: str, heavy: tuple[HeavyHitter, ...], distinct: int, type_: Type
) -> tuple[Any, ...]:
    """Bounds of equi-depth buckets over the values that are not heavy hitters."""
    if distinct <= len(heavy) or type_.family is Family.BOOLEAN:
        return ()
    shares = ", ".join(f"{i / BUCKETS:.4f}" for i in range(BUCKETS + 1))
    left_out = f" AND {column} NOT IN ({', '.join('?' for _ in heavy)})" if heavy else ""
    found = engine.run(
        f"SELECT quantile_disc({column}, [{shares}]) FROM {table} WHERE {column} IS NOT NULL{left_out}",
        [hitter.value for hitter in heavy],
    ).rows[0][0]
    return tuple(found or ())


_WIDTHS = {Family.BOOLEAN: 1.0, Family.DATE: 4.0, Family.TIME: 8.0, Family.TIMESTAMP: 8.0, Family.DECIMAL: 8.0}


def _width(engine: DuckEngine, column: str, table: str, type_: Type) -> float:
    if type_.family is Family.TEXT:
        return float(engine.value(f"SELECT coalesce(avg(strlen({column})), 0) FROM {table}"))
    from core.algebra.types import assumed_bytes

    return _WIDTHS.get(type_.family, float(assumed_bytes(type_)))


def _with_joints(engine: DuckEngine, relation: RelationFacts) -> RelationFacts:
    """Figures of the attribute groups that keys and foreign keys name."""
    groups = {tuple(names) for names in relation.keys if len(names) > 1}
    groups |= {key.attributes for key in relation.foreign_keys if len(key.attributes) > 1}
    joints = []
    for names in sorted(groups):
        columns = ", ".join(quoted(name) for name in names)
        present = " AND ".join(f"{quoted(name)} IS NOT NULL" for name in names)
        distinct, largest = engine.run(
            f"SELECT count(*), max(n) FROM (SELECT count(*) AS n FROM {quoted(relation.name)} WHERE {present} GROUP BY {columns})"
        ).rows[0]
        joints.append(Joint(names, int(distinct), int(largest or 0), True))
    return replace(relation, joint=tuple(joints))


def _trusted(
    facts: RelationFacts, relations: Iterable[RelationFacts], engine: DuckEngine, notes: list[str]
) -> RelationFacts:
    """Keeps of the declared constraints those that the data obeys."""
    attributes = []
    for attribute in facts.attributes:
        nulls = attribute.statistics.nulls if attribute.statistics is not None else None
        if not attribute.nullable and nulls:
            notes.append(f"{facts.name}.{attribute.name} is declared not null, but {nulls} rows hold NULL")
            attribute = replace(attribute, nullable=True)
        attributes.append(attribute)
    facts = replace(facts, attributes=tuple(attributes))
    primary, unique = facts.primary, []
    for names in facts.keys:
        if _is_unique(facts, names):
            if names != facts.primary:
                unique.append(names)
            continue
        notes.append(f"{facts.name} ({', '.join(names)}) is declared a key, but values repeat")
        if names == primary:
            primary = None
    by_name = {relation.name.lower(): relation for relation in relations}
    foreign = []
    for key in facts.foreign_keys:
        if key.relation.lower() not in by_name:
            foreign.append(key)
            continue
        lost = _dangling(engine, facts.name, key.attributes, key.relation, key.target)
        if lost:
            what = f"{facts.name} ({', '.join(key.attributes)})"
            notes.append(f"{what} is declared to refer to {key.relation}, but {lost} rows find no partner")
        else:
            foreign.append(key)
    return replace(facts, primary=primary, unique=tuple(unique), foreign_keys=tuple(foreign))


def _is_unique(facts: RelationFacts, names: tuple[str, ...]) -> bool:
    if len(names) == 1:
        attribute = facts.attribute(names[0])
        known = None if attribute is None else attribute.statistics
        return known is None or known.largest_group is None or known.largest_group <= 1
    joint = next((j for j in facts.joint if j.attributes == names), None)
    return joint is None or (joint.largest_group or 0) <= 1


def _dangling(engine: DuckEngine, name: str, mine: tuple[str, ...], target: str, theirs: tuple[str, ...]) -> int:
    pairs = " AND ".join(f"a.{quoted(m)} = b.{quoted(t)}" for m, t in zip(mine, theirs, strict=True))
    present = " AND ".join(f"a.{quoted(m)} IS NOT NULL" for m in mine)
    return int(
        engine.value(
            f"SELECT count(*) FROM {quoted(name)} a WHERE {present} AND NOT EXISTS (SELECT 1 FROM {quoted(target)} b WHERE {pairs})"
        )
    )
