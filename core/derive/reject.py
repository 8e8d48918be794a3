"""Three-valued logic evaluated with some attributes NULL: does a condition then still come out true?

Galindo-Legaria, Rosenthal, TODS 22(1) 1997: an outer join under a condition that rejects its padded rows is an inner one.
"""

from __future__ import annotations

from collections.abc import Collection

from core.algebra.functions import STRICT
from core.algebra.scalars import (
    And,
    Arithmetic,
    Attribute,
    Call,
    Case,
    Cast,
    Comparison,
    ComparisonOperator,
    InList,
    IsNull,
    IsTruth,
    Literal,
    Negative,
    Node,
    Not,
    Or,
    Ref,
    Scalar,
    conjuncts,
    parts,
    refs,
)

NULL, TRUE, FALSE, VALUE = "null", "true", "false", "value"
_ANY = frozenset({NULL, TRUE, FALSE, VALUE})
_TRUTHS = frozenset({NULL, TRUE, FALSE})
Outcome = frozenset[str]
"""What a scalar may come out as: NULL, true, false, or another value than NULL."""


def rejects_null(condition: Scalar, attributes: Collection[Attribute]) -> bool:
    """Whether the condition is never true where all these attributes are NULL (so it drops padded rows)."""
    return TRUE not in outcomes(condition, frozenset(attributes), frozenset())


def rejects_null_each(condition: Scalar, never_null: Collection[Attribute] = ()) -> frozenset[Attribute]:
    """The attributes that a condition, where it is true, shows to be not NULL."""
    found: set[Attribute] = set()
    known = frozenset(never_null)
    for term in conjuncts(condition):
        for node in _refs(term):
            if node not in found and node not in known and rejects_null(term, (node,)):
                found.add(node)
    return frozenset(found)


def _refs(term: Scalar) -> set[Attribute]:
    return set(refs(term))


def can_be_null(scalar: Scalar, never_null: Collection[Attribute]) -> bool:
    """Whether the scalar may be NULL on rows where these attributes are not."""
    return NULL in outcomes(scalar, frozenset(), frozenset(never_null))


def outcomes(scalar: Scalar, null: frozenset[Attribute], never_null: frozenset[Attribute]) -> Outcome:
    """What the scalar may come out as, given attributes that are NULL and attributes that are not."""
    done: dict[Node, Outcome] = {}
    pending: list[tuple[Node, bool]] = [(scalar, False)]
    while pending:
        node, ready = pending.pop()
        if node in done:
            continue
        if ready:
            done[node] = _outcome(node, done, null, never_null)
        else:
            pending.append((node, True))
            pending.extend((part, False) for part in parts(node))
    return done[scalar]


def _outcome(
    node: Node, done: dict[Node, Outcome], null: frozenset[Attribute], never_null: frozenset[Attribute]
) -> Outcome:
    match node:
        case Ref(attribute=attribute):
            if attribute in null:
                return frozenset({NULL})
            return _ANY - {NULL} if attribute in never_null else _ANY
        case Literal(text=text):
            if text is None:
                return frozenset({NULL})
            return frozenset({text.lower()}) if text.lower() in (TRUE, FALSE) else frozenset({VALUE})
        case Comparison(operator=operator, left=left, right=right):
            return _compared(operator, done[left], done[right], left == right)
        case And(terms=terms):
            return _folded([done[term] for term in terms], FALSE, TRUE)
        case Or(terms=terms):
            return _folded([done[term] for term in terms], TRUE, FALSE)
        case Not(term=term):
            return _truths(frozenset({TRUE: FALSE, FALSE: TRUE}.get(o, o) for o in _truths(done[term])))
        case IsNull(term=term):
            inner = done[term]
            return frozenset(({TRUE} if NULL in inner else set()) | ({FALSE} if inner - {NULL} else set()))
        case IsTruth(term=term, value=value):
            wanted = TRUE if value else FALSE
            inner = _truths(done[term])
            return frozenset(({TRUE} if wanted in inner else set()) | ({FALSE} if inner - {wanted} else set()))
        case InList(term=term, items=items):
            return _listed(done[term], [done[item] for item in items])
        case Arithmetic() | Negative():
            # Division and the like may give NULL for a zero divisor on some engines, so NULL stays possible for `/` and `%`.
            sides = [done[part] for part in parts(node)]
            if any(side == {NULL} for side in sides):
                return frozenset({NULL})
            exact = isinstance(node, Negative) or node.operator.value in ("+", "-", "*", "||")
            return frozenset({VALUE}) if exact and all(NULL not in side for side in sides) else frozenset({VALUE, NULL})
        case Case(branches=branches, otherwise=otherwise):
            return _case([(done[c], done[v]) for c, v in branches], done[otherwise])
        case Cast(term=term, lenient=lenient):
            inner = done[term]
            if inner == {NULL}:
                return inner
            return _ANY if lenient or NULL in inner else _ANY - {NULL}
        case Call():
            return _called(node, done)
        case _:
            return _ANY


