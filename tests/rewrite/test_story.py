"""The main story: the exploding join is mended by offered rewrites, proved equal, and the search finds it by itself."""

from __future__ import annotations

import pytest

from core.algebra.formulation import Formulation
from core.algebra.graph import inputs
from core.algebra.operators import Group, Join, JoinKind, Relation
from core.compare import Kind, compare
from core.derive.facts import Facts
from core.language.sql.read import read_sql
from core.rewrite import Offer, attempts, rule_named
from core.rewrite.context import Context
from core.rewrite.improve import improve
from tests.data import demo
from tests.finding.ground import bag, bag_of, ground, measured_rows

STORY = "01-late-parcels-by-depot.a"


def joined_with(join: Join, relation: str) -> bool:
    return any(isinstance(below, Relation) and below.name == relation for below in inputs(join))


def applied(formulation: Formulation, rule: str, relation: str = "") -> Formulation:
    """After the rule where it is offered: at the join with the relation, where one is named."""
    context = Context(formulation, Facts(ground()[0]))
    for operator in formulation.operators():
        if relation and not (isinstance(operator, Join) and joined_with(operator, relation)):
            continue
        for answer in attempts(context, operator, [rule_named(rule)]):
            if isinstance(answer, Offer):
                return answer.after
    raise AssertionError(f"{rule} is not offered")


def by_hand() -> list[Formulation]:
    revisions = [read_sql(demo.queries()[STORY], ground()[0])]
    revisions.append(applied(revisions[-1], "join-to-semi-join", "notices"))
    revisions.append(applied(revisions[-1], "join-to-semi-join", "scans"))
    revisions.append(applied(revisions[-1], "count-distinct-to-count"))
    return revisions


def test_three_offered_rewrites_mend_the_explosion() -> None:
    revisions = by_hand()
    joins = [op for op in revisions[-1].operators() if isinstance(op, Join)]
    assert [join.kind for join in joins] == [JoinKind.SEMI, JoinKind.SEMI]
    (group,) = (op for op in revisions[-1].operators() if isinstance(op, Group))
    assert not any(c.aggregate.distinct for c in group.aggregates)
    work = [measured_rows(f) for f in revisions]
    assert work[0] > work[1] > work[2] >= work[3]
    assert work[0] > 20 * work[3]


def test_every_revision_gives_the_same_bag() -> None:
    for revision in by_hand():
        assert bag(revision) == bag_of(demo.queries()[STORY])


def test_the_last_revision_is_proved_equal_to_the_first_and_to_the_other_formulation() -> None:
    catalog = ground()[0]
    first, *_, last = by_hand()
    assert compare(first, last, catalog, 10).kind is Kind.EQUAL
    other = read_sql(demo.queries()["01-late-parcels-by-depot.b"], catalog)
    assert compare(first, other, catalog, 10).kind is Kind.EQUAL


def test_count_distinct_is_kept_while_a_join_multiplies() -> None:
    revisions = by_hand()
    for revision in revisions[:2]:
        with pytest.raises(AssertionError, match="not offered"):
            applied(revision, "count-distinct-to-count")


def test_the_search_finds_as_good_a_chain() -> None:
    revisions = by_hand()
    chain = improve(revisions[0], ground()[0], seconds=5)
    assert chain
    found = chain[-1].formulation
    assert measured_rows(found) <= measured_rows(revisions[-1])
    assert bag(found) == bag_of(demo.queries()[STORY])
    assert compare(revisions[0], found, ground()[0], 10).kind is Kind.EQUAL
