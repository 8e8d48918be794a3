"""The algebra as text: signs, scalars and one-line descriptions of operators, and an indented tree.

Text for people. The scalars follow SQL's spelling (lower case keywords) with the signs of the textbook where they are
shorter. It is what the drawing writes beside an operator, what tests compare and what goes into a bug report.
"""

from __future__ import annotations

from collections.abc import Callable, Collection

from core.algebra.graph import attributes, inputs
from core.algebra.operators import (
    Distinct,
    Divide,
    Fixpoint,
    Group,
    Join,
    JoinKind,
    Limit,
    Nest,
    Operator,
    Project,
    Recurrence,
    Relation,
    Select,
    SetKind,
    SetOperation,
    Sort,
    TableFunction,
    Unnest,
    Values,
    Window,
)
from core.algebra.scalars import (
    TRUE,
    Aggregate,
    And,
    Arithmetic,
    ArithmeticOperator,
    Attribute,
    Call,
    Case,
    Cast,
    Comparison,
    ComparisonOperator,
    Frame,
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
    SortKey,
    WindowCall,
    parts,
)
from core.algebra.types import Family

Naming = Callable[[Attribute], str]

_LEVELS = {
    ArithmeticOperator.ADD: 6,
    ArithmeticOperator.SUBTRACT: 6,
    ArithmeticOperator.CONCATENATE: 5,
    ArithmeticOperator.MULTIPLY: 7,
    ArithmeticOperator.DIVIDE: 7,
    ArithmeticOperator.INTEGER_DIVIDE: 7,
    ArithmeticOperator.REMAINDER: 7,
}
_QUOTED = (Family.TEXT, Family.DATE, Family.TIME, Family.TIMESTAMP, Family.INTERVAL, Family.OTHER, Family.BINARY)


def by_name(attribute: Attribute) -> str:
    return attribute.name


def scalar_text(node: Node, naming: Naming = by_name) -> str:
    """A scalar, aggregate, sort key or window call as text."""
    done: dict[Node, tuple[str, int]] = {}
    pending: list[tuple[Node, bool]] = [(node, False)]
    while pending:
        current, ready = pending.pop()
        if current in done:
            continue
        if ready:
            done[current] = _text(current, naming, done)
        else:
            pending.append((current, True))
            pending.extend((part, False) for part in parts(current))
    return done[node][0]


def _text(node: Node, naming: Naming, done: dict[Node, tuple[str, int]]) -> tuple[str, int]:
    """The text of a node whose parts are done, and how tightly it binds (10 never needs parentheses)."""

    def inner(part: Node, level: int = 0) -> str:
        text, binds = done[part]
        return text if binds >= level else f"({text})"

    match node:
        case Ref(attribute=attribute):
            return naming(attribute), 10
        case Literal(text=None):
            return "null", 10
        case Literal(text=str(text), type=type_):
            return (f"'{text}'" if type_.family in _QUOTED else text), 10
        case Comparison(operator=operator, left=left, right=right):
            sign = "≠" if operator is ComparisonOperator.UNEQUAL else operator.value
            sign = {"<=": "≤", ">=": "≥"}.get(sign, sign)
            return f"{inner(left, 5)} {sign} {inner(right, 5)}", 4
        case And(terms=terms):
            return " and ".join(inner(term, 3) for term in terms), 2
        case Or(terms=terms):
            return " or ".join(inner(term, 2) for term in terms), 1
        case Not(term=IsNull(term=term)):
            return f"{inner(term, 5)} is not null", 4
        case Not(term=InList(term=term, items=items)):
            return f"{inner(term, 5)} not in ({', '.join(inner(item) for item in items)})", 4
        case Not(term=term):
            return f"not {inner(term, 3)}", 3
        case IsNull(term=term):
            return f"{inner(term, 5)} is null", 4
        case IsTruth(term=term, value=value):
            return f"{inner(term, 5)} is {str(value).lower()}", 4
        case InList(term=term, items=items):
            return f"{inner(term, 5)} in ({', '.join(inner(item) for item in items)})", 4
        case Arithmetic(operator=sign, left=left, right=right):
            level = _LEVELS[sign]
            return f"{inner(left, level)} {sign.value} {inner(right, level + 1)}", level
        case Negative(term=term):
            return f"-{inner(term, 9)}", 8
        case Case(branches=branches, otherwise=otherwise):
            arms = " ".join(f"when {inner(c)} then {inner(v)}" for c, v in branches)
            return f"case {arms} else {inner(otherwise)} end", 10
        case Cast(term=term, type=type_, lenient=lenient):
            return f"{'try_cast' if lenient else 'cast'}({inner(term)} as {type_})", 10
        case Call(name="like", arguments=(term, pattern)):
            return f"{inner(term, 5)} like {inner(pattern, 5)}", 4
        case Call(name=name, arguments=arguments):
            return f"{name}({', '.join(inner(argument) for argument in arguments)})", 10
        case SortKey(term=term, descending=descending, nulls_first=nulls_first):
            order = " desc" if descending else ""
            nulls = " nulls first" if nulls_first else ""
            return inner(term) + order + nulls, 10
        case Aggregate():
            return _aggregate_text(node, inner), 10
        case Frame(unit=unit, start=start, end=end, exclude=exclude):
            bounds = [_bound_text(bound, inner) for bound in (start, end)]
            return f"{unit} between {bounds[0]} and {bounds[1]}" + (f" exclude {exclude}" if exclude else ""), 10
        case WindowCall(function=function, partition=partition, order=order, frame=frame):
            pieces = []
            if partition:
                pieces.append("by " + ", ".join(inner(term) for term in partition))
            if order:
                pieces.append("in order of " + ", ".join(inner(key) for key in order))
            if frame is not None:
                pieces.append(inner(frame))
            return f"{inner(function)} over ({' '.join(pieces)})", 10
    raise TypeError(f"not a scalar: {node!r}")


