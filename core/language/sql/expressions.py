"""SQL expressions read into scalars.

What the algebra has no opinion on is carried whole: the node's form with its scalar arguments cut out (see `forms`).
"""

from __future__ import annotations

from collections.abc import Callable
from datetime import date, datetime
from typing import Any

from sqlglot import exp

from core.algebra.scalars import (
    FALSE,
    NULL_LITERAL,
    TRUE,
    Arithmetic,
    ArithmeticOperator,
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
    Not,
    Scalar,
    conjunction,
    disjunction,
)
from core.algebra.types import (
    BIGINT,
    BOOLEAN,
    DOUBLE,
    HUGEINT,
    INTEGER,
    INTERVAL,
    TEXT,
    UNKNOWN,
    Family,
    Type,
    type_named,
)
from core.algebra.typing import arithmetic_type, type_of
from core.language.sql import subqueries
from core.language.sql.forms import form_of, hole
from core.language.sql.function_types import result_type
from core.language.sql.reading import Block

_COMPARISONS: dict[type[exp.Expression], ComparisonOperator] = {
    exp.EQ: ComparisonOperator.EQUAL,
    exp.NEQ: ComparisonOperator.UNEQUAL,
    exp.LT: ComparisonOperator.LESS,
    exp.LTE: ComparisonOperator.AT_MOST,
    exp.GT: ComparisonOperator.GREATER,
    exp.GTE: ComparisonOperator.AT_LEAST,
    exp.NullSafeEQ: ComparisonOperator.NOT_DISTINCT,
    exp.NullSafeNEQ: ComparisonOperator.DISTINCT,
}
_ARITHMETIC: dict[type[exp.Expression], ArithmeticOperator] = {
    exp.Add: ArithmeticOperator.ADD,
    exp.Sub: ArithmeticOperator.SUBTRACT,
    exp.Mul: ArithmeticOperator.MULTIPLY,
    exp.Div: ArithmeticOperator.DIVIDE,
    exp.IntDiv: ArithmeticOperator.INTEGER_DIVIDE,
    exp.Mod: ArithmeticOperator.REMAINDER,
    exp.DPipe: ArithmeticOperator.CONCATENATE,
}


def flattened(node: exp.Expression, cls: type[exp.Expression]) -> list[exp.Expression]:
    """The terms of a chain of one connective, parentheses seen through, in order of writing."""
    found: list[exp.Expression] = []
    pending = [node]
    while pending:
        term = pending.pop()
        inner = term
        while isinstance(inner, exp.Paren):
            inner = inner.this
        if isinstance(inner, cls):
            pending.extend((inner.args["expression"], inner.this))
        else:
            found.append(term)
    return found


def read_scalar(node: exp.Expression, block: Block) -> Scalar:
    """The scalar that an expression means in a block. Subqueries in it are joined to the block's plan."""
    known = block.known.get(id(node))
    if known is not None:
        return known
    if block.keys is not None:
        from core.language.sql.grouping import key_for

        key = key_for(node, block)
        if key is not None:
            return key
    reader = _READERS.get(type(node))
    if reader is not None:
        return reader(node, block)
    if isinstance(node, (exp.Func, exp.Binary, exp.Unary, exp.Condition, exp.Placeholder, exp.AtTimeZone, exp.Escape)):
        return _whole(node, block)
    raise block.reading.refuse(f"{node.key} has no place in a scalar expression", node)


def _column(node: exp.Expression, block: Block) -> Scalar:
    assert isinstance(node, exp.Column)
    if isinstance(node.this, exp.Star):
        raise block.reading.refuse("a star has no place here", node)
    parts = node.parts
    if len(parts) > 2 or (len(parts) == 2 and block_source(block, parts[0].name) is None):
        field = _field([part for part in parts if isinstance(part, exp.Expression)], block)
        if field is not None:
            return field
        if len(parts) > 2:
            node = exp.column(parts[-1].name, table=parts[-2].name)
    return block.resolve(node)


def block_source(block: Block | None, alias: str) -> object:
    while block is not None:
        found = block.scope.source(alias)
        if found is not None:
            return found
        block = block.outer
    return None


def _field(parts: list[exp.Expression], block: Block) -> Scalar | None:
    """A column followed by field names, as in `t.address.city` or `address.city`."""
    start = 2 if block_source(block, parts[0].name) is not None else 1
    if start >= len(parts):
        return None
    if start == 1 and not _shows(block, parts[0].name):
        return None
    column = exp.column(parts[start - 1].name, table=parts[0].name if start == 2 else None)
    value = block.resolve(column)
    for part in parts[start:]:
        form = form_of(exp.Dot(this=hole(0), expression=exp.to_identifier(part.name, quoted=part.args.get("quoted"))))
        value = Call("field_" + part.name.lower(), (value,), UNKNOWN, form)
    return value


