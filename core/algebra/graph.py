"""Walking and rebuilding operator graphs, without recursion; schemas and free attributes, memoised by identity."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import fields, replace
from typing import Any, TypeVar
from weakref import WeakKeyDictionary

from core.algebra.operators import (
    AggregateColumn,
    Column,
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
    SetOperation,
    Sort,
    TableFunction,
    Unnest,
    Values,
    Window,
    WindowColumn,
)
from core.algebra.scalars import Attribute, Node, Ref, fresh_key, fresh_like, refs, renamed

Place = tuple[int, ...]
"""Where an operator stands below a root: the input numbers from the root down. A shared operator has several places."""

N = TypeVar("N", bound=Node)


def inputs(operator: Operator) -> tuple[Operator, ...]:
    """The operators whose rows this one reads, in order."""
    match operator:
        case Relation() | Values() | TableFunction() | Recurrence():
            return ()
        case (
            Select(input=below)
            | Project(input=below)
            | Distinct(input=below)
            | Group(input=below)
            | Nest(input=below)
            | Unnest(input=below)
            | Window(input=below)
            | Sort(input=below)
            | Limit(input=below)
        ):
            return (below,)
        case Join(left=left, right=right):
            return (left, right)
        case Divide(dividend=left, divisor=right):
            return (left, right)
        case Fixpoint(base=left, step=right):
            return (left, right)
        case SetOperation(inputs=several):
            return several


def with_inputs(operator: Operator, new: tuple[Operator, ...]) -> Operator:
    """The operator over other inputs; the same object where they are the same."""
    old = inputs(operator)
    if len(old) != len(new):
        raise ValueError(f"{type(operator).__name__} has {len(old)} inputs, not {len(new)}")
    if all(a is b for a, b in zip(old, new, strict=True)):
        return operator
    match operator:
        case Join():
            return replace(operator, left=new[0], right=new[1])
        case Divide():
            return replace(operator, dividend=new[0], divisor=new[1])
        case Fixpoint():
            return replace(operator, base=new[0], step=new[1])
        case SetOperation():
            return replace(operator, inputs=new)
        case Select() | Project() | Distinct() | Group() | Nest() | Unnest() | Window() | Sort() | Limit():
            return replace(operator, input=new[0])
        case Relation() | Values() | TableFunction() | Recurrence():
            return operator


def scalars(operator: Operator) -> tuple[Node, ...]:
    """The scalars, aggregates and sort keys that the operator itself evaluates."""
    match operator:
        case Relation() | Recurrence() | Distinct() | SetOperation() | Divide() | Nest() | Fixpoint():
            return ()
        case Values(rows=rows):
            return tuple(value for row in rows for value in row)
        case TableFunction(call=call):
            return (call,)
        case Select(condition=condition) | Join(condition=condition):
            return (condition,)
        case Project(columns=columns):
            return tuple(column.value for column in columns)
        case Group(aggregates=aggregates):
            return tuple(column.aggregate for column in aggregates)
        case Unnest(term=term):
            return (term,)
        case Window(columns=columns):
            return tuple(column.call for column in columns)
        case Sort(keys=keys):
            return keys
        case Limit(count=count, offset=offset):
            return tuple(scalar for scalar in (count, offset) if scalar is not None)


def with_scalars(operator: Operator, change: Callable[[Node], Node]) -> Operator:
    """The operator with `change` applied to each of its scalars; the same object where none changed."""

    def apply(node: Any) -> Any:
        return node if node is None else change(node)

    old = scalars(operator)
    if all(apply(node) is node for node in old):
        return operator
    match operator:
        case Values(rows=rows):
            return replace(operator, rows=tuple(tuple(apply(value) for value in row) for row in rows))
        case TableFunction(call=call):
            return replace(operator, call=apply(call))
        case Select() | Join():
            return replace(operator, condition=apply(operator.condition))
        case Project(columns=columns):
            return replace(operator, columns=tuple(Column(c.attribute, apply(c.value)) for c in columns))
        case Group(aggregates=aggregates):
            return replace(
                operator, aggregates=tuple(AggregateColumn(c.attribute, apply(c.aggregate)) for c in aggregates)
            )
        case Unnest(term=term):
            return replace(operator, term=apply(term))
        case Window():
            return replace(operator, columns=tuple(WindowColumn(c.attribute, apply(c.call)) for c in operator.columns))
        case Sort(keys=keys):
            return replace(operator, keys=tuple(apply(key) for key in keys))
        case Limit(count=count, offset=offset):
            return replace(operator, count=apply(count), offset=apply(offset))
        case Relation() | Recurrence() | Distinct() | SetOperation() | Divide() | Nest() | Fixpoint():
            return operator


def postorder(*roots: Operator) -> list[Operator]:
    """Every operator at and below the roots, once, inputs before the operators that read them."""
    found: dict[Operator, None] = {}
    pending: list[tuple[Operator, bool]] = [(root, False) for root in reversed(roots)]
    while pending:
        operator, ready = pending.pop()
        if operator in found:
            continue
        if ready:
            found[operator] = None
        else:
            pending.append((operator, True))
            pending.extend((below, False) for below in reversed(inputs(operator)))
    return list(found)


def places(root: Operator) -> Iterator[tuple[Place, Operator]]:
    """Every place below the root with its operator, answer first, left input before right. Shared operators repeat."""
    pending: list[tuple[Place, Operator]] = [((), root)]
    while pending:
        place, operator = pending.pop()
        yield place, operator
        pending.extend(reversed([((*place, i), below) for i, below in enumerate(inputs(operator))]))


def parents(*roots: Operator) -> dict[Operator, list[Operator]]:
    """Who reads each operator; an operator that reads one input twice is listed twice."""
    found: dict[Operator, list[Operator]] = {}
    for operator in postorder(*roots):
        found.setdefault(operator, [])
        for below in inputs(operator):
            found[below].append(operator)
    return found


_attributes: WeakKeyDictionary[Operator, tuple[Attribute, ...]] = WeakKeyDictionary()
_free: WeakKeyDictionary[Operator, frozenset[Attribute]] = WeakKeyDictionary()


def attributes(operator: Operator) -> tuple[Attribute, ...]:
    """The schema: the attributes of the operator's rows, in order."""
    known = _attributes.get(operator)
    if known is None:
        for below in _unknown(operator, _attributes):
            _attributes[below] = _own_attributes(below)
        known = _attributes[operator]
    return known


