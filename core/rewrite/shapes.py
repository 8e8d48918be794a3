"""Rewrites of projections, groupings, set operations, orderings."""

from __future__ import annotations

from core.algebra.graph import attributes
from core.algebra.notation import scalar_text
from core.algebra.operators import (
    AggregateColumn,
    Column,
    Distinct,
    Group,
    Join,
    JoinKind,
    Limit,
    Operator,
    Project,
    SetKind,
    SetOperation,
    Sort,
)
from core.algebra.scalars import (
    Aggregate,
    Case,
    Cast,
    Comparison,
    ComparisonOperator,
    IsNull,
    Literal,
    Ref,
    Scalar,
    conjunction,
    refs,
    substitute,
    walk,
)
from core.algebra.types import BIGINT, Family
from core.rewrite.context import Context
from core.rewrite.rule import Attempt, Check, Rule, check
from core.rewrite.selection import TEXTBOOK, steady

_HEAVY = 200


# --- projections ---------------------------------------------------------------------------------------------------


def _merge_projections(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Project) or not isinstance(operator.input, Project):
        return None
    inner = operator.input
    values = {c.attribute: c.value for c in inner.columns}
    used = [values[a] for c in operator.columns for a in refs(c.value) if a in values]
    merged = tuple(Column(c.attribute, substitute(c.value, values)) for c in operator.columns)
    size = sum(1 for c in merged for _ in walk(c.value))
    short = check("stays-readable", size <= _HEAVY, "the expressions stay short", "the expressions would grow too long")
    # A merged column may not take the identity of an input attribute that now means something else.
    own = set(attributes(inner.input))
    clash = [c for c in merged if c.attribute in own and c.value != Ref(c.attribute)]
    apart = check(
        "identities-apart", not clash, "every column keeps its own identity", "a column bears the identity of another"
    )
    return Attempt(
        (steady(used), short, apart), lambda: Project(inner.input, merged), "one projection that computes everything"
    )


def _identity_projection(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Project) or any(c.value != Ref(c.attribute) for c in operator.columns):
        return None
    dropped = set(attributes(operator.input)) - set(attributes(operator))
    whole = check(
        "nothing-is-dropped",
        not dropped,
        "it keeps every attribute",
        f"it drops {', '.join(sorted(a.name for a in dropped))}",
    )
    return Attempt((whole,), lambda: operator.input, "without the projection")


def _narrow(operator: Operator, context: Context) -> Attempt | None:
    """Columns that nothing above reads are not computed or carried."""
    if not isinstance(operator, Project):
        return None
    needed = context.needed[operator]
    kept = tuple(c for c in operator.columns if c.attribute in needed)
    idle = [c for c in operator.columns if c.attribute not in needed]
    if not idle:
        return None
    names = ", ".join(c.attribute.name for c in idle)
    return Attempt(
        (steady([c.value for c in idle]),),
        lambda: Project(operator.input, kept),
        f"without {names}, which nothing above reads",
    )


# --- grouping and distinct -----------------------------------------------------------------------------------------


def _distinct_on_key(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Distinct):
        return None
    legal = check(
        "no-duplicates",
        bool(context.facts.keys(operator.input)),
        f"its rows have a key: {_keys(operator.input, context)}",
        "no key is known of its rows",
        "legal if a key of the relations below is declared and kept",
        proof=False,
    )
    idle = check(
        "duplicates-do-not-matter", not context.duplicates_matter[operator], "duplicates do not matter above", ""
    )
    either = legal if legal.passed or not idle.passed else idle
    return Attempt(
        (either,), lambda: operator.input, "without removing duplicates: there are none, or they do not matter"
    )


def _keys(operator: Operator, context: Context) -> str:
    found = sorted(context.facts.keys(operator), key=lambda k: (len(k), sorted(a.id for a in k)))
    if not found:
        return ""
    return "(" + ", ".join(sorted(a.name for a in found[0])) + ")" if found[0] else "at most one row"


