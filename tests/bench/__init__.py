"""Benchmarks, started with `make bench`: each sets a figure beside one that it is to be judged by."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import NamedTuple


class Row(NamedTuple):
    """One line of the table: ours and the reference, in the same unit."""

    name: str
    figure: float
    reference: float
    unit: str = "ms"


def milliseconds(work: Callable[[], object], times: int = 5) -> float:
    """The least time of several runs: what else the machine does only ever adds."""
    least = float("inf")
    for _ in range(times):
        start = time.perf_counter()
        work()
        least = min(least, time.perf_counter() - start)
    return least * 1000