def free(operator: Operator) -> frozenset[Attribute]:
    """The attributes that the operator's graph reads and does not produce: the outer columns of a correlated part."""
    known = _free.get(operator)
    if known is None:
        for below in _unknown(operator, _free):
            _free[below] = _own_free(below)
        known = _free[operator]
    return known


def dependent(join: Join) -> frozenset[Attribute]:
    """The left attributes that a join's right input reads; empty where the inputs can be evaluated apart."""
    return free(join.right).intersection(attributes(join.left))


def _unknown(root: Operator, memo: WeakKeyDictionary[Operator, Any]) -> list[Operator]:
    found: dict[Operator, None] = {}
    pending: list[tuple[Operator, bool]] = [(root, False)]
    while pending:
        operator, ready = pending.pop()
        if operator in found or operator in memo:
            continue
        if ready:
            found[operator] = None
        else:
            pending.append((operator, True))
            pending.extend((below, False) for below in inputs(operator))
    return list(found)


def _own_attributes(operator: Operator) -> tuple[Attribute, ...]:
    match operator:
        case (
            Relation(attributes=own)
            | Values(attributes=own)
            | TableFunction(attributes=own)
            | Recurrence(attributes=own)
            | SetOperation(attributes=own)
            | Fixpoint(attributes=own)
        ):
            return own
        case Select(input=below) | Distinct(input=below) | Sort(input=below) | Limit(input=below):
            return attributes(below)
        case Project(columns=columns):
            return tuple(column.attribute for column in columns)
        case Join(kind=kind, left=left, right=right, mark=mark):
            if kind in (JoinKind.SEMI, JoinKind.ANTI):
                return attributes(left)
            if mark is not None:
                return (*attributes(left), mark)
            return attributes(left) + attributes(right)
        case Divide(dividend=dividend, by=by):
            paired = {attribute for attribute, _ in by}
            return tuple(a for a in attributes(dividend) if a not in paired)
        case Group(keys=keys, aggregates=aggregates):
            return keys + tuple(column.attribute for column in aggregates)
        case Nest(keys=keys, into=into):
            return (*keys, into)
        case Unnest(input=below, attributes=own, position=position):
            return attributes(below) + own + (() if position is None else (position,))
        case Window(input=below, columns=window_columns):
            return attributes(below) + tuple(column.attribute for column in window_columns)


def read_here(operator: Operator) -> frozenset[Attribute]:
    """The attributes that the operator itself reads from its inputs (or from outside)."""
    reads = refs(*scalars(operator))
    match operator:
        case Group(keys=keys, sets=sets):
            return reads.union(keys, *(sets or ()))
        case Nest(keys=keys, nested=nested):
            return reads.union(keys, nested)
        case SetOperation(sources=sources) | Fixpoint(sources=sources):
            return reads.union(*sources)
        case Divide(by=by):
            return reads.union(a for pair in by for a in pair)
        case Distinct(input=below):
            return reads.union(attributes(below))
        case _:
            return reads


def _own_free(operator: Operator) -> frozenset[Attribute]:
    below = inputs(operator)
    outer = read_here(operator).difference(*(attributes(i) for i in below)) if below else read_here(operator)
    for i, part in enumerate(below):
        inner = free(part)
        if i == 1 and isinstance(operator, Join):
            inner = inner.difference(attributes(operator.left))
        outer = outer | inner
    return outer


def replaced(root: Operator, changes: Mapping[Operator, Operator]) -> Operator:
    """The graph with operators replaced wherever they stand; sharing is kept, untouched parts are the same objects."""
    return rebuilt((root,), changes)[0][0]