def _shows(block: Block | None, name: str) -> bool:
    while block is not None:
        if block.scope.named(name):
            return True
        block = block.outer
    return False


def _literal(node: exp.Expression, block: Block) -> Scalar:
    assert isinstance(node, exp.Literal)
    if node.is_string:
        return Literal(node.this, TEXT)
    return Literal(node.this, number_type(node.this))


def number_type(text: str) -> Type:
    """The type DuckDB gives a numeric literal."""
    if "e" in text.lower():
        return DOUBLE
    if "." in text:
        digits = text.replace(".", "").lstrip("0") or "0"
        scale = len(text.partition(".")[2])
        precision = max(len(digits), scale)
        return Type(Family.DECIMAL, f"DECIMAL({precision}, {scale})") if precision <= 38 else DOUBLE
    value = abs(int(text)) if text.isdigit() else 0
    return INTEGER if value < 2**31 else BIGINT if value < 2**63 else HUGEINT


def _cast(node: exp.Expression, block: Block) -> Scalar:
    assert isinstance(node, exp.Cast)
    if node.args.get("format") or node.args.get("default"):
        return _whole(node, block)
    term = read_scalar(node.this, block)
    type_ = type_named(node.to.sql("duckdb"))
    lenient = isinstance(node, exp.TryCast)
    if isinstance(term, Literal) and term.type == TEXT and term.text is not None and valid_moment(term.text, type_):
        return Literal(term.text, type_)
    return Cast(term, type_, lenient)


def valid_moment(text: str, type_: Type) -> bool:
    """Whether the text is a date or timestamp in ISO form, so that a literal of the type may hold it."""
    try:
        if type_.family is Family.DATE:
            return date.fromisoformat(text).isoformat() == text
        if type_.name == "TIMESTAMP":
            return bool(datetime.fromisoformat(text)) and "+" not in text and not text.endswith("Z")
    except ValueError:
        return False
    return False


def fitted(value: Scalar, other: Scalar) -> Scalar:
    """A text literal beside a date or timestamp is that date or timestamp, as SQL reads untyped literals."""
    if isinstance(value, Literal) and value.type == TEXT and value.text is not None:
        type_ = type_of(other)
        if valid_moment(value.text, type_):
            return Literal(value.text, type_)
    return value


def compare(operator: ComparisonOperator, left: Scalar, right: Scalar) -> Comparison:
    return Comparison(operator, fitted(left, right), fitted(right, left))


def _comparison(node: exp.Expression, block: Block) -> Scalar:
    operator = _COMPARISONS[type(node)]
    left, right = node.this, node.args["expression"]
    if isinstance(right, (exp.Any, exp.All)):
        return subqueries.quantified(operator, left, right, block)
    left_row, right_row = _row(left), _row(right)
    if left_row is not None and right_row is not None:
        return _compare_rows(node, operator, left_row, right_row, block)
    return compare(operator, read_scalar(left, block), read_scalar(right, block))


def _row(node: exp.Expression) -> list[exp.Expression] | None:
    return list(node.expressions) if isinstance(node, exp.Tuple) else None


def _compare_rows(
    node: exp.Expression,
    operator: ComparisonOperator,
    left: list[exp.Expression],
    right: list[exp.Expression],
    block: Block,
) -> Scalar:
    """Row comparison, spelt out (ISO/IEC 9075-2): equality term by term, order lexicographic."""
    if len(left) != len(right):
        raise block.reading.refuse(f"a row of {len(left)} compared with a row of {len(right)}", node)
    pairs = [(read_scalar(a, block), read_scalar(b, block)) for a, b in zip(left, right, strict=True)]
    equal, unequal = ComparisonOperator.EQUAL, ComparisonOperator.UNEQUAL
    if operator in (equal, ComparisonOperator.NOT_DISTINCT):
        return conjunction(compare(operator, a, b) for a, b in pairs)
    if operator in (unequal, ComparisonOperator.DISTINCT):
        return disjunction(compare(operator, a, b) for a, b in pairs)
    strict = {
        ComparisonOperator.AT_MOST: ComparisonOperator.LESS,
        ComparisonOperator.AT_LEAST: ComparisonOperator.GREATER,
    }
    arms = []
    for i, (a, b) in enumerate(pairs):
        last = operator if i == len(pairs) - 1 else strict.get(operator, operator)
        arms.append(conjunction([*(compare(equal, x, y) for x, y in pairs[:i]), compare(last, a, b)]))
    return disjunction(arms)


