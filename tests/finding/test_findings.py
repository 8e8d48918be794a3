"""Findings: the demo's planted faults are found, sound queries are left alone, and every cure is one."""

from __future__ import annotations

import pytest

from core.finding import KINDS
from core.language.sql.read import read_sql
from tests.data import demo
from tests.finding.ground import bag, bag_of, found, ground, measured_rows

# What assets/demo/README.md says goes wrong in each query.
PLANTED = {
    "01-late-parcels-by-depot.a": {"fan-out join", "duplicates made and then removed"},
    "02-claims-per-depot-and-route": {"product by accident"},
    "03-late-and-never-told": {"null trap"},
    "04-parcels-with-large-claims": {"outer join undone by a filter"},
    "05-claimed-amount-by-depot": {"sum over a fan-out"},
    "06-scans-of-one-day": {"predicate hidden in a function"},
    "07-express-scans-by-depot": {"predicate applied late"},
    "08-one-timeline": {"no duplicates to remove"},
    "09-last-seen": {"correlated rerun"},
    "10-late-share-by-depot": {"count of what may be null"},
    "11-parcels-of-prime-merchants": {"no duplicates to remove"},
    "13-depots-above-their-region": {"the same work done twice"},
    "14-stops-per-driver": {"sort nobody needs"},
    "15-price-of-parcels": {"range join"},
    "18-answers-to-late-parcels": {"key types that differ"},
}


@pytest.mark.parametrize("name", PLANTED)
def test_what_is_planted_is_found(name: str) -> None:
    kinds = {f.kind for f in found(demo.queries()[name])}
    assert PLANTED[name] <= kinds, kinds


SOUND = (
    "select depot_id, count(*) as n from parcels group by depot_id",
    "select p.parcel_id, d.code from parcels p join depots d on d.depot_id = p.depot_id where p.posted_at >= date '2026-03-01'",
    "select parcel_id from parcels p where exists (select 1 from claims c where c.parcel_id = p.parcel_id)",
    "select d.code, sum(p.weight_kg) as kg from parcels p join depots d on d.depot_id = p.depot_id group by d.code",
    "select parcel_id, barcode from parcels order by parcel_id limit 10",
    "select distinct depot_id from parcels",
    "select parcel_id from scans union all select parcel_id from notices",
    "select r.name, count(*) as n from regions r join depots d on d.region_id = r.region_id group by r.name having count(*) > 2",
    "select p.parcel_id, c.amount from parcels p left join claims c on c.parcel_id = p.parcel_id",
    "select depot_id, max(posted_at) as latest from parcels where depot_id = 3 group by depot_id",
)


@pytest.mark.parametrize("text", SOUND)
def test_sound_queries_are_left_alone(text: str) -> None:
    assert [f.kind for f in found(text)] in ([], ["estimate resting on nothing"])


def test_they_are_ordered_by_work_and_speak() -> None:
    for text in demo.queries().values():
        works = [f.work for f in found(text)]
        assert works == sorted(works, reverse=True)
        for finding in found(text):
            assert (
                finding.sentence[0].islower()
                or not finding.sentence[0].isalpha()
                or finding.sentence.startswith("NOT IN")
                or finding.sentence.startswith("UNION")
            )
            assert not finding.sentence.endswith(".")
            assert finding.offer is not None or finding.why_not or finding.kind == "estimate resting on nothing"


@pytest.mark.parametrize("name", sorted(demo.queries()))
def test_a_cure_keeps_the_bag_and_adds_no_work(name: str) -> None:
    text = demo.queries()[name]
    for finding in found(text):
        if finding.offer is not None:
            assert bag(finding.offer.after) == bag_of(text), finding.kind
            before, after = measured_rows(read_sql(text, ground()[0])), measured_rows(finding.offer.after)
            assert after <= before * 1.001, (finding.kind, before, after)


def test_every_kind_is_found_somewhere() -> None:
    seen = {f.kind for text in demo.queries().values() for f in found(text)}
    assert len(seen) >= len(KINDS) - 1, seen
