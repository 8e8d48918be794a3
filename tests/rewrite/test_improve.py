"""The search: every chain keeps the bag and lowers the rows the engine counts, and it ends when it is told to."""

from __future__ import annotations

import itertools
import threading
from collections import Counter

import pytest

from core.algebra.formulation import Formulation
from core.catalog.ddl import catalog_from_ddl
from core.engine.duckdb_engine import DuckEngine
from core.engine.profile import profile
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql
from core.rewrite import improve as module
from core.rewrite.improve import Revision, improve, total_rows
from core.size import size
from tests.data import demo, tpch
from tests.finding.ground import bag, bag_of, ground, measured_rows

# Queries whose fault costs rows: the share of the measured rows that may remain.
MENDED = {
    "01-late-parcels-by-depot.a": 0.01,
    "04-parcels-with-large-claims": 0.02,
    "07-express-scans-by-depot": 0.15,
    "09-last-seen": 0.001,
    "11-parcels-of-prime-merchants": 0.5,
    "13-depots-above-their-region": 0.2,
    "14-stops-per-driver": 0.7,
    "16-runs-per-route.a": 0.01,
    "19-scans-by-region": 0.4,
}


def checked(chain: list[Revision], first: Formulation) -> None:
    """Totals meet from step to step, and none but a tidying step at the end leaves them as they are."""
    catalog = ground()[0]
    cost = total_rows(first, size(first, catalog))
    for step in chain:
        assert step.before == pytest.approx(cost)
        cost = total_rows(step.formulation, size(step.formulation, catalog))
        assert step.after == pytest.approx(cost)
    if chain:
        assert chain[-1].after < chain[0].before


@pytest.mark.parametrize("name", sorted(demo.queries()))
def test_a_chain_keeps_the_bag_and_lowers_the_rows(name: str) -> None:
    text = demo.queries()[name]
    first = read_sql(text, ground()[0])
    chain = improve(first, ground()[0], seconds=5)
    checked(chain, first)
    assert all(bag(step.formulation) == bag_of(text) for step in chain)
    last = chain[-1].formulation if chain else first
    assert measured_rows(last) <= measured_rows(first) * MENDED.get(name, 1.0)


def test_it_stops_when_the_time_is_over(monkeypatch: pytest.MonkeyPatch) -> None:
    """By a clock that moves a tenth of a second whenever it is looked at."""
    ticks = itertools.count()
    monkeypatch.setattr(module.time, "monotonic", lambda: next(ticks) / 10)
    first = read_sql(demo.queries()["02-claims-per-depot-and-route"], ground()[0])
    checked(improve(first, ground()[0], seconds=5), first)
    assert next(ticks) < 60


def test_it_stops_when_it_is_cancelled() -> None:
    cancel = threading.Event()
    first = read_sql(demo.queries()["07-express-scans-by-depot"], ground()[0])
    chain = improve(first, ground()[0], 5, cancel, lambda share, words: cancel.set())
    assert 0 < len(chain) < len(improve(first, ground()[0], 5))
    cancel.set()
    assert improve(first, ground()[0], 5, cancel) == []


def test_what_runs_for_every_outer_row_counts_as_often() -> None:
    catalog = ground()[0]
    text = (
        "select c.claim_id, (select max(s.scanned_at) from scans s where s.parcel_id = c.parcel_id) as m from claims c"
    )
    first = read_sql(text, catalog)
    sizes = size(first, catalog)
    assert total_rows(first, sizes) > 1326 * 301_074


@pytest.mark.soak
@pytest.mark.parametrize("number", range(1, 23))
def test_chains_for_tpch_keep_the_bag(number: int) -> None:
    engine = DuckEngine.over_folder(tpch.folder(0.01))
    catalog = profile(engine, catalog_from_ddl(tpch.schema()))[0]
    text = tpch.queries()[f"q{number:02}"]
    expected = Counter(map(repr, engine.run(text).rows))
    first = read_sql(text, catalog)
    for step in improve(first, catalog, seconds=5):
        assert Counter(map(repr, engine.run(write_sql(step.formulation)).rows)) == expected, step.offer.rule.name
    engine.close()
