"""The search for a witness: data on which two formulations differ, shrunk until nothing can be taken away."""

from __future__ import annotations

import random
import threading
import time
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime
from decimal import Decimal
from typing import Any

from core.algebra.formulation import Formulation
from core.algebra.functions import ORDER_SENSITIVE, RANKING
from core.algebra.graph import scalars
from core.algebra.operators import Limit, Relation
from core.algebra.scalars import Aggregate, Frame, walk
from core.catalog.ddl import in_reference_order
from core.catalog.model import Catalog, RelationFacts
from core.compare.instances import Data, Pools, obeys, random_instance, schema_of
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.instance import create_instance, instance_sql, table_scripts, value_sql
from core.language.sql.write import write_sql


@dataclass(frozen=True, slots=True)
class Witness:
    """Data on which two formulations differ: rows by relation, both results, and the rows that only one of them has."""

    catalog: Catalog
    data: Data
    columns: tuple[str, ...]
    result_a: tuple[tuple[Any, ...], ...]
    result_b: tuple[tuple[Any, ...], ...]
    only_a: tuple[tuple[Any, ...], ...]
    only_b: tuple[tuple[Any, ...], ...]

    def sql(self) -> str:
        """A script that recreates the data."""
        return instance_sql(self.catalog, self.data)

    @property
    def rows(self) -> int:
        return sum(len(rows) for rows in self.data.values())


@dataclass(frozen=True, slots=True)
class Search:
    """What a search found, and how hard it looked. `broken` says why a side does not run at all."""

    witness: Witness | None
    instances: int
    most_rows: int
    seconds: float
    notes: tuple[str, ...] = ()
    broken: str = ""


def statement(formulation: Formulation) -> str:
    """What is run for a formulation: its own text where that is still its text, else the text written from it."""
    if formulation.text and not formulation.rewritten and formulation.dialect == "duckdb":
        return formulation.text.strip().rstrip(";")
    return write_sql(formulation, "duckdb")


def order_sensitive(formulation: Formulation) -> bool:
    """Whether the result may depend on the order in which rows happen to come."""
    for operator in formulation.operators():
        if isinstance(operator, Limit):
            return True
        for node in walk(*scalars(operator)):
            if isinstance(node, Frame) and node.unit.lower() == "rows":
                return True
            if isinstance(node, Aggregate) and node.name in (
                ORDER_SENSITIVE | RANKING | {"lag", "lead", "first_value", "last_value", "nth_value", "mode"}
            ):
                return True
    return False


class Trials:
    """Both statements over one set of tables that is filled anew for each trial."""

    def __init__(self, a: Formulation, b: Formulation, catalog: Catalog) -> None:
        self.catalog, self.notes = schema_of((a, b), catalog)
        self.order: list[RelationFacts] = in_reference_order(self.catalog)
        self.read = {o.name.lower() for f in (a, b) for o in f.operators() if isinstance(o, Relation)}
        found = {name: self.catalog.relation(name) for name in self.read}
        wanted = {name if facts is None else facts.name.lower() for name, facts in found.items()}
        # What only foreign keys lead to is looked at by no statement; the engine is needed for its CHECKs alone.
        self.filled = [facts for facts in self.order if facts.name.lower() in wanted or facts.checks]
        self.statements = (statement(a), statement(b))
        self.shaky = order_sensitive(a) or order_sensitive(b)
        self.engine = DuckEngine(memory_limit="1GB", threads=1)
        # Keys are kept by the generator; only CHECKs need the engine.
        self.engine.load(table_scripts(self.catalog))
        self.columns: tuple[str, ...] = ()

    def check(self, names: tuple[str, str] = ("A", "B")) -> str:
        """Why a side does not run at all, or an empty string."""
        for i, sql in enumerate(self.statements):
            try:
                shown = self.engine.run(sql).names
                self.columns = self.columns or shown
            except EngineError as error:
                return f"{names[i]} does not run: {str(error).splitlines()[0]}"
        return ""

    def fill(self, data: Data) -> bool:
        """Loads an instance; False where it breaks a CHECK."""
        try:
            for facts in self.filled:
                name = facts.name.lower()
                self.engine.run(f"DELETE FROM {facts.name}")
                rows = data.get(name)
                if rows:
                    listed = ", ".join("(" + ", ".join(value_sql(v) for v in row) + ")" for row in rows)
                    self.engine.run(f"INSERT INTO {facts.name} VALUES {listed}")
        except EngineError:
            return False
        return True

    def results(self, data: Data) -> tuple[list[tuple[Any, ...]], list[tuple[Any, ...]]] | None:
        """Both results, or None where the data is not admitted or a side stops with an error on it."""
        if not self.fill(data):
            return None
        return both(self.engine, self.statements)

    def differs(self, data: Data) -> bool:
        """Whether the two differ as bags, whatever order the rows come in."""
        found = self.results(data)
        if found is None or bag(found[0]) == bag(found[1]):
            return False
        if not self.shaky:
            return True
        first = (bag(found[0]), bag(found[1]))
        rng = random.Random(1)
        for _ in range(6):
            shuffled = {name: rng.sample(rows, len(rows)) for name, rows in data.items()}
            again = self.results(shuffled)
            if again is None or (bag(again[0]), bag(again[1])) != first:
                return False
        return True