def _aggregate_text(node: Aggregate, inner: Callable[[Node], str]) -> str:
    arguments = ", ".join(inner(argument) for argument in node.arguments)
    if node.name == "count" and not node.arguments:
        arguments = "*"
    text = f"{node.name}({'distinct ' if node.distinct else ''}{arguments}"
    if node.order:
        text += " order by " + ", ".join(inner(key) for key in node.order)
    text += ")"
    return text if node.condition is None else f"{text} where {inner(node.condition)}"


def _bound_text(bound: tuple[Scalar | None, str], inner: Callable[[Node], str]) -> str:
    offset, direction = bound
    if direction == "current":
        return "current row"
    return f"{'unbounded' if offset is None else inner(offset)} {direction}"


def qualified(seen: Collection[Attribute]) -> Naming:
    """A naming that is unambiguous among the given attributes: a name borne twice gets its identity number."""
    counts: dict[str, int] = {}
    for attribute in seen:
        counts[attribute.name] = counts.get(attribute.name, 0) + 1
    return lambda a: f"{a.name}#{a.id}" if counts.get(a.name, 0) > 1 else a.name


_JOIN_SIGNS = {
    JoinKind.INNER: "⋈",
    JoinKind.LEFT: "⟕",
    JoinKind.RIGHT: "⟖",
    JoinKind.FULL: "⟗",
    JoinKind.SEMI: "⋉",
    JoinKind.ANTI: "▷",
    JoinKind.MARK: "⋉",
    JoinKind.SINGLE: "⟕",
}
_SET_SIGNS = {SetKind.UNION: "∪", SetKind.INTERSECT: "∩", SetKind.EXCEPT: "−"}


def is_product(operator: Operator) -> bool:
    return isinstance(operator, Join) and operator.kind is JoinKind.INNER and operator.condition == TRUE


def is_renaming(operator: Operator) -> bool:
    """Whether a projection only gives every attribute of its input a new identity: ρ."""
    if not isinstance(operator, Project) or not operator.columns:
        return False
    values = [c.value for c in operator.columns]
    return (
        all(isinstance(v, Ref) for v in values)
        and len(set(values)) == len(values) == len(attributes(operator.input))
        and all(c.value != Ref(c.attribute) for c in operator.columns)
    )


def sign(operator: Operator) -> str:
    """The textbook sign; empty for the leaves, whose sign is their name."""
    match operator:
        case Relation() | Values() | TableFunction() | Recurrence():
            return ""
        case Select():
            return "σ"
        case Project():
            return "ρ" if is_renaming(operator) else "π"
        case Join(kind=kind):
            return "×" if is_product(operator) else _JOIN_SIGNS[kind]
        case SetOperation(kind=set_kind):
            return _SET_SIGNS[set_kind]
        case Divide():
            return "÷"
        case Distinct():
            return "δ"
        case Group():
            return "γ"
        case Nest():
            return "ν"
        case Unnest():
            return "μ"
        case Window():
            return "ω"
        case Sort():
            return "τ"
        case Limit():
            return "λ"
        case Fixpoint():
            return "fix"


def sign_mark(operator: Operator) -> str:
    """What is written small beside the sign: "all" for bag versions, "1" for a scalar subquery, "?" for a truth mark."""
    match operator:
        case SetOperation(distinct=False):
            return "all"
        case Join(kind=JoinKind.SINGLE):
            return "1"
        case Join(kind=JoinKind.MARK):
            return "?"
        case _:
            return ""


def name_of(operator: Operator) -> str:
    """The kind of an operator in words."""
    match operator:
        case Relation():
            return "relation"
        case Values():
            return "values"
        case TableFunction():
            return "table function"
        case Recurrence():
            return "rows so far"
        case Select():
            return "select"
        case Project():
            return "rename" if is_renaming(operator) else "project"
        case Join(kind=kind):
            if is_product(operator):
                return "product"
            return {JoinKind.INNER: "join", JoinKind.SINGLE: "single join"}.get(kind, f"{kind.value} join")
        case SetOperation(kind=set_kind):
            return {SetKind.UNION: "union", SetKind.INTERSECT: "intersection", SetKind.EXCEPT: "difference"}[set_kind]
        case Divide():
            return "division"
        case Distinct():
            return "distinct"
        case Group():
            return "group"
        case Nest():
            return "nest"
        case Unnest():
            return "unnest"
        case Window():
            return "window"
        case Sort():
            return "sort"
        case Limit():
            return "limit"
        case Fixpoint():
            return "fixpoint"


