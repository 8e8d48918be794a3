"""Scalars printed as sqlglot expressions, with the parentheses that SQL's precedence needs."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from typing import cast

from sqlglot import exp

from core.algebra.scalars import (
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
)
from core.algebra.types import RELATION, Family
from core.language.sql.forms import bound_arguments, filled, form_of, hole

Naming = Callable[[Attribute], exp.Expression]

_COMPARISONS: dict[ComparisonOperator, type[exp.Expression]] = {
    ComparisonOperator.EQUAL: exp.EQ,
    ComparisonOperator.UNEQUAL: exp.NEQ,
    ComparisonOperator.LESS: exp.LT,
    ComparisonOperator.AT_MOST: exp.LTE,
    ComparisonOperator.GREATER: exp.GT,
    ComparisonOperator.AT_LEAST: exp.GTE,
    ComparisonOperator.DISTINCT: exp.NullSafeNEQ,
    ComparisonOperator.NOT_DISTINCT: exp.NullSafeEQ,
}
_ARITHMETIC: dict[ArithmeticOperator, type[exp.Expression]] = {
    ArithmeticOperator.ADD: exp.Add,
    ArithmeticOperator.SUBTRACT: exp.Sub,
    ArithmeticOperator.MULTIPLY: exp.Mul,
    ArithmeticOperator.DIVIDE: exp.Div,
    ArithmeticOperator.INTEGER_DIVIDE: exp.IntDiv,
    ArithmeticOperator.REMAINDER: exp.Mod,
    ArithmeticOperator.CONCATENATE: exp.DPipe,
}
_LEVELS: list[tuple[tuple[type[exp.Expr], ...], int]] = [
    ((exp.Or,), 1),
    ((exp.And,), 2),
    ((exp.Not,), 3),
    ((exp.EQ, exp.NEQ, exp.LT, exp.LTE, exp.GT, exp.GTE, exp.NullSafeEQ, exp.NullSafeNEQ), 4),
    ((exp.Is, exp.In, exp.Between, exp.Like, exp.ILike, exp.SimilarTo, exp.Escape, exp.RegexpLike), 4),
    ((exp.DPipe,), 5),
    ((exp.Add, exp.Sub), 6),
    ((exp.Mul, exp.Div, exp.IntDiv, exp.Mod), 7),
    ((exp.Neg,), 8),
    ((exp.Binary, exp.Unary), 4),
]


def level(node: exp.Expression) -> int:
    """How tightly an expression binds; 10 never needs parentheses."""
    if isinstance(node, (exp.Paren, exp.Func, exp.Dot, exp.Column)) and not isinstance(node, (exp.And, exp.Or)):
        return 4 if isinstance(node, exp.RegexpLike) else 10
    for classes, found in _LEVELS:
        if isinstance(node, classes):
            return found
    return 10


def within(node: exp.Expression, least: int) -> exp.Expression:
    """The node in parentheses where it binds less tightly than its place needs."""
    return node if level(node) >= least else exp.Paren(this=node)


def write_scalar(node: Node, naming: Naming) -> exp.Expression:
    """A scalar, aggregate, window call or sort key as an expression of sqlglot."""
    match node:
        case Ref(attribute=attribute):
            return naming(attribute)
        case Literal():
            return write_literal(node)
        case Comparison(operator=operator, left=left, right=right):
            sides = [within(write_scalar(side, naming), 5) for side in (left, right)]
            return _COMPARISONS[operator](this=sides[0], expression=sides[1])
        case And(terms=terms):
            return chained(exp.And, written_terms(terms, naming), 3)
        case Or(terms=terms):
            return chained(exp.Or, [write_scalar(term, naming) for term in terms], 2)
        case Not(term=term):
            return _negated(term, naming)
        case IsNull(term=term):
            return exp.Is(this=within(write_scalar(term, naming), 5), expression=exp.Null())
        case IsTruth(term=term, value=value):
            return exp.Is(this=within(write_scalar(term, naming), 5), expression=exp.Boolean(this=value))
        case InList(term=term, items=items):
            found = [write_scalar(item, naming) for item in items]
            return exp.In(this=within(write_scalar(term, naming), 5), expressions=found)
        case Arithmetic():
            return _arithmetic(node, naming)
        case Negative(term=term):
            inner = write_scalar(term, naming)
            return exp.Neg(this=exp.Paren(this=inner) if isinstance(inner, exp.Neg) else within(inner, 9))
        case Case(branches=branches, otherwise=otherwise):
            ifs = [exp.If(this=write_scalar(c, naming), true=write_scalar(v, naming)) for c, v in branches]
            absent = isinstance(otherwise, Literal) and otherwise.text is None
            return exp.Case(ifs=ifs, default=None if absent else write_scalar(otherwise, naming))
        case Cast(term=term, type=type_, lenient=lenient):
            if type_.family in (Family.UNKNOWN, Family.NULL) or type_ == RELATION:
                return write_scalar(term, naming)
            to = exp.DataType.build(type_.name, dialect="duckdb")
            inner = write_scalar(term, naming)
            if not lenient:
                return exp.Cast(this=inner, to=to)
            # Some dialects have TRY_CAST for text alone, and are asked whether it is one.
            inner.type = exp.DataType.build("VARCHAR")
            return exp.TryCast(this=inner, to=to)
        case Call():
            return _call(node, naming)
        case SortKey(term=term, descending=descending, nulls_first=nulls_first):
            return exp.Ordered(this=write_scalar(term, naming), desc=descending or None, nulls_first=nulls_first)
        case Aggregate():
            return _aggregate(node, naming)
        case WindowCall():
            return _window(node, naming)
    raise TypeError(f"not a scalar: {node!r}")


def chained(cls: type[exp.Expression], terms: list[exp.Expression], least: int) -> exp.Expression:
    """A left-deep chain of a connective."""
    if len(terms) == 1:
        return terms[0]
    result = within(terms[0], least)
    for term in terms[1:]:
        result = cls(this=result, expression=within(term, least))
    return result


def written_terms(terms: tuple[Scalar, ...], naming: Naming) -> list[exp.Expression]:
    """The terms of a conjunction; `a >= x and a <= y` side by side is written BETWEEN."""
    found: list[exp.Expression] = []
    i = 0
    while i < len(terms):
        first, second = terms[i], terms[i + 1] if i + 1 < len(terms) else None
        if (
            isinstance(first, Comparison)
            and isinstance(second, Comparison)
            and first.operator is ComparisonOperator.AT_LEAST
            and second.operator is ComparisonOperator.AT_MOST
            and first.left == second.left
        ):
            sides = [within(write_scalar(side, naming), 5) for side in (first.left, first.right, second.right)]
            found.append(exp.Between(this=sides[0], low=sides[1], high=sides[2]))
            i += 2
        else:
            found.append(write_scalar(first, naming))
            i += 1
    return found


def _negated(term: Scalar, naming: Naming) -> exp.Expression:
    inner = write_scalar(term, naming)
    if isinstance(term, IsNull):
        inner.set("expression", exp.Not(this=exp.Null()))
        return inner
    if isinstance(inner, (exp.Like, exp.ILike)) and not inner.args.get("negate"):
        inner.set("negate", True)
        return inner
    return exp.Not(this=within(inner, 4))


def _arithmetic(node: Arithmetic, naming: Naming) -> exp.Expression:
    cls = _ARITHMETIC[node.operator]
    least = 5 if cls is exp.DPipe else 6 if cls in (exp.Add, exp.Sub) else 7
    left = within(write_scalar(node.left, naming), least)
    right = within(write_scalar(node.right, naming), least + 1)
    if cls is exp.Div:
        return exp.Div(this=left, expression=right, typed=False, safe=False)
    if cls is exp.DPipe:
        return exp.DPipe(this=left, expression=right, safe=True)
    return cls(this=left, expression=right)


def write_literal(literal: Literal) -> exp.Expression:
    text, family = literal.text, literal.type.family
    if text is None:
        if family is Family.NESTED and literal.type != RELATION:
            # A list without elements is still a list to what opens it.
            return exp.Cast(this=exp.Null(), to=exp.DataType.build(literal.type.name, dialect="duckdb"))
        return exp.Null()
    if family is Family.BOOLEAN:
        return exp.Boolean(this=text.lower() == "true")
    if family in (Family.INTEGER, Family.DECIMAL, Family.FLOAT):
        number = exp.Literal.number(text.lstrip("-"))
        return exp.Neg(this=number) if text.startswith("-") else number
    if family is Family.INTERVAL:
        parts = re.fullmatch(r"(\S+) (\w+)", text)
        if parts:
            return exp.Interval(this=exp.Literal.string(parts[1]), unit=exp.var(parts[2].upper()))
        return exp.Interval(this=exp.Literal.string(text))
    if family is Family.TEXT:
        return exp.Literal.string(text)
    return exp.Cast(this=exp.Literal.string(text), to=exp.DataType.build(literal.type.name, dialect="duckdb"))


def _call(node: Call, naming: Naming) -> exp.Expression:
    arguments = [write_scalar(argument, naming) for argument in node.arguments]
    if node.form:
        bound = bound_arguments(node.form)
        fitted = [within(a, 9) if i in bound else a for i, a in enumerate(arguments)]
        return filled(node.form, fitted)
    if node.name == "like":
        return exp.Like(this=within(arguments[0], 5), expression=within(arguments[1], 5))
    return _named_call(node.name, arguments)


def _named_call(name: str, arguments: list[exp.Expression]) -> exp.Expression:
    return cast(exp.Expression, exp.func(name, *arguments, copy=False, dialect="duckdb"))


def _aggregate(node: Aggregate, naming: Naming) -> exp.Expression:
    arguments = [write_scalar(argument, naming) for argument in node.arguments]
    ordered = [write_scalar(key, naming) for key in node.order]
    within_group = "WithinGroup" in node.form
    result: exp.Expression
    if node.distinct and arguments:
        if node.name == "count" and len(arguments) > 1:
            arguments = [exp.Distinct(expressions=arguments)]
            result = exp.Count(this=arguments[0], big_int=True)
            return _with_filter(node, result, naming)
        arguments[0] = exp.Distinct(expressions=[arguments[0]])
    if ordered and not within_group and arguments:
        arguments[0] = exp.Order(this=arguments[0], expressions=ordered)
    if within_group:
        result = filled(node.form, [*arguments, *ordered])
        if len(ordered) > 1:
            result.args["expression"].set("expressions", ordered)
    elif node.form:
        result = filled(node.form, arguments)
    elif node.name == "count":
        result = exp.Count(this=arguments[0] if arguments else exp.Star(), big_int=True)
    elif node.name == "grouping":
        result = exp.Grouping(expressions=arguments)
    else:
        result = _named_call(node.name, arguments)
    return _with_filter(node, result, naming)


def _with_filter(node: Aggregate, call: exp.Expression, naming: Naming) -> exp.Expression:
    if node.condition is None:
        return call
    return exp.Filter(this=call, expression=exp.Where(this=write_scalar(node.condition, naming)))


def _window(node: WindowCall, naming: Naming) -> exp.Expression:
    partition = [write_scalar(term, naming) for term in node.partition]
    order = [write_scalar(key, naming) for key in node.order]
    return exp.Window(
        this=_aggregate(node.function, naming),
        partition_by=partition or None,
        order=exp.Order(expressions=order) if order else None,
        spec=None if node.frame is None else _frame(node.frame, naming),
        over="OVER",
    )


def _frame(frame: Frame, naming: Naming) -> exp.Expression:
    (start, start_side), (end, end_side) = (_bound(bound, naming) for bound in (frame.start, frame.end))
    return exp.WindowSpec(
        kind=frame.unit.upper(),
        start=start,
        start_side=start_side,
        end=end,
        end_side=end_side,
        exclude=exp.var(frame.exclude.upper()) if frame.exclude else None,
    )


def _bound(bound: tuple[Scalar | None, str], naming: Naming) -> tuple[object, str | None]:
    offset, direction = bound
    if direction == "current":
        return "CURRENT ROW", None
    return ("UNBOUNDED" if offset is None else write_scalar(offset, naming)), direction.upper()


def list_of_rows(names: Sequence[str]) -> str:
    """The form of the aggregate that gathers rows, its arguments, into a list of records with these field names."""
    fields = [
        exp.PropertyEQ(this=exp.to_identifier(name, quoted=True), expression=hole(number))
        for number, name in enumerate(names)
    ]
    return form_of(exp.ArrayAgg(this=exp.Struct(expressions=fields)))
