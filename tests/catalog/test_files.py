"""The catalog file: any catalog comes back exactly, and a wrong file says where and what."""

from __future__ import annotations

from datetime import date, datetime, time
from decimal import Decimal
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from core.algebra.types import type_named
from core.catalog.ddl import CatalogError
from core.catalog.files import catalog_from_toml, catalog_to_toml, load_catalog, save_catalog
from core.catalog.model import (
    AttributeFacts,
    Catalog,
    Evidence,
    ForeignKey,
    HeavyHitter,
    Joint,
    RelationFacts,
    Statistics,
    catalog_of,
)

VALUES = {
    "BIGINT": st.integers(-(2**62), 2**62),
    "DOUBLE": st.floats(allow_nan=False, allow_infinity=False),
    "DECIMAL(18, 3)": st.decimals(
        allow_nan=False, allow_infinity=False, places=3, min_value=-(10**12), max_value=10**12
    ),
    "VARCHAR": st.text(max_size=8).filter(lambda s: "\x00" not in s and all(not 0xD800 <= ord(c) < 0xE000 for c in s)),
    "DATE": st.dates(),
    "TIMESTAMP": st.datetimes(),
    "TIME": st.times(),
    "BOOLEAN": st.booleans(),
}
names = st.from_regex(r"[a-zA-Z_ .\-é]{1,9}", fullmatch=True)
counts = st.none() | st.integers(0, 2**60)


@st.composite
def attributes(draw: st.DrawFn, name: str) -> AttributeFacts:
    kind = draw(st.sampled_from(sorted(VALUES)))
    value = VALUES[kind]
    known = None
    if draw(st.booleans()):
        known = Statistics(
            distinct=draw(counts),
            nulls=draw(counts),
            low=draw(st.none() | value),
            high=draw(st.none() | value),
            heavy=tuple(HeavyHitter(v, n) for v, n in draw(st.lists(st.tuples(value, st.integers(1, 9)), max_size=3))),
            histogram=tuple(draw(st.lists(value, max_size=4))),
            width=draw(st.none() | st.floats(0, 100)),
            largest_group=draw(counts),
            exact=draw(st.frozensets(st.sampled_from(["distinct", "nulls", "low"]))),
            declared=draw(st.frozensets(st.sampled_from(["distinct", "nulls"]))),
            evidence=draw(st.sampled_from(Evidence)),
            source=draw(st.sampled_from(["", "profile"])),
            as_of=draw(st.none() | st.dates()),
        )
        if known == Statistics():
            known = None
    return AttributeFacts(name, type_named(kind), draw(st.booleans()), known, draw(st.booleans()))


@st.composite
def relations(draw: st.DrawFn, name: str) -> RelationFacts:
    columns = draw(st.lists(names, min_size=1, max_size=4, unique_by=str.lower))
    rows = draw(counts)
    return RelationFacts(
        name,
        tuple(draw(attributes(column)) for column in columns),
        primary=draw(st.none() | st.just((columns[0],))),
        unique=draw(st.sampled_from([(), ((columns[-1],),)])),
        foreign_keys=draw(st.sampled_from([(), (ForeignKey((columns[0],), "other", ("k",)),)])),
        checks=draw(st.sampled_from([(), ('a > "b"',)])),
        rows=rows,
        rows_exact=rows is not None and draw(st.booleans()),
        rows_evidence=Evidence.ASSUMED if rows is None else draw(st.sampled_from(Evidence)),
        bytes=draw(counts),
        joint=draw(st.sampled_from([(), (Joint((columns[0],), 5, 2, True),)])),
        source=draw(st.sampled_from(["", "a.parquet"])),
        as_of=draw(st.none() | st.dates()),
    )


@given(st.lists(names, max_size=3, unique_by=str.lower).flatmap(lambda ns: st.tuples(*(relations(n) for n in ns))))
def test_any_catalog_comes_back(found: tuple[RelationFacts, ...]) -> None:
    catalog = catalog_of(found)
    text = catalog_to_toml(catalog)
    again = catalog_from_toml(text)
    assert dict(again.relations) == dict(catalog.relations)
    assert catalog_to_toml(again) == text


def one(value: object, kind: str) -> Catalog:
    facts = AttributeFacts("a", type_named(kind), True, Statistics(low=value, distinct=1))  # type: ignore[arg-type]
    return catalog_of([RelationFacts("t", (facts,))])


@pytest.mark.parametrize(
    ("value", "kind"),
    [
        (Decimal("1.50"), "DECIMAL(5, 2)"),
        (date(2024, 2, 29), "DATE"),
        (datetime(2024, 1, 1, 12, 30, 0, 5), "TIMESTAMP"),
        (time(1, 2), "TIME"),
        (1.0, "DOUBLE"),
    ],
)
def test_values_keep_their_types(value: object, kind: str) -> None:
    again = catalog_from_toml(catalog_to_toml(one(value, kind))).relation("t")
    assert again is not None and again.attributes[0].statistics is not None
    assert again.attributes[0].statistics.low == value
    assert type(again.attributes[0].statistics.low) is type(value)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "format"),
        ('format = "planimeter catalog 1"\n[relations.t]\nrowss = 5', r"no key rowss \(line 3\); did you mean rows"),
        ('format = "planimeter catalog 1"\n[relations.t]\nrows = -5', "rows should be a whole number"),
        ('format = "planimeter catalog 1"\n[relations.t]\nrows = 5\nrows_evidence = "sure"', "evidence is one of"),
        ('format = "planimeter catalog 1"\n[relations.t\n', "line 2"),
    ],
)
def test_errors_in_words(text: str, message: str) -> None:
    with pytest.raises(CatalogError, match=message):
        catalog_from_toml(text)


def test_a_file_is_saved_whole(tmp_path: Path) -> None:
    path = tmp_path / "c.toml"
    save_catalog(one(3, "BIGINT"), path)
    assert load_catalog(path).relation("t") is not None
    assert [p.name for p in tmp_path.iterdir()] == ["c.toml"]
    with pytest.raises(CatalogError, match="nowhere"):
        load_catalog(tmp_path / "nowhere.toml")
