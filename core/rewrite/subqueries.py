"""Rewrites of subqueries: dependent joins made plain ones."""

from __future__ import annotations

from core.algebra.graph import attributes, dependent, free
from core.algebra.notation import scalar_text
from core.algebra.operators import AggregateColumn, Column, Group, Join, JoinKind, Operator, Project, Select
from core.algebra.scalars import (
    TRUE,
    Aggregate,
    Attribute,
    Call,
    Comparison,
    ComparisonOperator,
    IsTruth,
    Literal,
    Not,
    Ref,
    Scalar,
    conjunction,
    conjuncts,
    fresh_like,
    refs,
)
from core.algebra.types import BIGINT
from core.derive.reject import can_be_null
from core.rewrite.context import Context
from core.rewrite.joins import at_most_one, key_cure, takes_whole_schema
from core.rewrite.rule import Attempt, Rule, check
from core.rewrite.selection import steady

NEUMANN = "Neumann, Kemper, BTW 2015"


def _lift(operator: Operator, context: Context) -> Attempt | None:
    """A correlated condition on top of the right side becomes the join's condition."""
    if not isinstance(operator, Join) or not dependent(operator):
        return None
    if operator.kind not in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.INNER, JoinKind.LEFT, JoinKind.MARK):
        return None
    project = operator.right if isinstance(operator.right, Project) else None
    select = operator.right if project is None else project.input
    if not isinstance(select, Select):
        return None
    outer = dependent(operator)
    lifted = [t for t in conjuncts(select.condition) if refs(t) & outer]
    staying = [t for t in conjuncts(select.condition) if t not in lifted]
    if not lifted:
        return None
    shown = set(attributes(operator.right))
    inside = {a for t in lifted for a in refs(t)} & set(attributes(select.input)) - shown
    hidden = operator.kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK)
    visible = check(
        "schema-may-grow",
        not inside or hidden or not takes_whole_schema(operator, context),
        "what is above names the attributes it wants",
        f"{', '.join(sorted(a.name for a in inside))} would come up to the join, and what is above takes every attribute",
    )
    # In a mark join an unknown condition would make the mark unknown; a row that the selection drops must not.
    terms = [IsTruth(t, True) for t in lifted] if operator.kind is JoinKind.MARK else lifted

    def build() -> Operator:
        right: Operator = Select(select.input, conjunction(staying)) if staying else select.input
        if project is not None:
            extra = tuple(Column(a, Ref(a)) for a in sorted(inside))
            right = Project(right, (*project.columns, *extra))
        return Join(operator.kind, operator.left, right, conjunction((operator.condition, *terms)), operator.mark)

    texts = " and ".join(scalar_text(t) for t in lifted)
    return Attempt((visible, steady(lifted)), build, f"{texts} as the join's condition: the right side runs once")


def _scalar_aggregate(operator: Operator, context: Context) -> Attempt | None:
    """A correlated scalar aggregate becomes a grouping joined once; the empty group keeps its count of zero."""
    if not isinstance(operator, Join) or operator.kind is not JoinKind.SINGLE or not dependent(operator):
        return None
    project = operator.right if isinstance(operator.right, Project) else None
    group = project.input if project is not None else operator.right
    if not isinstance(group, Group) or group.keys or group.sets is not None or not isinstance(group.input, Select):
        return None
    if operator.condition != TRUE:
        return None
    select = group.input
    outer = dependent(operator)
    tied = [t for t in conjuncts(select.condition) if refs(t) & outer]
    staying = [t for t in conjuncts(select.condition) if t not in tied]
    pairs = [_tied(t, outer) for t in tied]
    plain = check(
        "tied-by-equality",
        bool(tied) and all(pair is not None for pair in pairs),
        "the subquery is tied to the outer row by equalities only",
        "the subquery is tied to the outer row by something else than equalities of its attributes",
    )
    elsewhere = free(select.input) | {a for c in group.aggregates for a in refs(c.aggregate)} & outer
    if project is not None:
        elsewhere |= {a for c in project.columns for a in refs(c.value)} & outer
    local = check(
        "outer-row-read-nowhere-else",
        not elsewhere & outer,
        "the outer row is read nowhere else",
        f"{', '.join(sorted(a.name for a in elsewhere & outer))} is read elsewhere in the subquery",
    )
    known = check(
        "empty-group-is-known",
        all(c.aggregate.name in _ON_EMPTY for c in group.aggregates),
        "over no rows, count gives 0 and the others NULL",
        "what an aggregate gives over no rows is not known",
    )
    found = [pair for pair in pairs if pair is not None]
    return Attempt(
        (plain, local, known),
        lambda: _grouped_join(operator, project, group, select.input, staying, found),
        "one grouping for all outer rows, joined to them",
    )


_ON_EMPTY = frozenset("count count_if sum avg min max bool_and bool_or".split())


def _tied(term: Scalar, outer: frozenset[Attribute]) -> tuple[Attribute, Scalar] | None:
    """`inner = f(outer)` as the inner attribute and the outer scalar."""
    match term:
        case Comparison(operator=ComparisonOperator.EQUAL, left=left, right=right):
            for inner, other in ((left, right), (right, left)):
                if isinstance(inner, Ref) and inner.attribute not in outer and refs(other) and refs(other) <= outer:
                    return inner.attribute, other
    return None


