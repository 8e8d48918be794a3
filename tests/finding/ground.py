"""The demo's data, its catalog as declared and profiled, and what can be asked of both."""

from __future__ import annotations

from collections import Counter
from functools import cache

from core.algebra.formulation import Formulation
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog
from core.engine.duckdb_engine import DuckEngine
from core.engine.measure import measure
from core.engine.profile import profile
from core.finding import Finding, findings
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql
from core.rewrite.improve import total_rows
from core.size import size
from tests.data import demo


@cache
def ground() -> tuple[Catalog, DuckEngine]:
    engine = DuckEngine.over_folder(demo.folder(1.0))
    return profile(engine, catalog_from_ddl(demo.schema()))[0], engine


@cache
def found(text: str) -> tuple[Finding, ...]:
    catalog, _ = ground()
    formulation = read_sql(text, catalog)
    return tuple(findings(formulation, catalog, size(formulation, catalog)))


@cache
def bag_of(text: str) -> Counter[str]:
    """What a text gives on the demo's data."""
    return Counter(map(repr, ground()[1].run(text).rows))


def bag(formulation: Formulation) -> Counter[str]:
    return bag_of(write_sql(formulation))


def measured_rows(formulation: Formulation) -> float:
    """The total of rows by the engine's counts."""
    catalog, engine = ground()
    return total_rows(formulation, size(formulation, catalog, measure(formulation, engine)[0]))
