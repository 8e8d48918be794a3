"""Planimeter's core: queries as relational algebra, independent of any screen.

    import core
    catalog = core.Catalog.from_ddl(ddl)
    a = core.read_sql(text, catalog)
    sizes = core.size(a, catalog)

Nothing heavy is imported before it is used.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from core.catalog.model import Catalog as _Catalog

if TYPE_CHECKING:
    from core.algebra.formulation import Formulation
    from core.algebra.operators import Operator
    from core.compare import Verdict
    from core.engine.duckdb_engine import DuckEngine
    from core.finding import Finding
    from core.rewrite import Offer, Refusal
    from core.rewrite.improve import Revision
    from core.size import Size

__all__ = ["Catalog", "compare", "findings", "improve", "measure", "read_sql", "rewrites", "size", "write_sql"]


class Catalog(_Catalog):
    """What is known of the base relations. Make one from DDL, a catalog file, data files, or an engine."""

    @classmethod
    def from_ddl(cls, ddl: str, dialect: str = "duckdb") -> Catalog:
        """From CREATE TABLE statements. Raises `core.catalog.ddl.CatalogError`."""
        from core.catalog.ddl import catalog_from_ddl

        return cls(catalog_from_ddl(ddl, dialect).relations)

    @classmethod
    def load(cls, path: str | Path) -> Catalog:
        """From a catalog file (TOML). Raises `core.catalog.ddl.CatalogError`."""
        from core.catalog.files import load_catalog

        return cls(load_catalog(path).relations)

    @classmethod
    def from_files(cls, files: Mapping[str, str | Path], declared: _Catalog | None = None) -> Catalog:
        """From Parquet, CSV and JSON files by relation name, profiled. `declared` adds keys and other constraints."""
        from core.engine.duckdb_engine import DuckEngine

        engine = DuckEngine.over_files(files)
        try:
            return cls.from_engine(engine, declared)
        finally:
            engine.close()

    @classmethod
    def from_engine(cls, engine: DuckEngine, declared: _Catalog | None = None) -> Catalog:
        """From all relations of an engine, profiled. Declared constraints that the data breaks are left out."""
        from core.engine.profile import profile

        return cls(profile(engine, declared)[0].relations)

    def save(self, path: str | Path) -> None:
        """Writes the catalog file."""
        from core.catalog.files import save_catalog

        save_catalog(self, path)


def read_sql(text: str, catalog: _Catalog | None = None, dialect: str = "duckdb") -> Formulation:
    """The formulation that a query means. Raises `core.language.diagnostic.ReadError` with everything found wrong."""
    from core.language.sql.read import read_sql as read

    return read(text, catalog, dialect)


def write_sql(formulation: Formulation, dialect: str | None = None) -> str:
    """SQL for a formulation, in any dialect of sqlglot (default: the one it was read in)."""
    from core.language.sql.write import write_sql as write

    return write(formulation, dialect)


def size(
    formulation: Formulation, catalog: _Catalog, measured: Mapping[Operator, int] | None = None
) -> dict[Operator, Size]:
    """Per operator: rows, low, high, bytes, evidence, derivation."""
    from core.size import size as sizes

    return sizes(formulation, catalog, measured)


def rewrites(formulation: Formulation, operator: Operator, catalog: _Catalog) -> list[Offer | Refusal]:
    """What is offered at an operator, and what is refused and why."""
    from core.rewrite import rewrites as answers

    return answers(formulation, operator, catalog)


def improve(formulation: Formulation, catalog: _Catalog, seconds: float = 5.0) -> list[Revision]:
    """The best chain of rewrites found by total rows; empty where none pays."""
    from core.rewrite.improve import improve as search

    return search(formulation, catalog, seconds)


def compare(a: Formulation, b: Formulation, catalog: _Catalog, seconds: float = 10.0) -> Verdict:
    """Equal (proved), different (with a witness), or no difference found."""
    from core.compare import compare as judge

    return judge(a, b, catalog, seconds)


def findings(formulation: Formulation, catalog: _Catalog) -> list[Finding]:
    """Defects and dangers, the most work first."""
    from core.finding import findings as find

    return find(formulation, catalog, size(formulation, catalog))


def measure(
    formulation: Formulation,
    engine: DuckEngine,
    progress: Callable[[float, str], None] | None = None,
    operators: Iterable[Any] | None = None,
) -> dict[Operator, int]:
    """Exact counts of rows by operator, read-only; what cannot be counted alone is left out."""
    from core.engine.measure import measure as count

    return count(formulation, engine, progress, operators=operators)[0]