def rebuilt(
    roots: tuple[Operator, ...], changes: Mapping[Operator, Operator]
) -> tuple[tuple[Operator, ...], dict[Operator, Operator]]:
    """As `replaced`, for several roots; also says what every operator of the old graph became."""
    became: dict[Operator, Operator] = {}
    pending: list[tuple[Operator, bool]] = [(root, False) for root in roots]
    while pending:
        operator, ready = pending.pop()
        if operator in became:
            continue
        if operator in changes:
            became[operator] = changes[operator]
        elif ready:
            became[operator] = with_inputs(operator, tuple(became[below] for below in inputs(operator)))
        else:
            pending.append((operator, True))
            pending.extend((below, False) for below in inputs(operator))
    return tuple(became[root] for root in roots), became


def replaced_at(root: Operator, place: Place, new: Operator) -> Operator:
    """The graph with the operator at one place replaced; the same operator at other places stays."""
    spine = [root]
    for step in place:
        spine.append(inputs(spine[-1])[step])
    for operator, step in zip(reversed(spine[:-1]), reversed(place), strict=True):
        below = list(inputs(operator))
        below[step] = new
        new = with_inputs(operator, tuple(below))
    return new


def at(root: Operator, place: Place) -> Operator:
    """The operator at a place."""
    for step in place:
        root = inputs(root)[step]
    return root


def produced(operator: Operator) -> tuple[Attribute, ...]:
    """The attributes that come into being at this operator."""
    match operator:
        case (
            Relation(attributes=own)
            | Values(attributes=own)
            | TableFunction(attributes=own)
            | Recurrence(attributes=own)
            | SetOperation(attributes=own)
            | Fixpoint(attributes=own)
        ):
            return own
        case Project(columns=columns):
            return tuple(c.attribute for c in columns if c.value != Ref(c.attribute))
        case Join(mark=mark):
            return () if mark is None else (mark,)
        case Group(aggregates=aggregates):
            return tuple(column.attribute for column in aggregates)
        case Nest(into=into):
            return (into,)
        case Unnest(attributes=own, position=position):
            return own + (() if position is None else (position,))
        case Window(columns=window_columns):
            return tuple(column.attribute for column in window_columns)
        case Select() | Distinct() | Sort() | Limit() | Divide():
            return ()


def relabelled(operator: Operator, mapping: Mapping[Attribute, Attribute]) -> Operator:
    """One operator (not its inputs) with attributes exchanged wherever it names them."""

    def swap(found: Iterable[Attribute]) -> tuple[Attribute, ...]:
        return tuple(mapping.get(a, a) for a in found)

    changed: dict[str, Any] = {}
    for field in fields(operator):
        value = getattr(operator, field.name)
        if field.name in ("attributes", "keys", "nested") and not isinstance(operator, Sort):
            changed[field.name] = swap(value)
        elif field.name in ("sources", "sets") and value is not None:
            changed[field.name] = tuple(swap(part) for part in value)
        elif field.name in ("mark", "into", "position") and value is not None:
            changed[field.name] = mapping.get(value, value)
        elif field.name == "by":
            changed[field.name] = tuple((mapping.get(a, a), mapping.get(b, b)) for a, b in value)
        elif field.name in ("columns", "aggregates"):
            changed[field.name] = tuple(
                replace(column, attribute=mapping.get(column.attribute, column.attribute)) for column in value
            )
    return with_scalars(replace(operator, **changed), lambda node: renamed(node, mapping))


def copied(root: Operator) -> tuple[Operator, dict[Attribute, Attribute]]:
    """A copy of the graph in which every attribute it produces is fresh, and what became of each."""
    order = postorder(root)
    mapping = {a: fresh_like(a) for operator in order for a in produced(operator)}
    keys: dict[int, int] = {}
    became: dict[Operator, Operator] = {}
    for operator in order:
        moved = relabelled(with_inputs(operator, tuple(became[below] for below in inputs(operator))), mapping)
        if isinstance(moved, (Recurrence, Fixpoint)):
            moved = replace(moved, key=keys.setdefault(moved.key, fresh_key()))
        became[operator] = moved
    return became[root], mapping


def exchanged(root: Operator, mapping: Mapping[Attribute, Attribute]) -> Operator:
    """The graph with attributes exchanged everywhere (produced or read)."""
    became: dict[Operator, Operator] = {}
    for operator in postorder(root):
        became[operator] = relabelled(
            with_inputs(operator, tuple(became[below] for below in inputs(operator))), mapping
        )
    return became[root]


def faults(root: Operator) -> list[str]:
    """What makes a graph illegal, in words; empty for a sound one.

    Unresolved attributes (free at the root), attributes that two inputs of a join share, sources that an input lacks.
    """
    found = [f"{a.name} is read but nothing produces it" for a in sorted(free(root))]
    for operator in postorder(root):
        below = inputs(operator)
        if isinstance(operator, Join):
            both = set(attributes(below[0])).intersection(attributes(below[1]))
            found.extend(f"both sides of a join produce {a.name}" for a in sorted(both))
        elif isinstance(operator, (SetOperation, Fixpoint)):
            for source, part in zip(operator.sources, below, strict=True):
                lost = set(source).difference(attributes(part))
                found.extend(f"an input of a {type(operator).__name__.lower()} lacks {a.name}" for a in sorted(lost))
    return found
