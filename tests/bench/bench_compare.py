"""Verdicts over the pairs of the tests: shares proved and refuted, the median time, and instances a second."""

from __future__ import annotations

import time
from statistics import median

from core.algebra.formulation import Formulation
from core.compare import Kind, compare
from core.compare.witness import search
from core.language.sql.read import read_sql
from tests.bench import Row
from tests.compare.test_pairs import PAIRS, SCHEMAS, Pair


def run() -> list[Row]:
    seconds: list[float] = []
    right = {"equal": 0, "different": 0}
    counted = [pair for pair in PAIRS if not pair.rare]
    wrong = 0
    for pair in counted:
        started = time.perf_counter()
        kind = compare(*_read(pair), SCHEMAS[pair.file], 10.0 if pair.kind == "different" else 1.0).kind
        seconds.append(time.perf_counter() - started)
        right[pair.kind] += kind.value == pair.kind
        wrong += kind is not Kind.NO_DIFFERENCE and kind.value != pair.kind
    of = {kind: sum(pair.kind == kind for pair in counted) for kind in right}
    same = next(pair for pair in counted if pair.kind == "equal" and pair.file == "pairs")
    found = search(*_read(same), SCHEMAS[same.file], 3.0)
    return [
        Row("compare: wrong verdicts, by none", wrong, 0, "pairs"),
        Row("compare: share of equal pairs proved, by 0.85", right["equal"] / of["equal"], 0.85, "share"),
        Row("compare: share of different pairs refuted, by 0.98", right["different"] / of["different"], 0.98, "share"),
        Row("compare: median seconds a pair, by 1", median(seconds), 1.0, "s"),
        Row("compare: instances a second, by 20,000", found.instances / found.seconds, 20_000, "1/s"),
    ]


def _read(pair: Pair) -> tuple[Formulation, Formulation]:
    return read_sql(pair.a, SCHEMAS[pair.file]), read_sql(pair.b, SCHEMAS[pair.file])