def _grouped_join(
    operator: Join,
    project: Project | None,
    group: Group,
    source: Operator,
    staying: list[Scalar],
    pairs: list[tuple[Attribute, Scalar]],
) -> Operator:
    below = Select(source, conjunction(staying)) if staying else source
    keys = tuple(dict.fromkeys(inner for inner, _ in pairs))
    inner_names = {c.attribute: fresh_like(c.attribute) for c in group.aggregates}
    columns = tuple(AggregateColumn(inner_names[c.attribute], c.aggregate) for c in group.aggregates)
    grouped = Group(below, keys, columns)
    condition = conjunction(Comparison(ComparisonOperator.EQUAL, Ref(inner), other) for inner, other in pairs)
    joined = Join(JoinKind.LEFT, operator.left, grouped, condition)
    kept = tuple(Column(a, Ref(a)) for a in attributes(operator.left))
    values = tuple(Column(c.attribute, _or_empty(c.aggregate, inner_names[c.attribute])) for c in group.aggregates)
    plan: Operator = Project(joined, (*kept, *values))
    if project is not None:
        plan = Project(plan, (*kept, *project.columns))
    return plan


def _or_empty(call: Aggregate, attribute: Attribute) -> Scalar:
    if call.name in ("count", "count_if"):
        return Call("coalesce", (Ref(attribute), Literal("0", BIGINT)), call.type)
    return Ref(attribute)


def _single_to_left(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Join) or operator.kind is not JoinKind.SINGLE:
        return None
    left = Join(JoinKind.LEFT, operator.left, operator.right, operator.condition)
    few = frozenset() in context.facts.keys(operator.right) or at_most_one(left, context, "right")
    legal = check(
        "at-most-one-row",
        few,
        "the subquery gives at most one row",
        "the subquery may give several rows, which is an error that must come",
        key_cure(left, operator.right),
        proof=False,
    )
    return Attempt((legal,), lambda: left, "a plain outer join, which can be reordered")


def _not_in(operator: Operator, context: Context) -> Attempt | None:
    """▷ with "is not false" becomes a plain ▷ where nothing can be NULL."""
    if not isinstance(operator, Join) or operator.kind is not JoinKind.ANTI:
        return None
    match operator.condition:
        case Not(term=IsTruth(term=inner, value=False)):
            pass
        case _:
            return None
    left, right = context.facts.never_null(operator.left), context.facts.never_null(operator.right)
    loose = sorted(a.name for a in refs(inner) - left - right)
    legal = check(
        "nothing-is-null",
        not can_be_null(inner, left | right),
        "neither side can be NULL",
        f"would bring back rows: {', '.join(loose) or scalar_text(inner)} may be NULL, and NOT IN then keeps nothing",
        f"legal if {', '.join(loose)} is declared not null" if loose else "",
        proof=False,
    )
    return Attempt(
        (legal,),
        lambda: Join(JoinKind.ANTI, operator.left, operator.right, inner),
        "NOT EXISTS instead of NOT IN: rows can be found by the key",
    )


def _plain_exists(operator: Operator, context: Context) -> Attempt | None:
    """A mark join whose truth value is only ever asked whether it is true."""
    if not isinstance(operator, Select) or not isinstance(operator.input, Join):
        return None
    join = operator.input
    if join.kind is not JoinKind.MARK or join.mark is None:
        return None
    mark = join.mark
    terms = conjuncts(operator.condition)
    asks = {True: (Ref(mark), IsTruth(Ref(mark), True)), False: (Not(Ref(mark)), IsTruth(Ref(mark), False))}
    positive, negative = (any(t in asks[truth] for t in terms) for truth in (True, False))
    if positive == negative:
        return None
    others = [t for t in terms if t not in asks[positive]]
    read = mark in context.needed[operator] or any(mark in refs(t) for t in others)
    legal = check(
        "mark-is-read-once",
        not read,
        "the truth value is read here only",
        "the truth value is read elsewhere too",
    )

    def build() -> Operator:
        kind = JoinKind.SEMI if positive else JoinKind.ANTI
        condition = join.condition if positive or join.condition == TRUE else Not(IsTruth(join.condition, False))
        made = Join(kind, join.left, join.right, condition)
        return Select(made, conjunction(others)) if others else made

    return Attempt((legal,), build, "rows kept or dropped by existence: no truth value is made")


RULES = (
    Rule(
        "lift-correlation", "make a correlated condition the join's",
        "R ⋉ σp(R,S)(S) = R ⋉p S; also ▷ ⋈ ⟕", NEUMANN, "subqueries", _lift,
    ),
    Rule(
        "scalar-aggregate-to-join", "a correlated aggregate as one grouping",
        "R ⟕¹ γ;A(σs=r(S)) = π(R ⟕s=r γs;A(S)), count of no rows being 0",
        "Kim, TODS 7(3) 1982; Ganski, Wong, SIGMOD 1987", "subqueries", _scalar_aggregate,
    ),
    Rule("single-to-left-join", "a subquery that gives at most one row", "R ⟕¹ S = R ⟕ S where S has at most one partner", NEUMANN, "subqueries", _single_to_left),
    Rule("not-in-to-not-exists", "NOT IN without NULLs", "R ▷(r=s is not false) S = R ▷(r=s) S where r, s are never NULL", "ISO/IEC 9075-2, quantified predicates", "subqueries", _not_in),
    Rule("mark-to-half-join", "a truth value that only filters", "σm(R ⋉? S → m) = R ⋉ S, σ¬m likewise ▷", NEUMANN, "subqueries", _plain_exists),
)  # fmt: skip
