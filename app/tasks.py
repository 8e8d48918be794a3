"""What runs beside the window: each task takes a flag to stop at and a way to report progress."""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from pathlib import Path

from core.algebra.formulation import Formulation
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.compare import Verdict, compare
from core.engine.duckdb_engine import DuckEngine
from core.engine.measure import measure
from core.engine.profile import profile
from core.rewrite.improve import Revision, improve

Report = Callable[[float, str], None]
Profiled = tuple[Catalog, list[str]]
Counted = tuple[dict[Operator, int], dict[Operator, str]]

MEASURE_SECONDS, IMPROVE_SECONDS, COMPARE_SECONDS = 20.0, 6.0, 10.0


def profiling(path: Path, declared: Catalog) -> Callable[[threading.Event, Report], Profiled]:
    """Profiles data; gives its catalog and notes on constraints that the data breaks."""

    def task(cancel: threading.Event, progress: Report) -> Profiled:
        engine = DuckEngine.over(path)
        try:
            return profile(engine, declared, progress, cancel)
        finally:
            engine.close()

    return task


def counting(data: str, formulations: Sequence[Formulation]) -> Callable[[threading.Event, Report], Counted]:
    """Counts the rows of every operator; gives the counts, and why an operator has none."""

    def task(cancel: threading.Event, progress: Report) -> Counted:
        engine = DuckEngine.over(data)
        counts: dict[Operator, int] = {}
        reasons: dict[Operator, str] = {}
        finished = threading.Event()

        def interrupt() -> None:
            while not finished.wait(0.05):
                if cancel.is_set():  # again and again: an interruption between two statements is lost
                    engine.cancel()

        watcher = threading.Thread(target=interrupt, name="measuring-interrupt", daemon=True)
        watcher.start()
        try:
            for i, formulation in enumerate(formulations):
                part = _part_of(progress, i, len(formulations))
                found, why = measure(formulation, engine, part, cancel, MEASURE_SECONDS)
                counts.update(found)
                reasons.update(why)
        finally:
            finished.set()
            watcher.join()
            engine.close()
        return counts, reasons

    return task


def _part_of(progress: Report, number: int, count: int) -> Report:
    """Progress of one of several tasks, as a part of them all."""
    return lambda share, text: progress((number + share) / count, text)


def improving(formulation: Formulation, catalog: Catalog) -> Callable[[threading.Event, Report], list[Revision]]:
    """Searches the cheapest chain of rewrites."""

    def task(cancel: threading.Event, progress: Report) -> list[Revision]:
        return improve(formulation, catalog, IMPROVE_SECONDS, cancel, progress)

    return task


def comparing(
    a: Formulation, b: Formulation, catalog: Catalog, names: tuple[str, str]
) -> Callable[[threading.Event, Report], Verdict]:
    """Tries to prove two formulations equal, then to show them different."""

    def task(cancel: threading.Event, progress: Report) -> Verdict:
        progress(0.0, "proving, then looking for a difference")
        return compare(a, b, catalog, COMPARE_SECONDS, cancel, names)

    return task
