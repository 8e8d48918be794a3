"""Every rule: offered and refused where its cases say, equal on generated data, and each side condition needed."""

from __future__ import annotations

import os

import pytest

from core.language.sql.read import read_sql
from core.rewrite import RULES, Offer, Refusal, RuleFault, attempts
from core.rewrite.context import Context
from tests.generate.queries import random_query
from tests.rewrite.cases import CASES
from tests.rewrite.harness import CATALOG, FACTS, answers, difference, read_after

OFFERED = [(rule, sql) for rule, (offered, _) in CASES.items() for sql in offered]
REFUSED = [(rule, sql, condition) for rule, (_, refused) in CASES.items() for sql, condition in refused]
INSTANCES = 50

# Conditions that keep a rewrite worth its while; without them the rows stay the same.
NOT_ABOUT_ROWS = {"no-product-made", "nothing-is-dropped", "outer-row-read-nowhere-else", "aggregates-of-one-row"}


def parts_of(condition: str) -> tuple[str, str]:
    name, _, first = condition.partition(" after ")
    return name, first


def test_every_rule_has_its_papers_and_its_cases() -> None:
    names = [rule.name for rule in RULES]
    assert len(names) == len(set(names))
    assert set(names) == set(CASES)
    for rule in RULES:
        assert rule.law and rule.source and rule.title and rule.family, rule.name
        assert CASES[rule.name][0], f"{rule.name} has no offered case"


@pytest.mark.parametrize(("rule", "sql"), OFFERED, ids=lambda value: str(value)[:60])
def test_an_offered_rewrite_gives_the_same_bag(rule: str, sql: str) -> None:
    offers = [a for a in answers(read_sql(sql, CATALOG), rule) if isinstance(a, Offer)]
    assert offers, "not offered"
    for offer in offers:
        assert difference(sql, offer.after, INSTANCES) is None


@pytest.mark.parametrize(("rule", "sql", "condition"), REFUSED, ids=lambda value: str(value)[:60])
def test_a_refused_rewrite_names_the_condition_that_fails(rule: str, sql: str, condition: str) -> None:
    name, first = parts_of(condition)
    refusals = [a for a in answers(read_after(sql, first), rule) if isinstance(a, Refusal)]
    failed = {c.name: c for refusal in refusals for c in refusal.failed}
    assert name in failed
    assert failed[name].sentence


@pytest.mark.parametrize(("rule", "sql", "condition"), REFUSED, ids=lambda value: str(value)[:60])
def test_without_its_side_condition_the_rule_would_be_wrong(rule: str, sql: str, condition: str) -> None:
    name, first = parts_of(condition)
    if name in NOT_ABOUT_ROWS or name == "same-at-every-call":
        return
    try:
        wrong = [a for a in answers(read_after(sql, first), rule, {name}) if isinstance(a, Offer)]
        different = any(difference(sql, offer.after, 300, strict=True) is not None for offer in wrong)
    except (RuleFault, ValueError, KeyError):
        return
    assert wrong, "still refused: another condition fails too, so this one is not shown to be needed"
    assert different


def offers_are_right(seed: int) -> set[str]:
    """Applies every rewrite offered in a random query and compares; gives the rules that were offered."""
    sql, _ = random_query(seed)
    formulation = read_sql(sql, CATALOG)
    context = Context(formulation, FACTS)
    offered = set()
    for operator in formulation.operators():
        for answer in attempts(context, operator):
            if isinstance(answer, Offer):
                offered.add(answer.rule.name)
                assert difference(sql, answer.after, 2, seed) is None, answer.rule.name
    return offered


def test_rewrites_of_random_queries_give_the_same_bag() -> None:
    offered: set[str] = set()
    for seed in range(60):
        offered |= offers_are_right(seed)
    assert len(offered) >= 20


@pytest.mark.soak
def test_rewrites_of_many_random_queries_give_the_same_bag() -> None:
    for seed in range(10_000, 10_000 + int(os.environ.get("PLANIMETER_SOAK", "1500"))):
        offers_are_right(seed)


@pytest.mark.soak
@pytest.mark.parametrize(("rule", "sql"), OFFERED, ids=lambda value: str(value)[:60])
def test_an_offered_rewrite_holds_on_a_thousand_instances(rule: str, sql: str) -> None:
    for answer in answers(read_sql(sql, CATALOG), rule):
        if isinstance(answer, Offer):
            assert difference(sql, answer.after, 1000, 7) is None
