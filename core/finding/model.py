"""A finding, and what its detection sees."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from core.algebra.formulation import Formulation
from core.algebra.graph import attributes
from core.algebra.notation import scalar_text
from core.algebra.operators import Join, Operator, Project, Relation, Select
from core.algebra.scalars import Attribute, Ref
from core.catalog.model import Evidence
from core.derive.facts import Facts
from core.rewrite import Offer, Refusal, attempts, rule_named
from core.rewrite.context import Context
from core.size import Size
from core.size.guarantee import equalities


@dataclass(frozen=True, slots=True)
class Finding:
    """A named defect or danger at an operator.

    `work` is the rows it causes. `offer` is the rewrite that mends it, checked legal; where there is none, `why_not`
    says why. `evidence` is that of the numbers in the sentence.
    """

    kind: str
    operator: Operator
    sentence: str
    work: float
    evidence: Evidence
    offer: Offer | None = None
    why_not: str = ""


@dataclass(frozen=True, slots=True)
class View:
    """A formulation with everything that is known of it."""

    formulation: Formulation
    facts: Facts
    context: Context
    sizes: Mapping[Operator, Size]

    def rows(self, operator: Operator) -> float:
        return self.sizes[operator].best

    def evidence(self, *operators: Operator) -> Evidence:
        return min(self.sizes[o].best_evidence for o in operators)

    def mend(self, operator: Operator, *rules: str) -> tuple[Offer | None, str]:
        """The first of the rules that is offered at the operator; else why the most promising is refused."""
        reason = ""
        for name in rules:
            for answer in attempts(self.context, operator, [rule_named(name)]):
                if isinstance(answer, Offer):
                    return answer, ""
                if isinstance(answer, Refusal) and not reason:
                    reason = f"{answer.rule.title}: {answer.reason}" + (f" ({answer.cure})" if answer.cure else "")
        return None, reason


def key_sides(join: Join, facts: Facts) -> tuple[bool, bool]:
    """Whether the join attributes hold a key of the left and of the right side: declared, or unique in the data."""
    pairs = equalities(join.condition, set(attributes(join.left)), set(attributes(join.right)))
    left = facts.is_key(join.left, [*(a for a, _ in pairs), *facts.of(join.left).constants])
    right = facts.is_key(join.right, [*(b for _, b in pairs), *facts.of(join.right).constants])
    left = left or any(_unique_in_data(join.left, a, facts) for a, _ in pairs)
    right = right or any(_unique_in_data(join.right, b, facts) for _, b in pairs)
    return left, right


def _unique_in_data(side: Operator, attribute: Attribute, facts: Facts) -> bool:
    """Whether a profile found no value of the attribute twice. Enough for a finding, never for a rewrite."""
    while isinstance(side, (Select, Project)):
        if isinstance(side, Project):
            value = next((c.value for c in side.columns if c.attribute == attribute), None)
            if not isinstance(value, Ref):
                return False
            attribute = value.attribute
        side = side.input
    if not isinstance(side, Relation) or attribute not in side.attributes:
        return False
    relation = facts.catalog.relation(side.name)
    known = None if relation is None else relation.attribute(attribute.name)
    statistics = None if known is None else known.statistics
    return statistics is not None and statistics.largest_group == 1


def condition_of(join: Join) -> str:
    pairs = equalities(join.condition, set(attributes(join.left)), set(attributes(join.right)))
    if pairs:
        return ", ".join(scalar_text(Ref(b)) for _, b in pairs)
    return scalar_text(join.condition)
