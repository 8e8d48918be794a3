"""Size formulas against published values; the source stands beside each."""

from __future__ import annotations

import pytest

from core.algebra.types import INTEGER
from core.catalog.model import AttributeFacts, Catalog, Evidence, HeavyHitter, RelationFacts, Statistics, catalog_of
from core.language.sql.read import read_sql
from core.size import size
from core.size.distribution import Distribution, base_distribution, groups, remaining_distinct
from core.size.equalities import pair_share


def relation(name: str, rows: int, **distinct: int) -> RelationFacts:
    attributes = tuple(
        AttributeFacts(a, INTEGER, False, Statistics(distinct=d, nulls=0, evidence=Evidence.DECLARED))
        for a, d in distinct.items()
    )
    return RelationFacts(name, attributes, rows=rows, rows_evidence=Evidence.DECLARED)


# Garcia-Molina, Ullman, Widom, Database Systems: The Complete Book, size estimation (figures from memory of the source).
BOOK = catalog_of(
    [relation("r", 1000, a=1000, b=20), relation("s", 2000, b=50, c=100), relation("u", 5000, c=500, d=10)]
)


@pytest.mark.parametrize(
    ("text", "rows"),
    [
        ("select r.a from r join s on r.b = s.b", 40_000),
        ("select r.a from (r join s on r.b = s.b) join u on s.c = u.c", 400_000),
        ("select s.b from s join u on s.c = u.c", 20_000),
        ("select r.a from r join (s join u on s.c = u.c) on r.b = s.b", 400_000),
    ],
)
def test_containment_of_value_sets(text: str, rows: int) -> None:
    formulation = read_sql(text, BOOK)
    assert size(formulation, BOOK)[formulation.root].rows == pytest.approx(rows)


def test_selections_of_the_book() -> None:
    """T = 10,000, V(a) = 50: a = 10 gives 200; with b < 20 (a third) 67; either gives 3,466 by independence (same source)."""
    facts = relation("t", 10_000, a=50)
    unknown = AttributeFacts("b", INTEGER, False)
    catalog = Catalog(
        {"t": RelationFacts("t", (*facts.attributes, unknown), rows=10_000, rows_evidence=Evidence.DECLARED)}
    )
    for condition, rows in (("a = 10", 200), ("a = 10 and b < 20", 66.7), ("a = 10 or b < 20", 3466.7)):
        formulation = read_sql(f"select * from t where {condition}", catalog)
        assert size(formulation, catalog)[formulation.root].rows == pytest.approx(rows, rel=1e-3)


def test_system_r_factors_without_statistics() -> None:
    """Selinger et al., SIGMOD 1979, table of selectivity factors."""
    catalog = Catalog(
        {"t": RelationFacts("t", (AttributeFacts("a", INTEGER), AttributeFacts("b", INTEGER)), rows=1200)}
    )
    for condition, share in (
        ("a > 5", 1 / 3),
        ("a between 1 and 5", 1 / 4),
        ("a in (1, 2, 3)", 0.3),
        ("a in (1,2,3,4,5,6)", 0.5),
    ):
        formulation = read_sql(f"select * from t where {condition}", catalog)
        found = size(formulation, catalog)[formulation.root]
        assert found.rows == pytest.approx(1200 * share)
        assert found.evidence is Evidence.ASSUMED


@pytest.mark.parametrize(
    ("m", "k", "expected"),
    [(100, 100, 63.40), (50, 20, 16.62), (1000, 50, 48.79), (5000, 10_000, 4323.5), (50_000, 10_000, 9063.5)],
)
def test_cardenas(m: int, k: int, expected: float) -> None:
    """Cardenas, CACM 1975: m(1-(1-1/m)^k)."""
    assert groups(m, k) == pytest.approx(expected, rel=2e-4)


@pytest.mark.parametrize(("distinct", "expected"), [(1_000, 1_000), (100_000, 9_561.8), (1_000_000, 10_000)])
def test_distinct_after_a_selection(distinct: float, expected: float) -> None:
    """D(1-(1-q)^(N/D)) with N = 10^6, q = 0.01: follows from the formula."""
    assert remaining_distinct(distinct, 1e6, 0.01) == pytest.approx(expected, rel=1e-4)


def test_heavy_hitters_meet_heavy_hitters() -> None:
    """{a .5, b .3, c .2} with {a .6, b .1, d .3}: .33 of the product, follows from the formula."""
    left = Distribution(3, heavy=(("a", 0.5), ("b", 0.3), ("c", 0.2)))
    right = Distribution(3, heavy=(("a", 0.6), ("b", 0.1), ("d", 0.3)))
    both = sum(s * t for v, s in left.heavy for w, t in right.heavy if v == w)
    assert both == pytest.approx(0.33)
    assert pair_share(left, right) >= both


def test_equi_depth_histogram() -> None:
    """PostgreSQL manual, how the planner uses statistics: unique1 < 1000 over {0, 993, 1997, ...}: 0.100697, 1,007 rows."""
    bounds = (0, 993, 1997, 3050, 4040, 5036, 5957, 7057, 8029, 9016, 9995)
    statistics = Statistics(distinct=10_000, nulls=0, low=0, high=9995, histogram=bounds, evidence=Evidence.PROFILED)
    found = base_distribution(AttributeFacts("unique1", INTEGER, False, statistics), INTEGER, 10_000)
    share = found.share_below(1000, inclusive=False)
    assert share == pytest.approx((1 + (1000 - 993) / (1997 - 993)) / 10)
    assert round(10_000 * (share or 0)) == 1007


def test_values_outside_the_heavy_hitters() -> None:
    """PostgreSQL manual: (1-(0.00333333+9·0.003))/(676-10) = 0.0014559, 15 of 10,000 rows (from memory)."""
    heavy = (HeavyHitter("AAAAAA", 33), *(HeavyHitter(chr(66 + i), 30) for i in range(9)))
    statistics = Statistics(distinct=676, nulls=0, heavy=heavy, evidence=Evidence.PROFILED)
    from core.algebra.types import TEXT

    found = base_distribution(AttributeFacts("stringu1", TEXT, False, statistics), TEXT, 10_000)
    assert found.share_of("xxx") == pytest.approx(0.0014559, rel=1e-3)
    assert round(10_000 * found.share_of("xxx")) == 15


def test_heavy_hitters_and_histogram_together() -> None:
    """PostgreSQL manual: 0.01833333 + 0.298387 × 0.96966667 = 0.307669, 3,077 of 10,000 rows (figures from memory).

    The manual's bound is a text; here it is a number with the same part of the histogram below it.
    """
    found = Distribution(
        676,
        heavy=((-1, 0.01833333), (2_000_000, 1 - 0.01833333 - 0.96966667)),
        bounds=(0.0, 1_000_000.0),
        low=-1,
        high=2_000_000,
        evidence=Evidence.PROFILED,
    )
    share = found.share_below(298_387, inclusive=False)
    assert share == pytest.approx(0.307669, rel=1e-5)
    assert round(10_000 * (share or 0)) == 3077
