"""Rewrites of selections."""

from __future__ import annotations

from core.algebra.functions import volatile
from core.algebra.graph import attributes, free
from core.algebra.notation import scalar_text
from core.algebra.operators import (
    Distinct,
    Group,
    Join,
    JoinKind,
    Operator,
    Project,
    Select,
    SetKind,
    SetOperation,
    Sort,
    Values,
    Window,
)
from core.algebra.scalars import (
    TRUE,
    Attribute,
    Comparison,
    ComparisonOperator,
    Ref,
    Scalar,
    conjunction,
    conjuncts,
    refs,
    renamed,
    substitute,
)
from core.derive.reject import outcomes
from core.rewrite.context import Context
from core.rewrite.rule import Attempt, Check, Rule, check
from core.size.values import constant

TEXTBOOK = "Garcia-Molina, Ullman, Widom, Database Systems: The Complete Book, algebraic laws"


def steady(scalars: tuple[Scalar, ...] | list[Scalar]) -> Check:
    """No function among the scalars may differ from call to call."""
    loose = [s for s in scalars if volatile(s)]
    text = scalar_text(loose[0]) if loose else ""
    return check(
        "same-at-every-call", not loose, "no function differs from call to call", f"{text} differs from call to call"
    )


def _parted(condition: Scalar, movable: list[Scalar]) -> tuple[Scalar, Scalar]:
    """The moving and the staying conjunction."""
    staying = [t for t in conjuncts(condition) if t not in movable]
    return conjunction(movable), conjunction(staying)


def _above(operator: Operator, condition: Scalar) -> Operator:
    return operator if condition == TRUE else Select(operator, condition)


def _texts(terms: list[Scalar]) -> str:
    return " and ".join(scalar_text(t) for t in terms)


def _merge(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Select):
        return None
    inner = operator.input
    return Attempt(
        (),
        lambda: Select(inner.input, conjunction((inner.condition, operator.condition))),
        "one selection with both conditions",
    )


def _split(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select):
        return None
    terms = conjuncts(operator.condition)
    if len(terms) < 2:
        return None
    return Attempt(
        (),
        lambda: Select(Select(operator.input, terms[0]), conjunction(terms[1:])),
        f"{scalar_text(terms[0])} first, the other conditions above it",
    )


def _below_projection(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Project):
        return None
    project = operator.input
    values = {c.attribute: c.value for c in project.columns}
    used = [values[a] for a in refs(operator.condition) if a in values]
    moved = substitute(operator.condition, values)
    return Attempt(
        (steady(used), steady([operator.condition])),
        lambda: Project(Select(project.input, moved), project.columns),
        "the selection before the columns are computed",
        ("an error that computing a column raised may no longer come",),
    )


_LEFT_KINDS = (JoinKind.INNER, JoinKind.LEFT, JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK, JoinKind.SINGLE)
_RIGHT_KINDS = (JoinKind.INNER, JoinKind.RIGHT)


def _below_join(operator: Operator, context: Context) -> list[Attempt] | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Join):
        return None
    join = operator.input
    found = []
    for name, side, kinds in (("left", join.left, _LEFT_KINDS), ("right", join.right, _RIGHT_KINDS)):
        own = set(attributes(side))
        terms = [t for t in conjuncts(operator.condition) if refs(t) & own and not refs(t) & _others(join, side)]
        if terms and not (side is join.right and join.kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK)):
            found.append(_push_side(operator, join, name, kinds, terms))
    return found or None


def _others(join: Join, side: Operator) -> set[Attribute]:
    return set(attributes(join)) - set(attributes(side))


def _push_side(operator: Select, join: Join, name: str, kinds: tuple[JoinKind, ...], terms: list[Scalar]) -> Attempt:
    moving, staying = _parted(operator.condition, terms)
    kept = "left" if name == "right" else "right"

    def build() -> Operator:
        left, right = join.left, join.right
        if name == "left":
            left = Select(left, moving)
        else:
            right = Select(right, moving)
        return _above(Join(join.kind, left, right, join.condition, join.mark), staying)

    legal = check(
        "side-is-not-padded",
        join.kind in kinds,
        f"a {join.kind.value} join never pads its {name} side with NULLs",
        f"would bring back rows: the {join.kind.value} join keeps the {kept} rows of partners that are dropped below it",
    )
    return Attempt((legal, steady(terms)), build, f"{_texts(terms)} before the join, on its {name} side")


