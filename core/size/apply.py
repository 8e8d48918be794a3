"""Scalars applied to known values, so that a condition can be tried on heavy hitters and histogram bounds."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from datetime import date, datetime, time
from decimal import Decimal
from itertools import islice
from typing import Any

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
    parts,
    walk,
)
from core.algebra.types import Family
from core.catalog.model import Value
from core.size.values import arithmetic, literal_value, same_value

_MOST_NODES = 300


class NotApplied(Exception):
    """The scalar uses something that is not worked out here."""


def applied(scalar: Scalar, values: Mapping[Attribute, Value | None]) -> Value | None:
    """The scalar's value where the attributes have these values; None is NULL. Raises `NotApplied`."""
    if len(list(islice(walk(scalar), _MOST_NODES + 1))) > _MOST_NODES:
        raise NotApplied("it is too long")
    done: dict[Node, Value | None] = {}
    pending: list[tuple[Node, bool]] = [(scalar, False)]
    while pending:
        node, ready = pending.pop()
        if node in done:
            continue
        if ready or not parts(node):
            try:
                done[node] = _value(node, done, values)
            except (AttributeError, TypeError, ValueError, ArithmeticError) as error:
                raise NotApplied(str(error)) from error
        else:
            pending.append((node, True))
            pending.extend((part, False) for part in parts(node))
    return done[scalar]


def _value(node: Node, done: Mapping[Node, Value | None], values: Mapping[Attribute, Value | None]) -> Value | None:
    match node:
        case Ref(attribute=attribute):
            if attribute not in values:
                raise NotApplied(f"{attribute.name} is not known")
            return values[attribute]
        case Literal(text=text):
            found = literal_value(node)
            if found is None and text is not None:
                raise NotApplied(f"the literal {text} is not known")
            return found
        case Comparison(operator=operator, left=left, right=right):
            return _compared(operator, done[left], done[right])
        case And(terms=terms):
            return _folded([done[term] for term in terms], False)
        case Or(terms=terms):
            return _folded([done[term] for term in terms], True)
        case Not(term=term):
            truth = done[term]
            return None if truth is None else not truth
        case IsNull(term=term):
            return done[term] is None
        case IsTruth(term=term, value=wanted):
            return done[term] is wanted
        case InList(term=term, items=items):
            return _folded([_compared(ComparisonOperator.EQUAL, done[term], done[item]) for item in items], True)
        case Negative(term=term):
            inner: Any = done[term]
            return None if inner is None else -inner
        case Arithmetic(operator=sign, left=left, right=right):
            a, b = done[left], done[right]
            if a is None or b is None:
                return None
            result = arithmetic(sign, a, b)
            if result is None:
                raise NotApplied("arithmetic on these types")
            return result
        case Case(branches=branches, otherwise=otherwise):
            chosen = next((value for condition, value in branches if done[condition] is True), otherwise)
            return done[chosen]
        case Cast(term=term, type=type_):
            return _cast(done[term], type_.family)
        case Call(name=name, arguments=arguments):
            return _called(name, [done[argument] for argument in arguments])
    raise NotApplied(type(node).__name__)


def _compared(operator: ComparisonOperator, left: Value | None, right: Value | None) -> bool | None:
    if operator in (ComparisonOperator.DISTINCT, ComparisonOperator.NOT_DISTINCT):
        alike = left is right if left is None or right is None else same_value(left, right)
        return alike is (operator is ComparisonOperator.NOT_DISTINCT)
    if left is None or right is None:
        return None
    if operator is ComparisonOperator.EQUAL:
        return same_value(left, right)
    if operator is ComparisonOperator.UNEQUAL:
        return not same_value(left, right)
    a: Any = _instant(left, right)
    b: Any = _instant(right, left)
    if isinstance(a, str) is not isinstance(b, str):
        raise NotApplied("text against something else")
    match operator:
        case ComparisonOperator.LESS:
            return bool(a < b)
        case ComparisonOperator.AT_MOST:
            return bool(a <= b)
        case ComparisonOperator.GREATER:
            return bool(a > b)
        case _:
            return bool(a >= b)