def _truths(outcome: Outcome) -> Outcome:
    """An outcome seen as a truth value: a value that is not known may be either."""
    return (outcome - {VALUE}) | {TRUE, FALSE} if VALUE in outcome else outcome


def _compared(operator: ComparisonOperator, left: Outcome, right: Outcome, same: bool) -> Outcome:
    if operator in (ComparisonOperator.DISTINCT, ComparisonOperator.NOT_DISTINCT):
        equal = operator is ComparisonOperator.NOT_DISTINCT
        if left == right == {NULL} or same:
            return frozenset({TRUE if equal else FALSE})
        apart = (left == {NULL} and NULL not in right) or (right == {NULL} and NULL not in left)
        return frozenset({FALSE if equal else TRUE}) if apart else frozenset({TRUE, FALSE})
    if left == {NULL} or right == {NULL}:
        return frozenset({NULL})
    found = {TRUE, FALSE}
    if NULL in left or NULL in right:
        found.add(NULL)
    return frozenset(found)


def _folded(terms: list[Outcome], absorbing: str, neutral: str) -> Outcome:
    """Conjunction (absorbing false) or disjunction (absorbing true) of independent outcomes."""
    truths = [_truths(term) for term in terms]
    found: set[str] = set()
    if any(absorbing in term for term in truths):
        found.add(absorbing)
    if all(neutral in term for term in truths):
        found.add(neutral)
    without = [term - {absorbing} for term in truths]
    if all(without) and any(NULL in term for term in without):
        found.add(NULL)
    return frozenset(found)


def _listed(term: Outcome, items: list[Outcome]) -> Outcome:
    if term == {NULL}:
        return frozenset({NULL})
    if items and all(item == {NULL} for item in items):
        return frozenset({NULL})
    found = {TRUE, FALSE}
    if NULL in term or any(NULL in item for item in items):
        found.add(NULL)
    if any(item == {NULL} for item in items):
        found.discard(FALSE)
    return frozenset(found)


def _case(branches: list[tuple[Outcome, Outcome]], otherwise: Outcome) -> Outcome:
    found: set[str] = set()
    for condition, value in branches:
        truth = _truths(condition)
        if TRUE in truth:
            found |= value
        if truth == {TRUE}:
            return frozenset(found)
    return frozenset(found | otherwise)


def _called(node: Call, done: dict[Node, Outcome]) -> Outcome:
    inner = [done[argument] for argument in node.arguments]
    if node.name == "coalesce":
        found: set[str] = set()
        for outcome in inner:
            found |= outcome - {NULL}
            if NULL not in outcome:
                return frozenset(found)
        return frozenset(found | {NULL})
    if node.name in STRICT:
        if any(outcome == {NULL} for outcome in inner):
            return frozenset({NULL})
        if node.name in ("like", "ilike", "starts_with", "contains"):
            nulls = {NULL} if any(NULL in outcome for outcome in inner) else set()
            return frozenset({TRUE, FALSE} | nulls)
        if node.name in _TOTAL and not any(NULL in outcome for outcome in inner):
            return _ANY - {NULL}
    return _ANY


_TOTAL = frozenset("abs lower upper length year month day quarter trim date_trunc".split())
"""Strict functions that give a value for every value."""