def _into_join(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Join):
        return None
    join = operator.input
    left, right = set(attributes(join.left)), set(attributes(join.right))
    terms = [t for t in conjuncts(operator.condition) if refs(t) & left and refs(t) & right]
    if not terms or join.kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK, JoinKind.SINGLE):
        return None
    moving, staying = _parted(operator.condition, terms)
    legal = check(
        "inner-join",
        join.kind is JoinKind.INNER,
        "an inner join drops the same rows as the selection",
        f"a {join.kind.value} join would keep rows that the selection drops, padded with NULLs",
    )
    return Attempt(
        (legal, steady(terms)),
        lambda: _above(Join(join.kind, join.left, join.right, conjunction((join.condition, moving))), staying),
        f"{_texts(terms)} as the join's condition",
    )


def _below_group(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Group):
        return None
    group = operator.input
    keys = set(group.keys)
    computed = {c.attribute for c in group.aggregates}
    terms = [t for t in conjuncts(operator.condition) if refs(t) & keys and not refs(t) & computed]
    if not terms:
        reads = sorted(a.name for a in refs(operator.condition) & computed)
        if not reads:
            return None
        lost = Check("reads-keys-only", "refuted", f"it reads {', '.join(reads)}, which only exists after grouping")
        below = Group(Select(group.input, operator.condition), group.keys, group.aggregates, group.sets)
        return Attempt((lost,), lambda: below, "the selection before the grouping")
    moving, staying = _parted(operator.condition, terms)
    plain = check(
        "plain-grouping", group.sets is None, "every group has its keys", "in a grouping set without it a key is NULL"
    )
    return Attempt(
        (plain, steady(terms)),
        lambda: _above(Group(Select(group.input, moving), group.keys, group.aggregates, group.sets), staying),
        f"{_texts(terms)} before the grouping: whole groups are dropped early",
    )


def _below_unary(operator: Operator, context: Context) -> Attempt | None:
    """Through distinct, sort and window."""
    if not isinstance(operator, Select) or not isinstance(operator.input, (Distinct, Sort)):
        return None
    inner = operator.input

    def build() -> Operator:
        below = Select(inner.input, operator.condition)
        return Distinct(below) if isinstance(inner, Distinct) else Sort(below, inner.keys)

    what = "fewer rows to compare" if isinstance(inner, Distinct) else "fewer rows to sort"
    return Attempt((steady([operator.condition]),), build, what)


def _below_window(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, Window):
        return None
    window = operator.input
    shared: set[Attribute] | None = None
    for column in window.columns:
        parts = {p.attribute for p in column.call.partition if isinstance(p, Ref)}
        shared = parts if shared is None else shared & parts
    added = {c.attribute for c in window.columns}
    terms = [t for t in conjuncts(operator.condition) if refs(t) and not refs(t) & added]
    if not terms:
        return None
    good = [t for t in terms if refs(t) <= (shared or set()) | free(operator)]
    moving, staying = _parted(operator.condition, good or terms)
    legal = check(
        "whole-partitions",
        bool(good),
        "whole partitions are dropped, the others are untouched",
        f"{_texts(terms)} would take rows out of the windows of others: it is not over the partition keys",
    )
    return Attempt(
        (legal, steady(good or terms)),
        lambda: _above(Window(Select(window.input, moving), window.columns), staying),
        f"{_texts(good or terms)} before the window",
    )