def _arithmetic(node: exp.Expression, block: Block) -> Scalar:
    operator = _ARITHMETIC[type(node)]
    left = read_scalar(node.this, block)
    right = read_scalar(node.args["expression"], block)
    if operator is ArithmeticOperator.CONCATENATE and not node.args.get("safe"):
        return _assembled(node, block, (left, right))
    if operator is ArithmeticOperator.DIVIDE and (node.args.get("typed") or node.args.get("safe")):
        families = (type_of(left).family, type_of(right).family)
        if node.args.get("safe") or Family.UNKNOWN in families:
            return _assembled(node, block, (left, right))
        if families == (Family.INTEGER, Family.INTEGER):
            operator = ArithmeticOperator.INTEGER_DIVIDE
        elif Family.FLOAT not in families:
            return _assembled(node, block, (left, right))
    return Arithmetic(operator, left, right, arithmetic_type(operator, type_of(left), type_of(right)))


def _assembled(node: exp.Expression, block: Block, arguments: tuple[Scalar, Scalar]) -> Scalar:
    """A binary operation whose meaning depends on the dialect: kept with the dialect's own flags."""
    copy = node.copy()
    copy.set("this", hole(0))
    copy.set("expression", hole(1))
    form = form_of(copy)
    return Call(node.key, arguments, result_type(form, arguments, block.reading.dialect), form)


def _negative(node: exp.Expression, block: Block) -> Scalar:
    term = read_scalar(node.this, block)
    if isinstance(term, Literal) and term.text is not None and not term.text.startswith("-"):
        if term.type.family in (Family.INTEGER, Family.DECIMAL, Family.FLOAT):
            return Literal("-" + term.text, term.type)
    return Negative(term)


def _is(node: exp.Expression, block: Block) -> Scalar:
    right = node.args["expression"]
    term = read_scalar(node.this, block)
    if isinstance(right, exp.Null):
        return IsNull(term)
    if isinstance(right, exp.Boolean):
        return IsTruth(term, bool(right.this))
    return Comparison(ComparisonOperator.NOT_DISTINCT, term, read_scalar(right, block))


def _between(node: exp.Expression, block: Block) -> Scalar:
    term, low, high = (read_scalar(node.args[key], block) for key in ("this", "low", "high"))
    if isinstance(term, Call):
        from core.algebra.functions import volatile

        if volatile(term):
            return _whole(node, block)
    at_least, at_most = ComparisonOperator.AT_LEAST, ComparisonOperator.AT_MOST
    inside = conjunction((compare(at_least, term, low), compare(at_most, term, high)))
    if not node.args.get("symmetric"):
        return inside
    return disjunction((inside, conjunction((compare(at_least, term, high), compare(at_most, term, low)))))


def _in(node: exp.Expression, block: Block) -> Scalar:
    assert isinstance(node, exp.In)
    if subqueries.in_query(node) is not None:
        return subqueries.mark_in(node, block)
    if node.args.get("unnest") or node.args.get("field"):
        return _whole(node, block)
    row = _row(node.this)
    if row is not None:
        arms = []
        for item in node.expressions:
            other = _row(item)
            if other is None:
                raise block.reading.refuse("a row can only be in a list of rows", item)
            arms.append(_compare_rows(node, ComparisonOperator.EQUAL, row, other, block))
        return disjunction(arms)
    term = read_scalar(node.this, block)
    items = tuple(fitted(read_scalar(item, block), term) for item in node.expressions)
    if not items:
        return FALSE
    return InList(term, items)


def _case(node: exp.Expression, block: Block) -> Scalar:
    assert isinstance(node, exp.Case)
    operand = None if node.this is None else read_scalar(node.this, block)
    if operand is not None:
        from core.algebra.functions import volatile

        if volatile(operand):
            raise block.reading.refuse("CASE over a value that changes from call to call", node)
    branches = []
    for arm in node.args["ifs"]:
        condition = read_scalar(arm.this, block)
        if operand is not None:
            condition = compare(ComparisonOperator.EQUAL, operand, condition)
        branches.append((condition, read_scalar(arm.args["true"], block)))
    default = node.args.get("default")
    return Case(tuple(branches), NULL_LITERAL if default is None else read_scalar(default, block))


def _if(node: exp.Expression, block: Block) -> Scalar:
    otherwise = node.args.get("false")
    branch = (read_scalar(node.this, block), read_scalar(node.args["true"], block))
    return Case((branch,), NULL_LITERAL if otherwise is None else read_scalar(otherwise, block))


def _and(node: exp.Expression, block: Block) -> Scalar:
    return conjunction([read_scalar(term, block) for term in flattened(node, exp.And)])


