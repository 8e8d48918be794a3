"""What an operator graph means, worked out row by row in plain Python: the writer's texts are checked against this.

Nested loops over bags, three-valued logic with None for unknown and NULL, as ISO/IEC 9075-2 describes it. Nothing here
is shared with the writer. Only what the generated graphs contain is known; anything else is an error.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import cmp_to_key
from typing import Any

from core.algebra.graph import attributes, free
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
    InList,
    IsNull,
    IsTruth,
    Literal,
    Negative,
    Node,
    Not,
    Or,
    Ref,
    SortKey,
    WindowCall,
)
from core.algebra.types import Family

Row = dict[Attribute, Any]
Data = Mapping[str, Sequence[tuple[Any, ...]]]


class TooManyRows(Exception):
    """A scalar subquery with more than one row: a run-time error on every engine."""


# --- scalars -------------------------------------------------------------------------------------------------------


def truth_not(value: bool | None) -> bool | None:
    return None if value is None else not value


def truth_and(values: Iterable[bool | None]) -> bool | None:
    found = list(values)
    if any(value is False for value in found):
        return False
    return None if any(value is None for value in found) else True


def truth_or(values: Iterable[bool | None]) -> bool | None:
    return truth_not(truth_and(truth_not(value) for value in values))


_COMPARE: dict[ComparisonOperator, Callable[[Any, Any], bool]] = {
    ComparisonOperator.EQUAL: lambda a, b: a == b,
    ComparisonOperator.UNEQUAL: lambda a, b: a != b,
    ComparisonOperator.LESS: lambda a, b: a < b,
    ComparisonOperator.AT_MOST: lambda a, b: a <= b,
    ComparisonOperator.GREATER: lambda a, b: a > b,
    ComparisonOperator.AT_LEAST: lambda a, b: a >= b,
}


def compared(operator: ComparisonOperator, a: Any, b: Any) -> bool | None:
    if operator is ComparisonOperator.NOT_DISTINCT:
        return bool(a == b)
    if operator is ComparisonOperator.DISTINCT:
        return bool(a != b)
    return None if a is None or b is None else _COMPARE[operator](a, b)


def value(node: Node, row: Row) -> Any:
    match node:
        case Ref(attribute=attribute):
            return row[attribute]
        case Literal(text=None):
            return None
        case Literal(text=text, type=type_):
            if type_.family is Family.BOOLEAN:
                return text == "true"
            return int(text) if type_.family is Family.INTEGER else text
        case Comparison(operator=operator, left=left, right=right):
            return compared(operator, value(left, row), value(right, row))
        case And(terms=terms):
            return truth_and(value(term, row) for term in terms)
        case Or(terms=terms):
            return truth_or(value(term, row) for term in terms)
        case Not(term=term):
            return truth_not(value(term, row))
        case IsNull(term=term):
            return value(term, row) is None
        case IsTruth(term=term, value=wanted):
            return value(term, row) is wanted
        case InList(term=term, items=items):
            sought = value(term, row)
            return truth_or(compared(ComparisonOperator.EQUAL, sought, value(item, row)) for item in items)
        case Arithmetic(operator=operator, left=left, right=right):
            a, b = value(left, row), value(right, row)
            if a is None or b is None:
                return None
            match operator:
                case ArithmeticOperator.ADD | ArithmeticOperator.CONCATENATE:
                    return a + b
                case ArithmeticOperator.SUBTRACT:
                    return a - b
                case ArithmeticOperator.MULTIPLY:
                    return a * b
        case Negative(term=term):
            inner = value(term, row)
            return None if inner is None else -inner
        case Case(branches=branches, otherwise=otherwise):
            for condition, result in branches:
                if value(condition, row) is True:
                    return value(result, row)
            return value(otherwise, row)
        case Cast(term=term, type=type_):
            inner = value(term, row)
            if inner is None or type_.family is not Family.TEXT:
                return inner
            return str(inner)
        case Call(name="coalesce", arguments=arguments):
            return next((v for v in (value(a, row) for a in arguments) if v is not None), None)
        case Call(name="list_value", arguments=arguments):
            return [value(a, row) for a in arguments]
    raise NotImplementedError(repr(node))


def aggregated(call: Aggregate, rows: Sequence[Row]) -> Any:
    kept = rows if call.condition is None else [row for row in rows if value(call.condition, row) is True]
    if call.name == "count" and not call.arguments:
        return len(kept)
    found = [v for v in (value(call.arguments[0], row) for row in kept) if v is not None]
    if call.distinct:
        found = list(dict.fromkeys(found))
    if call.name == "count":
        return len(found)
    functions: dict[str, Callable[[list[Any]], Any]] = {"sum": sum, "min": min, "max": max}
    return functions[call.name](found) if found else None


def key_order(keys: Sequence[SortKey]) -> Callable[[Row, Row], int]:
    def order(left: Row, right: Row) -> int:
        for key in keys:
            a, b = value(key.term, left), value(key.term, right)
            if a is None or b is None:
                if a is None and b is None:
                    continue
                return -1 if (a is None) == key.nulls_first else 1
            if a != b:
                return -1 if (a < b) != key.descending else 1
        return 0

    return order


def windowed(call: WindowCall, row: Row, rows: Sequence[Row]) -> Any:
    def peers(other: Row) -> bool:
        return all(value(term, row) == value(term, other) for term in call.partition)

    window = [other for other in rows if peers(other)]
    order = key_order(call.order)
    function = call.function.name
    if function == "rank":
        return 1 + sum(order(other, row) < 0 for other in window)
    if function == "dense_rank":
        before = [other for other in window if order(other, row) < 0]
        return 1 + len({tuple(value(key.term, other) for key in call.order) for other in before})
    if call.order and call.frame is None:
        window = [other for other in window if order(other, row) <= 0]
    return aggregated(call.function, window)


# --- operators -----------------------------------------------------------------------------------------------------


def meaning(root: Operator, data: Data) -> list[tuple[Any, ...]]:
    """The rows, values in the order of the root's schema; in order where the root is sorted."""
    own = attributes(root)
    return [tuple(row[a] for a in own) for row in _rows(root, {}, data, {})]