def _below_set(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or not isinstance(operator.input, SetOperation):
        return None
    whole = operator.input

    def build() -> Operator:
        parts = []
        for i, (part, source) in enumerate(zip(whole.inputs, whole.sources, strict=True)):
            mapping = dict(zip(whole.attributes, source, strict=True))
            needed = whole.kind is not SetKind.EXCEPT or i == 0
            parts.append(Select(part, renamed(operator.condition, mapping)) if needed else part)
        return SetOperation(whole.kind, tuple(parts), whole.sources, whole.attributes, whole.distinct)

    return Attempt((steady([operator.condition]),), build, "the selection in every input")


def _contradiction(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select) or operator.condition == TRUE:
        return None
    sure = context.facts.never_null(operator.input)
    never = "true" not in outcomes(operator.condition, frozenset(), sure)
    fixed: dict[Scalar, object] = {}
    for term in conjuncts(operator.condition):
        match term:
            case Comparison(operator=ComparisonOperator.EQUAL, left=left, right=right):
                for side, other in ((left, right), (right, left)):
                    value = constant(other)
                    if isinstance(side, Ref) and value is not None and not isinstance(value, str):
                        never = never or (side in fixed and fixed[side] != value)
                        fixed[side] = value
    if not never:
        return None
    return Attempt(
        (), lambda: Values(attributes(operator), ()), f"{scalar_text(operator.condition)} is never true: no rows"
    )


def _tautology(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Select):
        return None
    sure = context.facts.never_null(operator.input)
    idle = [t for t in conjuncts(operator.condition) if outcomes(t, frozenset(), sure) == {"true"}]
    if operator.condition != TRUE and not idle:
        return None
    staying = conjunction([t for t in conjuncts(operator.condition) if t not in idle])
    return Attempt((), lambda: _above(operator.input, staying), f"{_texts(idle) or 'the condition'} is always true")


def _through_equality(operator: Operator, context: Context) -> Attempt | None:
    """σ a = b ∧ p(a): p(b) holds too."""
    if not isinstance(operator, Select):
        return None
    classes = context.facts.of(operator).same
    terms = conjuncts(operator.condition)
    own = set(attributes(operator.input))
    found: list[Scalar] = []
    for term in terms:
        read = refs(term) & own
        if len(read) != 1 or volatile(term) or not isinstance(term, Comparison) or refs(term) != read:
            continue
        (attribute,) = read
        group = next((g for g in classes if attribute in g), frozenset())
        for other in sorted(group - {attribute}):
            derived = renamed(term, {attribute: other})
            if derived not in terms and derived not in found:
                found.append(derived)
    if not found:
        return None
    return Attempt(
        (),
        lambda: Select(operator.input, conjunction((*terms, *found))),
        f"{_texts(found)} follows, and can be pushed on its own",
    )


def _never_true_join(operator: Operator, context: Context) -> Attempt | None:
    """An inner join that equates a constant pair can be seen as a selection of the product."""
    if not isinstance(operator, Join) or operator.kind is not JoinKind.INNER:
        return None
    left, right = set(attributes(operator.left)), set(attributes(operator.right))
    loose = [t for t in conjuncts(operator.condition) if not (refs(t) & left and refs(t) & right)]
    loose = [t for t in loose if refs(t) & (left | right)]
    if not loose:
        return None
    moving, staying = _parted(operator.condition, loose)
    return Attempt(
        (steady(loose),),
        lambda: Select(Join(operator.kind, operator.left, operator.right, staying), moving),
        f"{_texts(loose)} reads one side only: a selection above the join, free to move",
    )


RULES = (
    Rule("merge-selections", "merge selections", "σp(σq(R)) = σp∧q(R)", TEXTBOOK, "selection", _merge),
    Rule("split-selection", "split a selection", "σp∧q(R) = σq(σp(R))", TEXTBOOK, "selection", _split),
    Rule(
        "push-selection-below-projection", "push a selection below a projection",
        "σp(πf(R)) = πf(σp∘f(R))", TEXTBOOK, "selection", _below_projection,
    ),
    Rule(
        "push-selection-below-join", "push a selection below a join",
        "σp(R ⋈ S) = σp(R) ⋈ S where p reads R; also for ⟕ ⋉ ▷ on their left side",
        "Galindo-Legaria, Rosenthal, TODS 22(1) 1997", "selection", _below_join,
    ),
    Rule(
        "selection-into-join", "make a selection the join's condition",
        "σp(R × S) = R ⋈p S", TEXTBOOK, "selection", _into_join,
    ),
    Rule(
        "selection-out-of-join", "take a one-sided condition out of a join",
        "R ⋈p∧q S = σq(R ⋈p S)", TEXTBOOK, "selection", _never_true_join,
    ),
    Rule(
        "push-selection-below-grouping", "push a selection on keys below a grouping",
        "σp(γK;A(R)) = γK;A(σp(R)) where p reads K only", "Yan, Larson, VLDB 1995", "selection", _below_group,
    ),
    Rule(
        "push-selection-below-distinct-or-sort", "push a selection below distinct or sort",
        "σp(δ(R)) = δ(σp(R)), σp(τ(R)) = τ(σp(R))", TEXTBOOK, "selection", _below_unary,
    ),
    Rule(
        "push-selection-below-window", "push a selection on partition keys below a window",
        "σp(ωP(R)) = ωP(σp(R)) where p reads P only", "ISO/IEC 9075-2, window functions", "selection", _below_window,
    ),
    Rule(
        "push-selection-below-set-operation", "push a selection into a set operation",
        "σp(R ∪ S) = σp(R) ∪ σp(S), σp(R ∩ S) = σp(R) ∩ σp(S), σp(R − S) = σp(R) − S", TEXTBOOK, "selection", _below_set,
    ),
    Rule("contradiction-to-empty", "a condition that is never true", "σfalse(R) = ∅", TEXTBOOK, "selection", _contradiction),
    Rule("drop-tautology", "drop a condition that is always true", "σtrue(R) = R", TEXTBOOK, "selection", _tautology),
    Rule(
        "derive-selection-through-equality", "derive a condition through an equality",
        "σa=b∧p(a)(R) = σa=b∧p(a)∧p(b)(R)", "Ullman, Principles of Database Systems", "selection", _through_equality,
    ),
)  # fmt: skip
