"""Rewrites: the rules by family, what they offer and refuse at an operator, and a search for the best."""

from __future__ import annotations

from collections.abc import Collection, Mapping

from core.algebra.formulation import Formulation, IllegalFormulation
from core.algebra.graph import attributes
from core.algebra.operators import Operator
from core.catalog.model import Catalog
from core.derive.facts import Facts
from core.rewrite import joins, selection, shapes, subqueries
from core.rewrite.context import Context
from core.rewrite.rule import Attempt, Check, Offer, Refusal, Rule, RuleFault

__all__ = ["RULES", "Check", "Offer", "Refusal", "Rule", "RuleFault", "attempts", "rewrites", "rule_named"]

RULES: tuple[Rule, ...] = selection.RULES + joins.RULES + shapes.RULES + subqueries.RULES


def rule_named(name: str) -> Rule:
    """The rule with this name. Raises `KeyError`."""
    return {rule.name: rule for rule in RULES}[name]


def rewrites(
    formulation: Formulation,
    operator: Operator,
    catalog: Catalog | Facts,
    rules: Collection[Rule] = RULES,
    disabled: Collection[str] = (),
) -> list[Offer | Refusal]:
    """What the rules offer and refuse at an operator.

    `disabled` names side conditions that are taken to hold (for tests that show they are needed).
    """
    facts = catalog if isinstance(catalog, Facts) else Facts(catalog)
    context = Context(formulation, facts)
    return attempts(context, operator, rules, disabled)


def attempts(
    context: Context, operator: Operator, rules: Collection[Rule] = RULES, disabled: Collection[str] = ()
) -> list[Offer | Refusal]:
    """As `rewrites`, in a context that is at hand already."""
    found: list[Offer | Refusal] = []
    for rule in rules:
        answer = rule.bind(operator, context)
        choice = 0
        for attempt in answer if isinstance(answer, list) else [] if answer is None else [answer]:
            if all(c.passed or c.name in disabled for c in attempt.checks):
                found.append(_offer(rule, operator, attempt, context, choice))
                choice += 1
            else:
                found.append(Refusal(rule, operator, attempt.checks, attempt.what, attempt.cautions))
    return found


def _offer(rule: Rule, operator: Operator, attempt: Attempt, context: Context, choice: int) -> Offer:
    built = attempt.build()
    changes = dict(built) if isinstance(built, Mapping) else {operator: built}
    became = changes.get(operator, operator)
    lost = context.needed[operator] - set(attributes(became))
    if lost:
        names = ", ".join(sorted(a.name for a in lost))
        raise RuleFault(f"rule {rule.name} lost the attributes {names}")
    try:
        after = context.formulation.replaced(changes)
    except IllegalFormulation as fault:
        raise RuleFault(f"rule {rule.name} built an illegal formulation: {fault}") from fault
    return Offer(rule, operator, attempt.checks, attempt.what, after, became, attempt.cautions, choice)