def both(engine: DuckEngine, statements: tuple[str, str]) -> tuple[list[tuple[Any, ...]], list[tuple[Any, ...]]] | None:
    """Both results in one transaction, so that now() is the same moment; None where a side stops with an error."""
    engine.run("BEGIN")
    try:
        return engine.run(statements[0]).rows, engine.run(statements[1]).rows
    except EngineError:
        return None
    finally:
        engine.run("ROLLBACK")


def bag(rows: Sequence[tuple[Any, ...]]) -> Counter[tuple[Any, ...]]:
    return Counter(tuple(_plain(value) for value in row) for row in rows)


def _plain(value: Any) -> Any:
    """Values as they compare: floats to nine digits, numbers of one value alike, lists and structs by their text."""
    if isinstance(value, float):
        # What is left of a cancellation, such as 0.1 + 0.2 - 0.3, is no difference.
        return "nan" if value != value else 0.0 if abs(value) < 1e-9 else float(f"{value:.9g}")
    if isinstance(value, (list, dict, set)):
        return repr(value)
    return value


def search(
    a: Formulation,
    b: Formulation,
    catalog: Catalog,
    seconds: float,
    cancel: threading.Event | None = None,
    seed: int = 1,
    names: tuple[str, str] = ("A", "B"),
) -> Search:
    """Looks for a witness for so many seconds. The instances grow slowly: small ones are read more easily."""
    started = time.monotonic()
    trials = Trials(a, b, catalog)
    try:
        problem = trials.check(names)
        if problem:
            return Search(None, 0, 0, 0.0, tuple(trials.notes), problem)
        rng, pools = random.Random(seed), Pools((a, b))
        count, most = 0, 0
        while time.monotonic() - started < seconds and not (cancel is not None and cancel.is_set()):
            size = 2 + min(4, count // 150)
            data = random_instance(rng, trials.order, pools, size)
            count, most = count + 1, max(most, size)
            if trials.differs(data):
                small = shrink(trials, data, max(2.0, seconds - (time.monotonic() - started)))
                found = _confirmed(trials, small)
                if found is not None:
                    return Search(found, count, most, time.monotonic() - started, tuple(trials.notes))
        return Search(None, count, most, time.monotonic() - started, tuple(trials.notes))
    finally:
        trials.engine.close()


def shrink(trials: Trials, data: Data, seconds: float) -> Data:
    """Takes rows away and makes values simpler while the two still differ and every constraint is kept."""
    ends = time.monotonic() + seconds

    def good(candidate: Data) -> bool:
        return obeys(trials.order, candidate) and trials.differs(candidate)

    current = {name: list(rows) for name, rows in data.items()}
    changed = True
    while changed and time.monotonic() < ends:
        changed = False
        for name in list(current):
            for i in range(len(current[name]) - 1, -1, -1):
                candidate = {**current, name: current[name][:i] + current[name][i + 1 :]}
                if good(candidate):
                    current, changed = candidate, True
        for name in list(current):
            for i, row in enumerate(current[name]):
                for j, value in enumerate(row):
                    for simple in _simpler(value):
                        new = (*current[name][i][:j], simple, *current[name][i][j + 1 :])
                        candidate = {**current, name: [*current[name][:i], new, *current[name][i + 1 :]]}
                        if good(candidate):
                            current, changed = candidate, True
                            break
    return current


def _simpler(value: Any) -> list[Any]:
    """Values that a reader would rather see, simplest first."""
    plain: list[Any] = []
    if isinstance(value, bool) or value is None:
        return plain
    if isinstance(value, int):
        plain = [0, 1, 2]
    elif isinstance(value, (Decimal, float)):
        plain = [type(value)(0), type(value)(1)]
    elif isinstance(value, str):
        plain = ["a", "b"]
    elif isinstance(value, datetime):
        plain = [datetime(2024, 1, 1)]
    elif isinstance(value, date):
        plain = [date(2024, 1, 1)]
    return plain[: plain.index(value)] if value in plain else plain


def _confirmed(trials: Trials, data: Data) -> Witness | None:
    """The witness, run once more where every declared constraint is enforced."""
    try:
        engine = create_instance(trials.catalog, data)
    except EngineError:
        return None
    try:
        found = both(engine, trials.statements)
    finally:
        engine.close()
    if found is None:
        return None
    a, b = found
    first, second = bag(a), bag(b)
    if first == second:
        return None
    shown = {name: rows for name, rows in data.items() if rows or name in trials.read}
    return Witness(
        trials.catalog,
        shown,
        trials.columns,
        tuple(a),
        tuple(b),
        tuple((first - second).elements()),
        tuple((second - first).elements()),
    )