def _group_on_key(operator: Operator, context: Context) -> Attempt | None:
    """Groups of one row each."""
    if not isinstance(operator, Group) or not operator.keys or operator.sets is not None:
        return None
    single = context.facts.is_key(operator.input, operator.keys)
    legal = check(
        "one-row-a-group",
        single,
        "the group keys hold a key of the input",
        f"({', '.join(a.name for a in operator.keys)}) is not known to be a key of the input",
        "legal if it is declared a key",
        proof=False,
    )
    values = {c.attribute: _of_one_row(c.aggregate) for c in operator.aggregates}
    odd = [c for c in operator.aggregates if values[c.attribute] is None]
    simple = check(
        "aggregates-of-one-row",
        not odd,
        "every aggregate of one row is that row's value",
        f"{', '.join(c.aggregate.name for c in odd)} of one row has no plain form here",
    )

    def build() -> Operator:
        columns = [Column(key, Ref(key)) for key in operator.keys]
        columns += [Column(a, value) for a, value in values.items() if value is not None]
        return Project(operator.input, tuple(columns))

    return Attempt((legal, simple), build, "no grouping: every group is one row")


def _of_one_row(call: Aggregate) -> Scalar | None:
    if call.condition is not None or call.order:
        return None
    if call.name == "count" and not call.arguments:
        return Literal("1", BIGINT)
    if len(call.arguments) != 1:
        return None
    argument = call.arguments[0]
    if call.name == "count":
        return Case(((IsNull(argument), Literal("0", BIGINT)),), Literal("1", BIGINT))
    if call.name in ("min", "max"):
        return argument
    if call.name in ("sum", "avg") and call.type.family is not Family.UNKNOWN:
        return Cast(argument, call.type)
    return None


def _distinct_to_group(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Distinct):
        return None
    return Attempt((), lambda: Group(operator.input, attributes(operator), ()), "a grouping by every attribute")


def _group_to_distinct(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Group) or operator.aggregates or operator.sets is not None or not operator.keys:
        return None
    keys = tuple(Column(key, Ref(key)) for key in operator.keys)
    return Attempt((), lambda: Distinct(Project(operator.input, keys)), "the distinct key values")


def _count_distinct(operator: Operator, context: Context) -> Attempt | None:
    """count(distinct a) of values that are all different."""
    if not isinstance(operator, Group) or operator.sets is not None:
        return None
    counted = [
        c for c in operator.aggregates
        if c.aggregate.name == "count" and c.aggregate.distinct and len(c.aggregate.arguments) == 1 and c.aggregate.condition is None
    ]  # fmt: skip
    if not counted:
        return None
    sure = context.facts.never_null(operator.input)
    checks: list[Check] = []
    changed: dict[AggregateColumn, Aggregate] = {}
    for column in counted:
        argument = column.aggregate.arguments[0]
        unique = isinstance(argument, Ref) and context.facts.is_key(
            operator.input, [*operator.keys, argument.attribute]
        )
        text = scalar_text(argument)
        checks.append(
            check(
                "values-are-different",
                unique,
                f"{text} is a key of each group's rows",
                f"{text} may repeat within a group",
                f"legal if {text} is a key of the input, for example after joins are made semi-joins",
                proof=False,
            )
        )
        present = isinstance(argument, Ref) and argument.attribute in sure
        arguments = () if present else column.aggregate.arguments
        changed[column] = Aggregate("count", arguments, BIGINT)

    def build() -> Operator:
        columns = tuple(AggregateColumn(c.attribute, changed.get(c, c.aggregate)) for c in operator.aggregates)
        return Group(operator.input, operator.keys, columns, operator.sets)

    names = ", ".join(scalar_text(c.aggregate) for c in counted)
    return Attempt(tuple(checks), build, f"{names} counts rows: nothing is compared")


def _idle_aggregates(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Group):
        return None
    needed = context.needed[operator]
    kept = tuple(c for c in operator.aggregates if c.attribute in needed)
    if len(kept) == len(operator.aggregates):
        return None
    return Attempt(
        (),
        lambda: Group(operator.input, operator.keys, kept, operator.sets),
        "without aggregates that nothing above reads",
    )


