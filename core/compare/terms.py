"""Canonical texts of scalars: the same text for expressions that differ only in how they are written."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from datetime import datetime, time
from decimal import Decimal

from core.algebra.scalars import (
    MIRRORED,
    NEGATED,
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
    walk,
)
from core.algebra.types import Family
from core.algebra.typing import type_of
from core.catalog.model import Value
from core.size.values import constant, number

Label = Callable[[Attribute], str]
_SYMMETRIC = (
    ComparisonOperator.EQUAL,
    ComparisonOperator.UNEQUAL,
    ComparisonOperator.DISTINCT,
    ComparisonOperator.NOT_DISTINCT,
)
_PLAIN_NAMES = frozenset({"coalesce", "lower", "upper", "abs", "length"})
"""Functions whose name and arguments say everything, so that a call made by a rule is the one that was read."""


_DEFAULT_FRAMES = (
    Frame("range", (None, "preceding"), (None, "current")),
    Frame("RANGE", (None, "preceding"), (None, "current")),
)
"""What the standard takes where no frame is written."""


def term_text(node: Node, label: Label) -> str:
    """The canonical text of a scalar, with attributes called by their labels."""
    match node:
        case Ref(attribute=attribute):
            return label(attribute)
        case Literal():
            return _literal(node)
        case Comparison(operator=operator, left=left, right=right):
            return _comparison(operator, left, right, label)
        case And(terms=terms):
            return f"and({' & '.join(bounded_texts(terms, label))})"
        case Or(terms=terms):
            return _disjunction(terms, label)
        case Not(term=term):
            return _negation(term, label)
        case IsNull(term=term):
            return f"null({term_text(term, label)})"
        case IsTruth(term=term, value=value):
            return f"is_{str(value).lower()}({term_text(term, label)})"
        case InList(term=term, items=items):
            return _disjunction(tuple(Comparison(ComparisonOperator.EQUAL, term, item) for item in items), label)
        case Arithmetic():
            return _arithmetic(node, label)
        case Negative(term=term):
            return f"minus({term_text(term, label)})"
        case Case(branches=branches, otherwise=otherwise):
            arms = "; ".join(f"{term_text(c, label)}: {term_text(v, label)}" for c, v in branches)
            return f"case({arms}; else {term_text(otherwise, label)})"
        case Cast(term=term, type=type_, lenient=lenient):
            if type_of(term) == type_:
                return term_text(term, label)
            return f"{'try_' if lenient else ''}cast({term_text(term, label)} as {type_})"
        case Call():
            return _call(node, label)
        case Aggregate():
            return _aggregate(node, label)
        case SortKey(term=term, descending=descending, nulls_first=nulls_first):
            return f"{term_text(term, label)} {'desc' if descending else 'asc'} {'nf' if nulls_first else 'nl'}"
        case WindowCall(function=function, partition=partition, order=order, frame=frame):
            by = sorted({term_text(p, label) for p in partition})
            keys = [term_text(k, label) for k in order]
            bounds = "" if frame is None or frame in _DEFAULT_FRAMES else term_text(frame, label)
            return f"window({term_text(function, label)} by {by} order {keys} {bounds})"
        case Frame(unit=unit, start=start, end=end, exclude=exclude):
            ends = [f"{'' if o is None else term_text(o, label)} {d}" for o, d in (start, end)]
            return f"{unit} {ends[0]} to {ends[1]} {exclude}"
    raise TypeError(f"not a scalar: {node!r}")


def _literal(node: Literal) -> str:
    if node.text is None:
        return "NULL"
    return f"{node.type.family.value}:{node.text!r}"


def _comparison(operator: ComparisonOperator, left: Scalar, right: Scalar, label: Label) -> str:
    operator, left, right = _closed(operator, left, right)
    first, second = _side(left, label), _side(right, label)
    if operator in (ComparisonOperator.GREATER, ComparisonOperator.AT_LEAST):
        operator, first, second = MIRRORED[operator], second, first
    if operator in _SYMMETRIC and second < first:
        first, second = second, first
    return f"({first} {operator.value} {second})"


def _closed(operator: ComparisonOperator, left: Scalar, right: Scalar) -> tuple[ComparisonOperator, Scalar, Scalar]:
    """Among whole numbers `x < 6` is `x <= 5`: bounds are written closed."""
    shift = {ComparisonOperator.LESS: -1, ComparisonOperator.GREATER: 1}.get(operator)
    if shift is None:
        return operator, left, right
    closed = ComparisonOperator.AT_MOST if shift < 0 else ComparisonOperator.AT_LEAST
    if isinstance(right, Literal) and right.type.family is type_of(left).family is Family.INTEGER and right.text:
        return closed, left, Literal(str(int(right.text) + shift), right.type)
    if isinstance(left, Literal) and left.type.family is type_of(right).family is Family.INTEGER and left.text:
        return closed, Literal(str(int(left.text) - shift), left.type), right
    return operator, left, right


def _side(scalar: Scalar, label: Label) -> str:
    """A side of a comparison; constant arithmetic on dates is done, and 1.50 is 1.5 (elsewhere the scale may show)."""
    if isinstance(scalar, Literal) and scalar.type.family is Family.DECIMAL and scalar.text is not None:
        return f"decimal:{Decimal(scalar.text).normalize()}"
    if isinstance(scalar, Arithmetic):
        value = constant(scalar)
        if value is not None and not isinstance(value, (int, float, Decimal)):
            return _literal(Literal(value.isoformat() if not isinstance(value, str) else value, scalar.type))
    return term_text(scalar, label)


def bounded_texts(terms: Sequence[Scalar], label: Label) -> list[str]:
    """The texts of a conjunction's terms, sorted; of several bounds of one kind on one term the tightest is kept."""
    tightest: dict[tuple[str, str], tuple[float, str]] = {}
    found: set[str] = set()
    for term in terms:
        text = term_text(term, label)
        bound = _bound(term, label)
        if bound is None:
            found.add(text)
            continue
        side, subject, place = bound
        known = tightest.get((side, subject))
        closer = known is None or (place > known[0] if side == "above" else place < known[0])
        if known is not None and place == known[0]:
            # Equal bounds: the strict one is tighter, and "<" sorts after "<=" nowhere; keep both to be safe.
            found.add(text)
        elif closer:
            tightest[side, subject] = (place, text)
    return sorted(found | {text for _, text in tightest.values()})