def condition_text(operator: Operator, naming: Naming = by_name) -> str:
    """What stands beside the sign: the condition, the columns, the keys and aggregates."""
    match operator:
        case Relation(name=name, alias=alias):
            own = ", ".join(naming(a) for a in attributes(operator))
            return f"{name}{f' as {alias}' if alias and alias != name else ''} ({own})"
        case Values(rows=rows):
            return f"{len(rows)} row{'' if len(rows) == 1 else 's'}"
        case TableFunction(call=call):
            return scalar_text(call, naming)
        case Recurrence(name=name):
            return name
        case Select(condition=condition):
            return scalar_text(condition, naming)
        case Join(condition=condition, mark=mark):
            text = "" if condition == TRUE else scalar_text(condition, naming)
            return text if mark is None else f"{text} → {naming(mark)}".strip()
        case Project(columns=columns):
            return ", ".join(_column_text(c.attribute, c.value, naming) for c in columns)
        case SetOperation(attributes=own):
            return ", ".join(naming(a) for a in own)
        case Divide(by=by):
            return ", ".join(f"{naming(a)} = {naming(b)}" for a, b in by)
        case Distinct():
            return ", ".join(naming(a) for a in attributes(operator))
        case Group():
            return _group_text(operator, naming)
        case Nest(keys=keys, nested=nested, into=into):
            return f"{_listed(keys, naming)} ; ({_listed(nested, naming)}) → {naming(into)}"
        case Unnest(term=term, attributes=own):
            return f"{scalar_text(term, naming)} → {_listed(own, naming)}"
        case Window(columns=window_columns):
            return ", ".join(f"{scalar_text(c.call, naming)} → {naming(c.attribute)}" for c in window_columns)
        case Sort(keys=sort_keys):
            return ", ".join(scalar_text(key, naming) for key in sort_keys)
        case Limit(count=count, offset=offset, with_ties=with_ties):
            pieces = [] if count is None else [scalar_text(count, naming)]
            if with_ties:
                pieces.append("with ties")
            if offset is not None:
                pieces.append(f"after {scalar_text(offset, naming)}")
            return " ".join(pieces)
        case Fixpoint(name=name, distinct=distinct):
            return f"{name} {'' if distinct else '(all)'}".strip()


def _listed(names: tuple[Attribute, ...], naming: Naming) -> str:
    return ", ".join(naming(a) for a in names)


def _column_text(attribute: Attribute, value: Scalar, naming: Naming) -> str:
    text = scalar_text(value, naming)
    return text if isinstance(value, Ref) and text == naming(attribute) else f"{text} → {naming(attribute)}"


def _group_text(operator: Group, naming: Naming) -> str:
    keys = _listed(operator.keys, naming)
    if operator.sets is not None:
        keys = ", ".join(f"({_listed(part, naming)})" for part in operator.sets)
    found = ", ".join(f"{scalar_text(c.aggregate, naming)} → {naming(c.attribute)}" for c in operator.aggregates)
    return " ; ".join(piece for piece in (keys, found) if piece) if keys or found else "()"


def line(operator: Operator, naming: Naming = by_name) -> str:
    """Sign and condition in one line."""
    mark = sign_mark(operator)
    head = sign(operator) + (f"[{mark}]" if mark else "")
    text = condition_text(operator, naming)
    return f"{head} {text}".strip()


def tree_text(
    root: Operator, naming: Naming = by_name, facts: Callable[[Operator], str] | None = None, indent: str = "  "
) -> str:
    """The graph as an indented tree, answer first. A shared operator is written once; then its number stands for it."""
    readers: dict[Operator, int] = {}
    pending: list[Operator] = [root]
    seen: set[Operator] = set()
    while pending:
        operator = pending.pop()
        readers[operator] = readers.get(operator, 0) + 1
        if operator not in seen:
            seen.add(operator)
            pending.extend(inputs(operator))
    numbers: dict[Operator, int] = {}
    lines: list[str] = []
    stack: list[tuple[Operator, int]] = [(root, 0)]
    while stack:
        operator, depth = stack.pop()
        if operator in numbers:
            lines.append(f"{indent * depth}*{numbers[operator]}")
            continue
        text = line(operator, naming)
        if readers[operator] > 1:
            numbers[operator] = len(numbers) + 1
            text = f"{text}  *{numbers[operator]}:"
        extra = "" if facts is None else facts(operator)
        lines.append(f"{indent * depth}{text}{'  ' + extra if extra else ''}")
        stack.extend((below, depth + 1) for below in reversed(inputs(operator)))
    return "\n".join(lines)