# --- set operations ------------------------------------------------------------------------------------------------


def _union_all(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, SetOperation) or operator.kind is not SetKind.UNION or not operator.distinct:
        return None
    idle = not context.duplicates_matter[operator]
    apart = _disjoint_and_distinct(operator, context)
    if idle:
        text = "duplicates do not matter above"
    else:
        text = "the inputs have no duplicates and share no row"
    legal = check(
        "no-duplicates",
        idle or apart,
        text,
        "the inputs may share rows, or hold duplicates, which UNION removes",
        proof=False,
    )
    return Attempt(
        (legal,),
        lambda: SetOperation(SetKind.UNION, operator.inputs, operator.sources, operator.attributes, False),
        "UNION ALL: nothing is compared",
    )


def _disjoint_and_distinct(operator: SetOperation, context: Context) -> bool:
    """No input has duplicates among its sources, and each differs from the others in a constant column."""
    for part, source in zip(operator.inputs, operator.sources, strict=True):
        if not context.facts.is_key(part, source):
            return False
    constants = [
        _constant_columns(part, source) for part, source in zip(operator.inputs, operator.sources, strict=True)
    ]
    for i, first in enumerate(constants):
        for second in constants[i + 1 :]:
            if not any(place in second and second[place] != value for place, value in first.items()):
                return False
    return True


def _constant_columns(part: Operator, source: tuple[object, ...]) -> dict[int, Literal]:
    while isinstance(part, (Distinct, Sort)):
        part = part.input
    if not isinstance(part, Project):
        return {}
    values = {c.attribute: c.value for c in part.columns}
    found = {}
    for place, attribute in enumerate(source):
        value = values.get(attribute)  # type: ignore[call-overload]
        if isinstance(value, Literal) and value.text is not None and value.type.family in (Family.INTEGER, Family.TEXT):
            found[place] = value
    return found


def _flatten_union(operator: Operator, context: Context) -> Attempt | None:
    """(R ∪ S) ∪ T as one union of three."""
    if not isinstance(operator, SetOperation) or operator.kind is not SetKind.UNION:
        return None
    place = next(
        (i for i, p in enumerate(operator.inputs) if isinstance(p, SetOperation) and p.kind is SetKind.UNION), None
    )
    if place is None:
        return None
    inner = operator.inputs[place]
    assert isinstance(inner, SetOperation)
    legal = check(
        "same-meaning-inside",
        operator.distinct or not inner.distinct,
        "duplicates are removed above, or by neither",
        "the inner union removes duplicates, the outer does not",
    )

    def build() -> Operator:
        where = {a: i for i, a in enumerate(inner.attributes)}
        order = [where[a] for a in operator.sources[place]]
        sources = tuple(tuple(source[i] for i in order) for source in inner.sources)
        parts = (*operator.inputs[:place], *inner.inputs, *operator.inputs[place + 1 :])
        return SetOperation(
            SetKind.UNION,
            parts,
            (*operator.sources[:place], *sources, *operator.sources[place + 1 :]),
            operator.attributes,
            operator.distinct,
        )

    return Attempt((legal,), build, "one union of all inputs")


def _to_half_join(operator: Operator, context: Context) -> Attempt | None:
    """INTERSECT and EXCEPT by existence, with NULLs equal."""
    if not isinstance(operator, SetOperation) or operator.kind is SetKind.UNION:
        return None
    legal = check(
        "set-meaning",
        operator.distinct,
        "the result is a set",
        "ALL counts how often rows occur, which existence does not",
    )

    def build() -> Operator:
        left, right = operator.inputs
        named = Project(
            left, tuple(Column(a, Ref(s)) for a, s in zip(operator.attributes, operator.sources[0], strict=True))
        )
        same = [
            Comparison(ComparisonOperator.NOT_DISTINCT, Ref(a), Ref(s))
            for a, s in zip(operator.attributes, operator.sources[1], strict=True)
        ]
        kind = JoinKind.SEMI if operator.kind is SetKind.INTERSECT else JoinKind.ANTI
        return Distinct(Join(kind, named, right, conjunction(same)))

    apart = check(
        "sides-apart",
        not set(operator.sources[0]) & set(operator.sources[1]),
        "the inputs are different attributes",
        "both inputs are one shared part",
    )
    return Attempt((legal, apart), build, "by existence: the right side can stop at the first partner")


