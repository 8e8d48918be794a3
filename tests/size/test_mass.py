"""Random queries over random data: ranges hold, estimates stay inside them, derivations compute to what they say."""

from __future__ import annotations

import random
from functools import cache

import pytest

from core.algebra.graph import attributes, free
from core.algebra.notation import line
from core.algebra.operators import Relation
from core.catalog.ddl import catalog_from_ddl
from core.catalog.model import Catalog
from core.engine.duckdb_engine import DuckEngine
from core.engine.instance import create_instance
from core.engine.measure import measure
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.size import size
from tests.data import demo, tpch
from tests.derive.probe import runs
from tests.generate.queries import SCHEMA, QueryMaker, random_data
from tests.size.checks import faults, profiled, worn

CATALOG = catalog_from_ddl(SCHEMA)


def check(seeds: range, queries: int) -> int:
    """How many operators were compared with their true counts."""
    compared = 0
    for seed in seeds:
        rng = random.Random(seed)
        data = random_data(rng, rng.choice([2, 6, 8]))
        engine = create_instance(CATALOG, data)
        full = profiled(CATALOG, data)
        for number in range(queries):
            text = QueryMaker(rng, 2).query()
            formulation = read_sql(text, CATALOG)
            catalogs = [full, worn(full, rng)]
            sizes = [size(formulation, catalog) for catalog in catalogs]
            for operator in formulation.operators():
                counts = [len(rows) for rows in runs(operator, engine, rng, outer_rows=2)]
                compared += len(counts)
                for found in sizes:
                    wrong = [fault for true in counts or [None] for fault in faults(found[operator], true)]
                    assert not wrong, f"seed {seed}, query {number}: {text}\n{line(operator)}\n" + "\n".join(wrong)
        engine.close()
    return compared


def test_ranges_hold_and_derivations_compute() -> None:
    assert check(range(40), 4) > 900


@pytest.mark.soak
def test_ranges_hold_and_derivations_compute_on_thousands() -> None:
    check(range(5000, 5700), 6)


@cache
def profiled_files(name: str) -> tuple[Catalog, DuckEngine]:
    engine = DuckEngine.over_folder(tpch.folder(0.01) if name == "tpch" else demo.folder(0.05))
    source = tpch.schema() if name == "tpch" else demo.schema()
    return profile(engine, catalog_from_ddl(source))[0], engine


CASES = [("tpch", name, text) for name, text in tpch.queries().items()]
CASES += [("demo", name, text) for name, text in demo.queries().items()]


@pytest.mark.parametrize(("source", "name", "text"), CASES, ids=[f"{s}-{n}" for s, n, _ in CASES])
def test_real_profiles(source: str, name: str, text: str) -> None:
    """Histograms, composite keys, correlated parts: ranges hold and every line computes, on both sets of queries."""
    catalog, engine = profiled_files(source)
    formulation = read_sql(text, catalog)
    counts, _ = measure(formulation, engine, seconds=20)
    sizes = size(formulation, catalog, counts)
    for operator in formulation.operators():
        true = counts.get(operator)
        wrong = faults(sizes[operator], true)
        assert not wrong, f"{line(operator)}\n" + "\n".join(wrong)
        assert sizes[operator].measured == true and (free(operator) == frozenset() or true is None)
        assert sizes[operator].best == (sizes[operator].rows if true is None else float(true))
        if isinstance(operator, Relation):
            assert sizes[operator].rows == true == sizes[operator].low == sizes[operator].high
        assert attributes(operator) == () or sizes[operator].bytes > 0 or sizes[operator].rows == 0