def _rows(operator: Operator, outer: Row, data: Data, rounds: Mapping[int, list[Row]]) -> list[Row]:
    def below(part: Operator, more: Row | None = None) -> list[Row]:
        return _rows(part, outer if more is None else {**outer, **more}, data, rounds)

    def at(row: Row) -> Row:
        return {**outer, **row}

    match operator:
        case Relation(name=name, attributes=own):
            return [dict(zip(own, row, strict=True)) for row in data[name]]
        case Values(attributes=own, rows=rows):
            return [dict(zip(own, (value(v, outer) for v in row), strict=True)) for row in rows]
        case TableFunction(call=Call(name="generate_series", arguments=(first, last)), attributes=(own,)):
            return [{own: i} for i in range(value(first, outer), value(last, outer) + 1)]
        case Recurrence(key=key, attributes=own):
            return [dict(zip(own, row.values(), strict=True)) for row in rounds[key]]
        case Select(input=part, condition=condition):
            return [row for row in below(part) if value(condition, at(row)) is True]
        case Project(input=part, columns=columns):
            return [{c.attribute: value(c.value, at(row)) for c in columns} for row in below(part)]
        case Distinct(input=part):
            return _unique(below(part))
        case Sort(input=part, keys=keys):
            return sorted(below(part), key=cmp_to_key(lambda a, b: key_order(keys)(at(a), at(b))))
        case Limit(input=part):
            return _limited(operator, below(part), outer)
        case Group():
            return _grouped(operator, [at(row) for row in below(operator.input)])
        case Window(input=part, columns=calls):
            rows_ = [at(row) for row in below(part)]
            own = attributes(operator)
            for row in rows_:
                row.update({c.attribute: windowed(c.call, row, rows_) for c in calls})
            return [{a: row[a] for a in own} for row in rows_]
        case Nest(input=part, keys=keys, nested=nested, into=into):
            groups: dict[tuple[Any, ...], list[Any]] = {}
            for row in below(part):
                inner = tuple(row[a] for a in nested)
                groups.setdefault(tuple(row[k] for k in keys), []).append(inner)
            return [{**dict(zip(keys, key, strict=True)), into: group} for key, group in groups.items()]
        case Unnest(input=part):
            return [made for row in below(part) for made in _unnested(operator, row, value(operator.term, at(row)))]
        case SetOperation():
            return _set_operation(operator, [below(part) for part in operator.inputs])
        case Divide():
            return _divided(operator, below(operator.dividend), below(operator.divisor))
        case Fixpoint():
            return _fixpoint(operator, outer, data, rounds)
        case Join():
            return _joined(operator, below, outer)
    raise NotImplementedError(repr(operator))


def _unique(rows: Sequence[Row]) -> list[Row]:
    return list({tuple(row.values()): row for row in rows}.values())


def _limited(operator: Limit, rows: list[Row], outer: Row) -> list[Row]:
    start = 0 if operator.offset is None else value(operator.offset, outer)
    if operator.count is None:
        return rows[start:]
    end = start + value(operator.count, outer)
    if operator.with_ties and end > start:
        assert isinstance(operator.input, Sort)
        order = key_order(operator.input.keys)
        while 0 < end < len(rows) and order({**outer, **rows[end - 1]}, {**outer, **rows[end]}) == 0:
            end += 1
    return rows[start:end]