# --- order and limits ----------------------------------------------------------------------------------------------


def _remove_sort(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Sort):
        return None
    legal = check(
        "order-is-not-read",
        not context.order_matters[operator],
        "nothing above depends on the order",
        "the order decides the answer, or is the answer's own",
    )
    return Attempt((legal,), lambda: operator.input, "without the sort")


def _limit_below_projection(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Limit) or not isinstance(operator.input, Project) or operator.with_ties:
        return None
    project = operator.input
    return Attempt(
        (steady([c.value for c in project.columns]),),
        lambda: Project(Limit(project.input, operator.count, operator.offset), project.columns),
        "columns are computed for the rows that are kept only",
    )


RULES = (
    Rule("merge-projections", "merge projections", "πf(πg(R)) = πf∘g(R)", TEXTBOOK, "projection", _merge_projections),
    Rule("drop-identity-projection", "drop a projection that keeps everything", "πR(R) = R", TEXTBOOK, "projection", _identity_projection),
    Rule("narrow-projection", "drop columns that nothing reads", "πA(πA∪B(R)) = πA(R)", TEXTBOOK, "projection", _narrow),
    Rule(
        "drop-distinct", "no duplicates to remove", "δ(R) = R where R has a key; δ(δ(R)) = δ(R)",
        "Paulley, Larson, ICDE 1994", "grouping", _distinct_on_key,
    ),
    Rule("group-on-key", "groups of one row", "γK;A(R) = πK,A(R) where K is a key of R", "Paulley, Larson, ICDE 1994", "grouping", _group_on_key),
    Rule("distinct-to-group", "distinct as a grouping", "δ(R) = γR;(R)", TEXTBOOK, "grouping", _distinct_to_group),
    Rule("group-to-distinct", "a grouping without aggregates", "γK;(R) = δ(πK(R))", TEXTBOOK, "grouping", _group_to_distinct),
    Rule(
        "count-distinct-to-count", "count what is different anyway",
        "γK;count(distinct a)(R) = γK;count(a)(R) where K ∪ a is a key of R", "Paulley, Larson, ICDE 1994", "grouping", _count_distinct,
    ),
    Rule("drop-idle-aggregates", "drop aggregates that nothing reads", "πK(γK;A(R)) = πK(γK;(R))", TEXTBOOK, "grouping", _idle_aggregates),
    Rule(
        "union-to-union-all", "a union that need not remove duplicates", "δ(R ∪ S) = δ(R ∪all S); R ∪ S = R ∪all S where disjoint and duplicate-free",
        TEXTBOOK, "set operations", _union_all,
    ),
    Rule("flatten-union", "a union inside a union", "(R ∪ S) ∪ T = ∪(R, S, T)", TEXTBOOK, "set operations", _flatten_union),
    Rule(
        "set-operation-to-half-join", "intersection and difference by existence",
        "R ∩ S = δ(R ⋉ S), R − S = δ(R ▷ S), NULLs equal", "ISO/IEC 9075-2, set operations", "set operations", _to_half_join,
    ),
    Rule("drop-sort", "a sort that nothing needs", "γ(τ(R)) = γ(R), τ(R) ⋈ S = R ⋈ S as bags", TEXTBOOK, "order", _remove_sort),
    Rule("limit-below-projection", "limit before computing columns", "λ(πf(R)) = πf(λ(R))", TEXTBOOK, "order", _limit_below_projection),
)  # fmt: skip