def _instant(value: Value, other: Value) -> Value:
    """A date as the timestamp of its beginning where it meets a timestamp."""
    if isinstance(other, datetime) and isinstance(value, date) and not isinstance(value, datetime):
        return datetime.combine(value, time())
    return value


def _folded(truths: Sequence[Value | None], absorbing: bool) -> bool | None:
    if any(truth is absorbing for truth in truths):
        return absorbing
    if any(truth is None for truth in truths):
        return None
    if not all(isinstance(truth, bool) for truth in truths):
        raise NotApplied("a truth value that is none")
    return not absorbing


def _cast(value: Value | None, family: Family) -> Value | None:
    if value is None:
        return None
    match family, value:
        case Family.DATE, datetime():
            return value.date()
        case Family.DATE, date():
            return value
        case Family.DATE, str():
            return date.fromisoformat(value)
        case Family.TIMESTAMP, datetime():
            return value
        case Family.TIMESTAMP, date():
            return datetime.combine(value, time())
        case Family.TEXT, (str() | bool() | int()):
            return str(value).lower() if isinstance(value, bool) else str(value)
        case Family.INTEGER, int():
            return int(value)
        case Family.INTEGER, str():
            return int(value)
        case Family.FLOAT, (int() | float() | Decimal()):
            return float(value)
    raise NotApplied(f"a cast to {family.value}")


def _called(name: str, arguments: list[Value | None]) -> Value | None:
    if name == "coalesce":
        return next((value for value in arguments if value is not None), None)
    known = _FUNCTIONS.get(name)
    if known is None:
        raise NotApplied(f"the function {name}")
    count, function = known
    if len(arguments) not in count:
        raise NotApplied(f"{name} of {len(arguments)} arguments")
    if any(value is None for value in arguments):
        return None
    result: Value = function(*arguments)
    return result


def like_pattern(pattern: str, fold: bool = False) -> Callable[[str], bool]:
    """A test whether a text matches a LIKE pattern (without ESCAPE)."""
    pieces = (".*" if c == "%" else "." if c == "_" else re.escape(c) for c in pattern)
    compiled = re.compile("".join(pieces), re.DOTALL | (re.IGNORECASE if fold else 0))
    return lambda text: compiled.fullmatch(text) is not None


def _substring(text: str, start: int, length: int | None = None) -> str:
    if start < 1:
        raise NotApplied("a substring that starts before the text")
    return text[start - 1 :] if length is None else text[start - 1 : start - 1 + length]


def _left(text: str, length: int) -> str:
    if length < 0:
        raise NotApplied("a negative length")
    return text[:length]


_FUNCTIONS: dict[str, tuple[tuple[int, ...], Callable[..., Any]]] = {
    "lower": ((1,), str.lower),
    "upper": ((1,), str.upper),
    "trim": ((1,), lambda text: str(text).strip(" ")),
    "length": ((1,), len),
    "reverse": ((1,), lambda text: text[::-1]),
    "substring": ((2, 3), _substring),
    "left": ((2,), _left),
    "starts_with": ((2,), str.startswith),
    "contains": ((2,), lambda text, part: part in text),
    "like": ((2,), lambda text, pattern: like_pattern(pattern)(text)),
    "ilike": ((2,), lambda text, pattern: like_pattern(pattern, True)(text)),
    "abs": ((1,), abs),
    "year": ((1,), lambda when: when.year),
    "month": ((1,), lambda when: when.month),
    "day": ((1,), lambda when: when.day),
    "quarter": ((1,), lambda when: (when.month + 2) // 3),
    "hour": ((1,), lambda when: when.hour),
    "minute": ((1,), lambda when: when.minute),
}