def _or(node: exp.Expression, block: Block) -> Scalar:
    return disjunction([read_scalar(term, block) for term in flattened(node, exp.Or)])


def _interval(node: exp.Expression, block: Block) -> Scalar:
    amount, unit = node.this, node.args.get("unit")
    if isinstance(amount, exp.Literal) and (unit is None or isinstance(unit, exp.Var)):
        return Literal(f"{amount.this} {unit.name.lower()}" if unit is not None else amount.this, INTERVAL)
    return _whole(node, block)


def _like(node: exp.Expression, block: Block) -> Scalar:
    """LIKE and ILIKE; sqlglot keeps a NOT before them as a flag."""
    arguments = tuple(read_scalar(node.args[key], block) for key in ("this", "expression"))
    form = form_of(type(node)(this=hole(0), expression=hole(1)))
    call = Call("like" if isinstance(node, exp.Like) else "ilike", arguments, BOOLEAN, form)
    return Not(call) if node.args.get("negate") else call


def _lone_star(node: exp.Expression, block: Block) -> Scalar:
    raise block.reading.refuse("a star has no place here", node)


_KEPT = (exp.DataType, exp.Var, exp.Identifier, exp.Lambda, exp.Placeholder, exp.Boolean, exp.Star, exp.Parameter)
_WRAPPERS = (exp.PropertyEQ, exp.Kwarg, exp.Slice, exp.Alias, exp.Tuple)


def _whole(node: exp.Expression, block: Block) -> Scalar:
    """A call carried whole: its scalar arguments are cut out and numbered, the rest is its form."""
    if isinstance(node, exp.AggFunc):
        raise block.reading.refuse(f"the aggregate {node.sql_name().lower()} has no place here", node)
    form, arguments = cut(node, block)
    text = form_of(form)
    return Call(function_name(node), arguments, result_type(text, arguments, block.reading.dialect), text)


def cut(node: exp.Expression, block: Block) -> tuple[exp.Expression, tuple[Scalar, ...]]:
    """The node with its scalar arguments replaced by holes, and the arguments."""
    arguments: list[Scalar] = []

    def visit(value: Any) -> Any:
        if isinstance(value, list):
            return [visit(item) for item in value]
        if not isinstance(value, exp.Expression):
            return value
        if isinstance(value, exp.Lambda):
            if any(True for _ in value.find_all(exp.Column)):
                raise block.reading.refuse("a lambda that reads columns", value)
            return value.copy()
        if isinstance(value, _KEPT):
            return value.copy()
        if isinstance(value, _WRAPPERS):
            return type(value)(**{key: visit(part) for key, part in value.args.items()})
        if isinstance(value, exp.Order) or (isinstance(value, exp.Query) and not isinstance(value, exp.Subquery)):
            raise block.reading.refuse(f"{value.key} inside {node.key}", value)
        arguments.append(read_scalar(value, block))
        return hole(len(arguments) - 1)

    return type(node)(**{key: visit(value) for key, value in node.args.items()}), tuple(arguments)


def function_name(node: exp.Expression) -> str:
    """A function's name in lower case, as people write it."""
    if isinstance(node, exp.Anonymous):
        return node.name.lower()
    if isinstance(node, exp.Extract):
        return node.name.lower()
    if isinstance(node, exp.Func):
        return node.sql_name().lower()
    return node.key


_READERS: dict[type[exp.Expression], Callable[[exp.Expression, Block], Scalar]] = {
    exp.Column: _column,
    exp.Literal: _literal,
    exp.Boolean: lambda node, block: TRUE if node.this else FALSE,
    exp.Null: lambda node, block: NULL_LITERAL,
    exp.Paren: lambda node, block: read_scalar(node.this, block),
    exp.Not: lambda node, block: Not(read_scalar(node.this, block)),
    exp.And: _and,
    exp.Or: _or,
    exp.Is: _is,
    exp.Between: _between,
    exp.In: _in,
    exp.Case: _case,
    exp.If: _if,
    exp.Cast: _cast,
    exp.TryCast: _cast,
    exp.Neg: _negative,
    exp.Interval: _interval,
    exp.Like: _like,
    exp.ILike: _like,
    exp.Star: _lone_star,
    exp.Exists: lambda node, block: subqueries.mark_exists(node, block),
    exp.Subquery: lambda node, block: subqueries.scalar_value(node, block),
    exp.Select: lambda node, block: subqueries.scalar_value(node, block),
    **dict.fromkeys(_COMPARISONS, _comparison),
    **dict.fromkeys(_ARITHMETIC, _arithmetic),
}
