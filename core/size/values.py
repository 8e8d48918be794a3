"""Constants of a query as values: folded, and placed on a number line."""

from __future__ import annotations

import calendar
from datetime import date, datetime, time, timedelta
from decimal import Decimal, InvalidOperation
from typing import Any

from core.algebra.scalars import Arithmetic, ArithmeticOperator, Cast, Literal, Negative, Scalar
from core.algebra.types import Family
from core.catalog.model import Value


def constant(scalar: Scalar) -> Value | None:
    """The value of a constant scalar; None where it is not one that can be folded here."""
    match scalar:
        case Literal():
            return literal_value(scalar)
        case Negative(term=term):
            inner = constant(term)
            return -inner if isinstance(inner, (int, float, Decimal)) and not isinstance(inner, bool) else None
        case Cast(term=term, type=type_):
            inner = constant(term)
            if isinstance(inner, str):
                return literal_value(Literal(inner, type_))
            return inner
        case Arithmetic(operator=operator, left=left, right=right):
            return _arithmetic(operator, left, right)
    return None


def literal_value(literal: Literal) -> Value | None:
    """A literal as a Python value; None for NULL and for types that have none."""
    text, family = literal.text, literal.type.family
    if text is None:
        return None
    try:
        if family is Family.BOOLEAN:
            return text.lower() == "true"
        if family is Family.INTEGER:
            return int(text)
        if family is Family.DECIMAL:
            return Decimal(text)
        if family is Family.FLOAT:
            return float(text)
        if family is Family.TEXT:
            return text
        if family is Family.DATE:
            return date.fromisoformat(text)
        if family is Family.TIMESTAMP:
            return datetime.fromisoformat(text)
        if family is Family.TIME:
            return time.fromisoformat(text)
    except (ValueError, InvalidOperation):
        return None
    return None


def _arithmetic(operator: ArithmeticOperator, left: Scalar, right: Scalar) -> Value | None:
    if isinstance(right, Literal) and right.type.family is Family.INTERVAL and right.text is not None:
        base = constant(left)
        if isinstance(base, date) and operator in (ArithmeticOperator.ADD, ArithmeticOperator.SUBTRACT):
            return _shifted(base, right.text, 1 if operator is ArithmeticOperator.ADD else -1)
        return None
    a, b = constant(left), constant(right)
    return None if a is None or b is None else arithmetic(operator, a, b)


def arithmetic(operator: ArithmeticOperator, left: Value, right: Value) -> Value | None:
    """The result of a sign between two values; None where it is not worked out here."""
    a: Any = left
    b: Any = right
    if isinstance(a, date) and isinstance(b, int) and not isinstance(a, datetime):
        if operator in (ArithmeticOperator.ADD, ArithmeticOperator.SUBTRACT):
            return a + timedelta(days=b if operator is ArithmeticOperator.ADD else -b)
    if operator is ArithmeticOperator.CONCATENATE and isinstance(a, str) and isinstance(b, str):
        return a + b
    if not isinstance(a, (int, float, Decimal)) or not isinstance(b, (int, float, Decimal)):
        return None
    if isinstance(a, float) or isinstance(b, float):
        a, b = float(a), float(b)
    match operator:
        case ArithmeticOperator.ADD:
            result = a + b
        case ArithmeticOperator.SUBTRACT:
            result = a - b
        case ArithmeticOperator.MULTIPLY:
            result = a * b
        case ArithmeticOperator.DIVIDE if b:
            result = float(a) / float(b)
        case _:
            return None
    found: Value = result
    return found


def _shifted(base: date, text: str, sign: int) -> Value | None:
    amount, _, unit = text.partition(" ")
    if not amount.lstrip("-").isdigit():
        return None
    count, unit = sign * int(amount), unit.rstrip("s").lower()
    if unit in ("day", "week"):
        return base + timedelta(days=count * (7 if unit == "week" else 1))
    if unit in ("month", "year", "quarter"):
        months = count * {"month": 1, "quarter": 3, "year": 12}[unit]
        year, month = divmod(base.year * 12 + base.month - 1 + months, 12)
        day = min(base.day, calendar.monthrange(year, month + 1)[1])
        return base.replace(year=year, month=month + 1, day=day)
    if unit in ("hour", "minute", "second"):
        seconds = count * {"hour": 3600, "minute": 60, "second": 1}[unit]
        start = base if isinstance(base, datetime) else datetime.combine(base, time())
        return start + timedelta(seconds=seconds)
    return None


def number(value: Value | None) -> float | None:
    """A value's place on a number line: its own for numbers, days for dates, the first bytes for text."""
    match value:
        case None:
            return None
        case bool():
            return float(value)
        case int() | float() | Decimal():
            return float(value)
        case datetime():
            return (
                value.replace(tzinfo=None).toordinal() + (value.hour * 3600 + value.minute * 60 + value.second) / 86400
            )
        case date():
            return float(value.toordinal())
        case time():
            return value.hour * 3600 + value.minute * 60 + value.second + value.microsecond / 1e6
        case str():
            padded = value.encode()[:7].ljust(7, b"\0")
            return float(int.from_bytes(padded, "big"))
    return None


def same_value(left: Value, right: Value) -> bool:
    """Equality as SQL has it between a statistic and a constant (1 and 1.0 are equal, '1' is another thing)."""
    if isinstance(left, str) or isinstance(right, str):
        return isinstance(left, str) and isinstance(right, str) and left == right
    a, b = number(left), number(right)
    return a is not None and a == b
