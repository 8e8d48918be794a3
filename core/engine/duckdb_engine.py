"""The embedded engine: DuckDB over files, a database file, or memory.

User data is never written: files are read through views, database files are attached read-only, and once everything is
in view the configuration is locked and no further file can be opened.
"""

from __future__ import annotations

import threading
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

READERS = {
    ".parquet": "read_parquet",
    ".csv": "read_csv",
    ".tsv": "read_csv",
    ".json": "read_json",
    ".jsonl": "read_json",
    ".ndjson": "read_json",
}
DATABASES = (".duckdb", ".db", ".ddb")


class EngineError(RuntimeError):
    """What the engine refused or could not do, in its own words or ours."""


class Cancelled(EngineError):
    """The work was stopped on request, or ran out of time."""


@dataclass(frozen=True, slots=True)
class Rows:
    """A result: column names, the engine's type names, and the rows."""

    names: tuple[str, ...]
    types: tuple[str, ...]
    rows: list[tuple[Any, ...]]


def quoted(name: str) -> str:
    """A name as an SQL identifier."""
    return '"' + name.replace('"', '""') + '"'


def literal(value: object) -> str:
    """A text as an SQL string literal."""
    return "'" + str(value).replace("'", "''") + "'"


class DuckEngine:
    """One connection. Use it from one thread at a time; `cancel` may come from any."""

    def __init__(self, memory_limit: str = "4GB", threads: int | None = None) -> None:
        import duckdb

        settings: dict[str, Any] = {
            "memory_limit": memory_limit,
            "autoinstall_known_extensions": False,
            "autoload_known_extensions": False,
        }
        if threads is not None:
            settings["threads"] = threads
        self._connection = duckdb.connect(":memory:", config=settings)
        self._error = duckdb.Error
        self._relations: list[str] = []
        self.locations: dict[str, str] = {}
        self.source = "DuckDB"

    @classmethod
    def over_files(cls, files: Mapping[str, str | Path], **options: Any) -> DuckEngine:
        """Relations by name over Parquet, CSV and JSON files (or globs of them)."""
        engine = cls(**options)
        for name, path in files.items():
            engine._view(name, str(path))
        engine._lock()
        return engine

    @classmethod
    def over_folder(cls, folder: str | Path, **options: Any) -> DuckEngine:
        """Every data file of a folder, named after its stem."""
        root = Path(folder)
        if not root.is_dir():
            raise EngineError(f"there is no folder {folder}")
        files = {path.stem: path for path in sorted(root.iterdir()) if path.suffix.lower() in READERS}
        if not files:
            raise EngineError(f"no Parquet, CSV or JSON file in {folder}")
        return cls.over_files(files, **options)

    @classmethod
    def over_database(cls, path: str | Path, **options: Any) -> DuckEngine:
        """The tables of a DuckDB file, attached read-only."""
        if not Path(path).is_file():
            raise EngineError(f"there is no database file {path}")
        engine = cls(**options)
        engine.run(f"ATTACH {literal(path)} AS source (READ_ONLY)")
        engine.run("USE source")
        for (name,) in engine.run("SELECT table_name FROM duckdb_tables() WHERE database_name = 'source'").rows:
            engine._relations.append(name)
            engine.locations[name] = str(path)
        engine._lock()
        return engine

    @classmethod
    def over(cls, source: str | Path, **options: Any) -> DuckEngine:
        """A folder, a database file, or a single data file."""
        path = Path(source)
        if path.is_dir():
            return cls.over_folder(path, **options)
        if path.suffix.lower() in DATABASES:
            return cls.over_database(path, **options)
        if path.suffix.lower() in READERS:
            return cls.over_files({path.stem: path}, **options)
        raise EngineError(f"{source} is neither a folder, a DuckDB file nor a Parquet, CSV or JSON file")

    def _view(self, name: str, path: str) -> None:
        suffix = Path(path).suffix.lower()
        if suffix not in READERS:
            raise EngineError(f"{path}: files of this kind are not read (known: {', '.join(READERS)})")
        if "*" not in path and not Path(path).is_file():
            raise EngineError(f"there is no file {path} (for relation {name})")
        self.run(f"CREATE VIEW {quoted(name)} AS SELECT * FROM {READERS[suffix]}({literal(path)})")
        self._relations.append(name)
        self.locations[name] = path

    def _lock(self) -> None:
        """From here on no file outside the given ones can be read and nothing can be reconfigured."""
        paths = ", ".join(literal(path) for path in self.locations.values())
        if paths and not any("*" in path for path in self.locations.values()):
            self.run(f"SET allowed_paths = [{paths}]")
            self.run("SET enable_external_access = false")
        self.run("SET lock_configuration = true")

    def relations(self) -> list[str]:
        return list(self._relations)

    def run(self, sql: str, parameters: Sequence[Any] | None = None) -> Rows:
        """Runs one statement and fetches everything. Raises `EngineError` with the engine's message."""
        try:
            cursor = self._connection.execute(sql, parameters)
            description = cursor.description or []
            rows = cursor.fetchall() if description else []
        except self._error as error:
            if type(error).__name__ == "InterruptException":
                raise Cancelled("stopped") from error
            raise EngineError(str(error)) from error
        except RuntimeError as error:
            raise Cancelled("stopped") from error
        return Rows(tuple(d[0] for d in description), tuple(str(d[1]) for d in description), rows)

    def run_within(self, sql: str, seconds: float) -> Rows:
        """As `run`, but stopped when the time is up."""
        timer = threading.Timer(seconds, self.cancel)
        timer.start()
        try:
            return self.run(sql)
        finally:
            timer.cancel()

    def value(self, sql: str) -> Any:
        """The single value of a query."""
        return self.run(sql).rows[0][0]

    def cancel(self) -> None:
        """Stops what runs; the running call raises `Cancelled`."""
        self._connection.interrupt()

    def close(self) -> None:
        self._connection.close()

    def columns(self, name: str) -> list[tuple[str, str]]:
        """Names and type names of a relation's columns."""
        return [(row[0], row[1]) for row in self.run(f"DESCRIBE {quoted(name)}").rows]

    def load(self, statements: Iterable[str]) -> None:
        """Runs statements against an in-memory database (for instances of our own making)."""
        for statement in statements:
            self.run(statement)
