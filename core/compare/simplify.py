"""Scalars made simpler by laws of three-valued logic, before texts are compared.

In the condition of a selection or a join only "true" counts: there, unknown and false are one. Elsewhere every law used
keeps all three truth values apart. Each law was checked over all truth values of its parts.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace
from functools import partial

from core.algebra.functions import volatile
from core.algebra.graph import attributes, dependent, inputs, parents, postorder, with_inputs, with_scalars
from core.algebra.operators import Group, Join, JoinKind, Operator, Project, Select
from core.algebra.scalars import (
    FALSE,
    MIRRORED,
    NULL_LITERAL,
    Aggregate,
    And,
    Attribute,
    Call,
    Case,
    Comparison,
    ComparisonOperator,
    IsNull,
    IsTruth,
    Literal,
    Node,
    Not,
    Or,
    Scalar,
    conjunction,
    conjuncts,
    disjunction,
    disjuncts,
    substitute,
    transform,
)
from core.algebra.types import Family, common_type
from core.algebra.typing import type_of
from core.derive.facts import Facts
from core.derive.reject import can_be_null, rejects_null_each
from core.size.values import literal_value

_TRUTH_ONLY = (
    JoinKind.INNER,
    JoinKind.LEFT,
    JoinKind.RIGHT,
    JoinKind.FULL,
    JoinKind.SEMI,
    JoinKind.ANTI,
    JoinKind.SINGLE,
)


def simplified(root: Operator, facts: Facts) -> Operator:
    """The graph with its scalars simplified; the same object where nothing changed."""
    became: dict[Operator, Operator] = {}
    outer = _outer_known(root, facts)
    readers = parents(root)
    for operator in postorder(root):
        below = inputs(operator)
        # What an outer join fills with NULL does not matter inside its condition: that sees the rows as they are.
        own = {a for part in below for a in attributes(part)}
        known = frozenset(outer - own).union(*(facts.never_null(part) for part in below))
        new = with_inputs(with_scalars(operator, partial(_value, known)), tuple(became[part] for part in below))
        if isinstance(new, Select):
            condition = _conjunction_part(true_part(new.condition), known)
            new = new if condition == new.condition else replace(new, condition=condition)
            if isinstance(operator, Select) and len(readers[operator.input]) == 1:
                new = _below_projection(new, facts, outer)
        elif isinstance(new, Join) and new.kind in _TRUTH_ONLY:
            condition = _conjunction_part(true_part(new.condition), known)
            new = new if condition == new.condition else replace(new, condition=condition)
        elif isinstance(new, Group):
            new = with_scalars(new, _counted)
        became[operator] = new
    return became[root]


def _outer_known(root: Operator, facts: Facts) -> frozenset[Attribute]:
    """Attributes that are not NULL in the rows for which a dependent right input is evaluated."""
    known: set[Attribute] = set()
    doubtful: set[Attribute] = set()
    for operator in postorder(root):
        if isinstance(operator, Join):
            read = dependent(operator)
            sure = facts.never_null(operator.left)
            known |= read & sure
            doubtful |= read - sure
    return frozenset(known - doubtful)


def _below_projection(select: Select, facts: Facts, outer: frozenset[Attribute]) -> Operator:
    """A selection on computed columns as one on what they are computed from, where that makes it simpler."""
    project = select.input
    if not isinstance(project, Project) or volatile(*(column.value for column in project.columns)):
        return select
    inlined = substitute(select.condition, {column.attribute: column.value for column in project.columns})
    known = facts.never_null(project.input) | (outer - set(attributes(project.input)))
    condition = _conjunction_part(true_part(_value(known, inlined)), known)  # type: ignore[arg-type]
    if condition == inlined:
        return select
    return replace(project, input=Select(project.input, condition))


def _conjunction_part(condition: Scalar, known: frozenset[Attribute]) -> Scalar:
    """Each term made simpler by what the others, which must be true as well, show not to be NULL."""
    terms = list(conjuncts(condition))
    if len(terms) > 50:
        return condition
    for i, term in enumerate(terms):
        shown = known | rejects_null_each(conjunction(terms[:i] + terms[i + 1 :]), known)
        new = _value(shown, term)
        if new != term:
            terms[i] = true_part(new)  # type: ignore[arg-type]
    for i, term in enumerate(terms):
        if isinstance(term, Comparison) and term.operator is ComparisonOperator.NOT_DISTINCT:
            if not (can_be_null(term.left, known) and can_be_null(term.right, known)):
                terms[i] = Comparison(ComparisonOperator.EQUAL, term.left, term.right)
    return conjunction(terms)


def true_part(condition: Scalar) -> Scalar:
    """A condition that is true for the same rows (it may be false where the first is unknown, and the reverse)."""
    match condition:
        case And(terms=terms):
            return conjunction(true_part(term) for term in terms)
        case Or(terms=terms):
            return _factored(disjunction(true_part(term) for term in terms))
        case IsTruth(term=term, value=True):
            return true_part(term)
        case IsTruth(term=term, value=False):
            return true_part(Not(term))
        case Comparison(operator=operator, left=left, right=right) if operator in _REFLEXIVE and left == right:
            return condition if volatile(left) else Not(IsNull(left))
        case Comparison(operator=ComparisonOperator.NOT_DISTINCT, left=left, right=right):
            if not (can_be_null(left, ()) and can_be_null(right, ())):
                return Comparison(ComparisonOperator.EQUAL, left, right)
        case Call(name="coalesce", arguments=(term, Literal(text="false"))):
            return true_part(term)
        case Case(branches=((when, Literal(text="true", type=kind)),), otherwise=other):
            if kind.family is Family.BOOLEAN and (other == FALSE or _is_null(other)):
                return true_part(when)
        case Comparison(operator=operator, left=left, right=right):
            if isinstance(left, Call):
                return _without_default(operator, left, right) or condition
            if isinstance(right, Call):
                return _without_default(MIRRORED[operator], right, left) or condition
    return condition


def _without_default(operator: ComparisonOperator, call: Call, other: Scalar) -> Scalar | None:
    """`coalesce(x, 0) > 1` is true just where `x > 1` is; `coalesce(x, 0) < 1` also where x is NULL."""
    if call.name != "coalesce" or len(call.arguments) != 2 or operator in _NULL_SAFE or volatile(call):
        return None
    term, default = call.arguments
    if not isinstance(default, Literal) or not isinstance(other, Literal):
        return None
    truth = compared(operator, default, other)
    if truth is None:
        return None
    plain = Comparison(operator, term, other)
    return disjunction((plain, IsNull(term))) if truth else plain


_REFLEXIVE = (ComparisonOperator.EQUAL, ComparisonOperator.AT_MOST, ComparisonOperator.AT_LEAST)
_NULL_SAFE = (ComparisonOperator.DISTINCT, ComparisonOperator.NOT_DISTINCT)


def compared(operator: ComparisonOperator, left: Literal, right: Literal) -> bool | None:
    """How two whole numbers compare; None for anything else, whose comparison may depend on the engine."""
    if left.type.family is not Family.INTEGER or right.type.family is not Family.INTEGER:
        return None
    a, b = literal_value(left), literal_value(right)
    if not isinstance(a, int) or not isinstance(b, int):
        return None
    return {
        ComparisonOperator.EQUAL: a == b,
        ComparisonOperator.UNEQUAL: a != b,
        ComparisonOperator.LESS: a < b,
        ComparisonOperator.AT_MOST: a <= b,
        ComparisonOperator.GREATER: a > b,
        ComparisonOperator.AT_LEAST: a >= b,
    }.get(operator)


def _value(never_null: Collection[Attribute], root: Node) -> Node:
    """A scalar with the same value in every row."""

    def sure(term: Scalar) -> bool:
        return not can_be_null(term, never_null)

    def change(node: Node) -> Node:
        match node:
            case Call(name="coalesce", arguments=(Call(name="coalesce") as inner, *rest)):
                return change(Call("coalesce", (*inner.arguments, *rest), node.type)) if _all_alike(node) else node
            case Call(name="coalesce", arguments=(first, *rest)) if _all_alike(node) and any(
                map(sure, (first, *rest[:-1]))
            ):
                needed = next(i for i, term in enumerate(node.arguments) if sure(term)) + 1
                return first if needed == 1 else Call("coalesce", node.arguments[:needed], node.type)
            case Call(name="coalesce", arguments=(only,)):
                return only
            case Call(name="nullif", arguments=(left, right)) if not volatile(node) and not isinstance(left, Literal):
                return Case(((Comparison(ComparisonOperator.EQUAL, left, right), NULL_LITERAL),), left)
            case IsNull(term=term) if sure(term):
                return FALSE
            case IsTruth(term=term, value=value) if sure(term):
                return term if value else change(Not(term))
            case Not(term=Not(term=term)):
                return term
            case Comparison(operator=operator, left=left, right=right) if operator in _NULL_SAFE:
                if sure(left) and sure(right):
                    same = operator is ComparisonOperator.NOT_DISTINCT
                    plain = ComparisonOperator.EQUAL if same else ComparisonOperator.UNEQUAL
                    return Comparison(plain, left, right)
            case Or():
                return _factored(node)
            case Case(branches=((IsNull(term=term), value),), otherwise=other) if term == other and not volatile(term):
                return (
                    Call("coalesce", (term, value), common_type(type_of(term), type_of(value)))
                    if _alike(term, value)
                    else node
                )
            case Case(branches=((Not(term=IsNull(term=term)), other),), otherwise=value) if term == other:
                alike = _alike(term, value) and not volatile(term)
                return Call("coalesce", (term, value), common_type(type_of(term), type_of(value))) if alike else node
        return node

    return transform(root, change)


def _alike(left: Scalar, right: Scalar) -> bool:
    """Whether a value may come from either side without a cast that shows."""
    one, other = type_of(left), type_of(right)
    return one == other or (one.family is other.family and one.family in _CAST_FREE)


def _all_alike(call: Call) -> bool:
    return not volatile(call) and all(_alike(call.arguments[0], other) for other in call.arguments[1:])


_CAST_FREE = (Family.INTEGER, Family.TEXT, Family.BOOLEAN, Family.DATE)


def _factored(condition: Scalar) -> Scalar:
    """`(a and b) or (a and c)` as `a and (b or c)`, and `a or (a and b)` as `a`: a distributive lattice, unknown or not."""
    terms = disjuncts(condition)
    if len(terms) < 2 or volatile(condition):
        return condition
    sets = [dict.fromkeys(conjuncts(term)) for term in terms]
    kept = [
        own
        for i, own in enumerate(sets)
        if not any(other.keys() < own.keys() or (other.keys() == own.keys() and j < i) for j, other in enumerate(sets))
    ]
    common = [term for term in kept[0] if all(term in other for other in kept)]
    if not common or len(kept) == 1:
        return disjunction(conjunction(own) for own in kept)
    rest = disjunction(conjunction(t for t in own if t not in common) for own in kept)
    return conjunction((*common, rest))


def _counted(node: Node) -> Node:
    """`count(case when c then 1 end)` counts the rows where c is true."""
    if not isinstance(node, Aggregate) or node.name != "count" or node.distinct or len(node.arguments) != 1:
        return node
    match node.arguments[0]:
        case Literal(text=str()):
            return Aggregate("count", (), node.type, condition=node.condition)
        case Case(branches=((when, Literal(text=str())),), otherwise=other) if _is_null(other):
            own = () if node.condition is None else (node.condition,)
            return Aggregate("count", (), node.type, condition=true_part(conjunction((*own, when))))
    return node


def _is_null(scalar: Scalar) -> bool:
    return isinstance(scalar, Literal) and scalar.text is None