def _grouped(operator: Group, rows: Sequence[Row]) -> list[Row]:
    found = []
    for kept in operator.sets if operator.sets is not None else (operator.keys,):
        groups: dict[tuple[Any, ...], list[Row]] = {} if kept else {(): []}
        for row in rows:
            groups.setdefault(tuple(row[k] for k in kept), []).append(row)
        for key, group in groups.items():
            made: Row = dict.fromkeys(operator.keys)
            made.update(zip(kept, key, strict=True))
            made.update({c.attribute: aggregated(c.aggregate, group) for c in operator.aggregates})
            found.append(made)
    return found


def _unnested(operator: Unnest, row: Row, elements: Any) -> Iterable[Row]:
    own, number = operator.attributes, operator.position
    if not elements:
        if operator.keep_empty:
            yield {**row, **dict.fromkeys(own), **({} if number is None else {number: None})}
        return
    for i, element in enumerate(elements):
        several = element if isinstance(element, tuple) else (element,)
        yield {**row, **dict(zip(own, several, strict=True)), **({} if number is None else {number: i + 1})}


def _set_operation(operator: SetOperation, inputs: list[list[Row]]) -> list[Row]:
    bags = [
        Counter(tuple(row[a] for a in source) for row in rows)
        for rows, source in zip(inputs, operator.sources, strict=True)
    ]
    total = bags[0]
    for other in bags[1:]:
        match operator.kind, operator.distinct:
            case SetKind.UNION, _:
                total = total + other
            case SetKind.INTERSECT, _:
                total = total & other
            case SetKind.EXCEPT, False:
                total = total - other
            case SetKind.EXCEPT, True:
                total = Counter(dict.fromkeys(total.keys() - other.keys(), 1))
    found = list(dict.fromkeys(total)) if operator.distinct else list(total.elements())
    return [dict(zip(operator.attributes, row, strict=True)) for row in found]


def _divided(operator: Divide, dividend: list[Row], divisor: list[Row]) -> list[Row]:
    kept = attributes(operator)
    wanted = {tuple(row[b] for _, b in operator.by) for row in divisor}
    partners: dict[tuple[Any, ...], set[tuple[Any, ...]]] = {}
    for row in dividend:
        partners.setdefault(tuple(row[a] for a in kept), set()).add(tuple(row[a] for a, _ in operator.by))
    return [dict(zip(kept, key, strict=True)) for key, have in partners.items() if wanted <= have]


def _fixpoint(operator: Fixpoint, outer: Row, data: Data, rounds: Mapping[int, list[Row]]) -> list[Row]:
    def taken(part: Operator, source: tuple[Attribute, ...], known: Mapping[int, list[Row]]) -> list[Row]:
        rows = _rows(part, outer, data, known)
        return [dict(zip(operator.attributes, (row[a] for a in source), strict=True)) for row in rows]

    last = taken(operator.base, operator.sources[0], rounds)
    last = _unique(last) if operator.distinct else last
    found = list(last)
    while last:
        last = taken(operator.step, operator.sources[1], {**rounds, operator.key: last})
        if operator.distinct:
            old = {tuple(row.values()) for row in found}
            last = [row for row in _unique(last) if tuple(row.values()) not in old]
        found.extend(last)
        assert len(found) < 50_000
    return found


def _joined(operator: Join, below: Callable[..., list[Row]], outer: Row) -> list[Row]:
    kind, mark = operator.kind, operator.mark
    left_rows = below(operator.left)
    depends = bool(free(operator.right).intersection(attributes(operator.left)))
    right_rows = [] if depends else below(operator.right)
    missing_right = dict.fromkeys(attributes(operator.right))
    missing_left = dict.fromkeys(attributes(operator.left))
    matched: set[int] = set()
    found: list[Row] = []
    for left in left_rows:
        partners = below(operator.right, left) if depends else right_rows
        truths = [value(operator.condition, {**outer, **left, **right}) for right in partners]
        hits = [right for right, truth in zip(partners, truths, strict=True) if truth is True]
        matched.update(i for i, truth in enumerate(truths) if truth is True)
        match kind:
            case JoinKind.SEMI | JoinKind.ANTI:
                if bool(hits) == (kind is JoinKind.SEMI):
                    found.append(left)
                continue
            case JoinKind.MARK:
                assert mark is not None
                found.append({**left, mark: truth_or(truths)})
                continue
            case JoinKind.SINGLE if len(hits) > 1:
                raise TooManyRows
        found.extend({**left, **right} for right in hits)
        if not hits and kind in (JoinKind.LEFT, JoinKind.FULL, JoinKind.SINGLE):
            found.append({**left, **missing_right})
    if kind in (JoinKind.RIGHT, JoinKind.FULL):
        found.extend({**missing_left, **right} for i, right in enumerate(right_rows) if i not in matched)
    return found