def _bound(term: Scalar, label: Label) -> tuple[str, str, float] | None:
    """A comparison with a number or a date as (side, subject, place); None for anything else."""
    if not isinstance(term, Comparison) or term.operator in _SYMMETRIC:
        return None
    operator, left, right = term.operator, term.left, term.right
    value = _bare_constant(right)
    if value is None:
        operator, left, value = MIRRORED[operator], right, _bare_constant(left)
    if value is None or isinstance(value, str):
        return None
    place = number(value)
    if place is None:
        return None
    side = "above" if operator in (ComparisonOperator.GREATER, ComparisonOperator.AT_LEAST) else "below"
    return side, term_text(left, label), place


def _bare_constant(scalar: Scalar) -> Value | None:
    """A constant whose place among others is sure: no cast of a number, which may round, and no time zone."""
    if any(isinstance(node, Cast) and type_of(node.term).family is not Family.TEXT for node in walk(scalar)):
        return None
    value = constant(scalar)
    aware = isinstance(value, (datetime, time)) and value.tzinfo is not None
    zoned = any(
        isinstance(n, (Cast, Literal)) and "TZ" in n.type.name.replace("WITH TIME ZONE", "TZ") for n in walk(scalar)
    )
    return None if aware or zoned else value


def _disjunction(terms: Sequence[Scalar], label: Label) -> str:
    flat: set[str] = set()
    pending = list(terms)
    while pending:
        term = pending.pop()
        if isinstance(term, Or):
            pending.extend(term.terms)
        elif isinstance(term, InList):
            pending.extend(Comparison(ComparisonOperator.EQUAL, term.term, item) for item in term.items)
        else:
            flat.add(term_text(term, label))
    return next(iter(flat)) if len(flat) == 1 else f"or({' | '.join(sorted(flat))})"


def _negation(term: Scalar, label: Label) -> str:
    """NOT pushed inwards; all of these hold in three-valued logic."""
    match term:
        case Not(term=inner):
            return term_text(inner, label)
        case Comparison(operator=operator, left=left, right=right):
            return _comparison(NEGATED[operator], left, right, label)
        case And(terms=terms):
            return _disjunction(tuple(Not(t) for t in terms), label)
        case Or(terms=terms):
            return f"and({' & '.join(sorted({term_text(Not(t), label) for t in terms}))})"
        case InList(term=inner, items=items):
            unequal = {_comparison(ComparisonOperator.UNEQUAL, inner, item, label) for item in items}
            return next(iter(unequal)) if len(unequal) == 1 else f"and({' & '.join(sorted(unequal))})"
    return f"not({term_text(term, label)})"


_EXACT = (Family.INTEGER, Family.DECIMAL)


def _arithmetic(node: Arithmetic, label: Label) -> str:
    left, right = term_text(node.left, label), term_text(node.right, label)
    families = {type_of(node.left).family, type_of(node.right).family}
    commutes = node.operator in (ArithmeticOperator.ADD, ArithmeticOperator.MULTIPLY) and families <= {
        *_EXACT,
        Family.FLOAT,
    }
    if commutes and right < left:
        left, right = right, left
    return f"({left} {node.operator.value} {right})"


def _call(node: Call, label: Label) -> str:
    arguments = ", ".join(term_text(a, label) for a in node.arguments)
    form = "" if node.name in _PLAIN_NAMES or not node.form else ":" + hashlib.sha1(node.form.encode()).hexdigest()[:10]
    return f"{node.name}{form}({arguments})"


def _aggregate(node: Aggregate, label: Label) -> str:
    distinct = "distinct " if node.distinct and node.name not in ("min", "max") else ""
    arguments = ", ".join(term_text(a, label) for a in node.arguments)
    order = "".join(f" order {term_text(key, label)}" for key in node.order)
    where = "" if node.condition is None else f" where {term_text(node.condition, label)}"
    form = "" if not node.form else ":" + hashlib.sha1(node.form.encode()).hexdigest()[:10]
    return f"{node.name}{form}({distinct}{arguments}{order}{where})"
