"""Scalar expressions: a small closed family of immutable values.

Equality is structural, hashing is done once at construction, and neither recurses: a chain of ten thousand additions
can be a dictionary key. Attributes are compared by identity number, never by name.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, fields
from enum import Enum
from typing import TypeVar

from core.algebra.types import BOOLEAN, NULL, Type

_ids = itertools.count(1)


class Attribute:
    """A named column of a relation or an operator's result. Its identity is `id`; the name is for people."""

    __slots__ = ("id", "name", "type")

    def __init__(self, id: int, name: str, type: Type) -> None:
        self.id = id
        self.name = name
        self.type = type

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Attribute) and other.id == self.id

    def __hash__(self) -> int:
        return hash(self.id)

    def __lt__(self, other: Attribute) -> bool:
        return self.id < other.id

    def __repr__(self) -> str:
        return f"{self.name}#{self.id}"


def fresh(name: str, type_: Type) -> Attribute:
    """A new attribute, distinct from every other of this process."""
    return Attribute(next(_ids), name, type_)


def fresh_key() -> int:
    """A number that no attribute and no fixpoint of this process has."""
    return next(_ids)


def fresh_like(attribute: Attribute, name: str | None = None) -> Attribute:
    """A new attribute with the name and type of an old one."""
    return Attribute(next(_ids), attribute.name if name is None else name, attribute.type)


class ComparisonOperator(Enum):
    EQUAL = "="
    UNEQUAL = "<>"
    LESS = "<"
    AT_MOST = "<="
    GREATER = ">"
    AT_LEAST = ">="
    DISTINCT = "is distinct from"
    NOT_DISTINCT = "is not distinct from"


class ArithmeticOperator(Enum):
    ADD = "+"
    SUBTRACT = "-"
    MULTIPLY = "*"
    DIVIDE = "/"
    INTEGER_DIVIDE = "//"
    REMAINDER = "%"
    CONCATENATE = "||"


NEGATED = {
    ComparisonOperator.EQUAL: ComparisonOperator.UNEQUAL,
    ComparisonOperator.UNEQUAL: ComparisonOperator.EQUAL,
    ComparisonOperator.LESS: ComparisonOperator.AT_LEAST,
    ComparisonOperator.AT_LEAST: ComparisonOperator.LESS,
    ComparisonOperator.GREATER: ComparisonOperator.AT_MOST,
    ComparisonOperator.AT_MOST: ComparisonOperator.GREATER,
    ComparisonOperator.DISTINCT: ComparisonOperator.NOT_DISTINCT,
    ComparisonOperator.NOT_DISTINCT: ComparisonOperator.DISTINCT,
}
"""`not (a op b)` is `a NEGATED[op] b`, also where a side is NULL (both unknown, or both known)."""

MIRRORED = {
    ComparisonOperator.EQUAL: ComparisonOperator.EQUAL,
    ComparisonOperator.UNEQUAL: ComparisonOperator.UNEQUAL,
    ComparisonOperator.LESS: ComparisonOperator.GREATER,
    ComparisonOperator.AT_LEAST: ComparisonOperator.AT_MOST,
    ComparisonOperator.GREATER: ComparisonOperator.LESS,
    ComparisonOperator.AT_MOST: ComparisonOperator.AT_LEAST,
    ComparisonOperator.DISTINCT: ComparisonOperator.DISTINCT,
    ComparisonOperator.NOT_DISTINCT: ComparisonOperator.NOT_DISTINCT,
}
"""`a op b` is `b MIRRORED[op] a`."""


class Node:
    """What scalars, aggregates and sort keys share: structural equality and a hash computed once, both without recursion."""

    __slots__ = ("__weakref__", "_hash")
    _hash: int

    def __post_init__(self) -> None:
        cls = type(self)
        values = tuple(getattr(self, name) for name in _field_names(cls))
        object.__setattr__(self, "_hash", hash((cls.__name__, values)))

    def __hash__(self) -> int:
        return self._hash

    def __reduce__(self) -> tuple[object, ...]:
        """Pickled as a call of its class: another process has other hashes of texts."""
        return type(self), tuple(getattr(self, name) for name in _field_names(type(self)))

    def __eq__(self, other: object) -> bool:
        if self is other:
            return True
        if not isinstance(other, Node):
            return NotImplemented
        pending: list[tuple[object, object]] = [(self, other)]
        while pending:
            left, right = pending.pop()
            if left is right:
                continue
            if isinstance(left, Node):
                if type(left) is not type(right) or left._hash != right._hash:
                    return False
                pending.extend((getattr(left, name), getattr(right, name)) for name in _field_names(type(left)))
            elif isinstance(left, tuple):
                if not isinstance(right, tuple) or len(left) != len(right):
                    return False
                pending.extend(zip(left, right, strict=True))
            elif type(left) is not type(right) or left != right:
                return False
        return True


N = TypeVar("N", bound=Node)

_FIELDS: dict[type, tuple[str, ...]] = {}


def _field_names(cls: type) -> tuple[str, ...]:
    names = _FIELDS.get(cls)
    if names is None:
        names = _FIELDS[cls] = tuple(field.name for field in fields(cls))
    return names


@dataclass(frozen=True, slots=True, eq=False)
class Ref(Node):
    """The value of an attribute in the current row (or in an outer row: then the attribute is free below)."""

    attribute: Attribute


@dataclass(frozen=True, slots=True, eq=False)
class Literal(Node):
    """A constant, as text and SQL type (so 1, 1.0 and TRUE stay apart). `text` None is NULL."""

    text: str | None
    type: Type


@dataclass(frozen=True, slots=True, eq=False)
class Comparison(Node):
    operator: ComparisonOperator
    left: Scalar
    right: Scalar


@dataclass(frozen=True, slots=True, eq=False)
class And(Node):
    """Conjunction in three-valued logic. Build it with `conjunction`, which flattens."""

    terms: tuple[Scalar, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Or(Node):
    """Disjunction in three-valued logic. Build it with `disjunction`, which flattens."""

    terms: tuple[Scalar, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Not(Node):
    term: Scalar


@dataclass(frozen=True, slots=True, eq=False)
class IsNull(Node):
    """True or false, never unknown."""

    term: Scalar


@dataclass(frozen=True, slots=True, eq=False)
class IsTruth(Node):
    """`term IS TRUE` (value True) or `term IS FALSE`: true or false, never unknown."""

    term: Scalar
    value: bool


@dataclass(frozen=True, slots=True, eq=False)
class InList(Node):
    """`term IN (items)`: the disjunction of equalities, unknown where none is true and one is unknown."""

    term: Scalar
    items: tuple[Scalar, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Arithmetic(Node):
    """`type` is what the reader's dialect gives; it is kept so that integer division keeps its meaning."""

    operator: ArithmeticOperator
    left: Scalar
    right: Scalar
    type: Type


@dataclass(frozen=True, slots=True, eq=False)
class Negative(Node):
    term: Scalar


@dataclass(frozen=True, slots=True, eq=False)
class Case(Node):
    """Searched CASE: the value of the first branch whose condition is true, else `otherwise` (NULL literal if absent)."""

    branches: tuple[tuple[Scalar, Scalar], ...]
    otherwise: Scalar


@dataclass(frozen=True, slots=True, eq=False)
class Cast(Node):
    """`lenient` gives NULL instead of an error where the value does not convert (TRY_CAST)."""

    term: Scalar
    type: Type
    lenient: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Call(Node):
    """A function the algebra carries whole.

    `name` is the function's name in lower case, for people and for the table of known functions. `form` belongs to the
    language room: how to print the call (empty: plain `name(arguments)`). `type` is the result type as far as known.
    """

    name: str
    arguments: tuple[Scalar, ...]
    type: Type
    form: str = ""


Scalar = (
    Ref | Literal | Comparison | And | Or | Not | IsNull | IsTruth | InList | Arithmetic | Negative | Case | Cast | Call
)


@dataclass(frozen=True, slots=True, eq=False)
class SortKey(Node):
    """One key of an ordering. NULL placement is always explicit."""

    term: Scalar
    descending: bool = False
    nulls_first: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Aggregate(Node):
    """A function over the rows of a group (or of a window): `count(*)` is name "count" with no arguments.

    `condition` is the FILTER clause, `order` the ordering inside the call (string_agg, array_agg, ordered sets).
    `form` as in `Call`. The functions of the algebra's own table are in `core.algebra.functions`.
    """

    name: str
    arguments: tuple[Scalar, ...]
    type: Type
    distinct: bool = False
    condition: Scalar | None = None
    order: tuple[SortKey, ...] = ()
    form: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Frame(Node):
    """A window frame. Bounds are `(offset, direction)`: offset None is UNBOUNDED, direction "preceding", "current" or "following"."""

    unit: str
    start: tuple[Scalar | None, str]
    end: tuple[Scalar | None, str]
    exclude: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class WindowCall(Node):
    """A function over the window of each row. `frame` None is the standard's default."""

    function: Aggregate
    partition: tuple[Scalar, ...] = ()
    order: tuple[SortKey, ...] = ()
    frame: Frame | None = None


TRUE = Literal("true", BOOLEAN)
FALSE = Literal("false", BOOLEAN)
UNKNOWN_TRUTH = Literal(None, BOOLEAN)
NULL_LITERAL = Literal(None, NULL)


def parts(node: Node) -> tuple[Node, ...]:
    """The nodes directly inside a node, in order of writing."""
    match node:
        case Ref() | Literal():
            return ()
        case Comparison(left=left, right=right) | Arithmetic(left=left, right=right):
            return (left, right)
        case And(terms=terms) | Or(terms=terms):
            return terms
        case Not(term=term) | IsNull(term=term) | IsTruth(term=term) | Negative(term=term) | Cast(term=term):
            return (term,)
        case InList(term=term, items=items):
            return (term, *items)
        case Case(branches=branches, otherwise=otherwise):
            return (*itertools.chain.from_iterable(branches), otherwise)
        case Call(arguments=arguments):
            return arguments
        case SortKey(term=term):
            return (term,)
        case Aggregate(arguments=arguments, condition=condition, order=order):
            return (*arguments, *(() if condition is None else (condition,)), *order)
        case Frame(start=(start, _), end=(end, _)):
            return tuple(bound for bound in (start, end) if bound is not None)
        case WindowCall(function=function, partition=partition, order=order, frame=frame):
            return (function, *partition, *order, *(() if frame is None else (frame,)))
    raise TypeError(f"not a scalar: {node!r}")


def with_parts(node: Node, new: tuple[Node, ...]) -> Node:
    """The node with its parts replaced, in the order of `parts`. The same object where nothing changed."""
    old = parts(node)
    if len(old) != len(new):
        raise ValueError(f"{type(node).__name__} has {len(old)} parts, not {len(new)}")
    if all(a is b for a, b in zip(old, new, strict=True)):
        return node
    return _rebuild(node, new)


def _rebuild(node: Node, new: tuple[Node, ...]) -> Node:
    it: Iterator[object] = iter(new)

    def take(count: int) -> tuple[object, ...]:
        return tuple(itertools.islice(it, count))

    changed: dict[str, object]
    match node:
        case Comparison() | Arithmetic():
            changed = {"left": next(it), "right": next(it)}
        case And() | Or():
            changed = {"terms": new}
        case Not() | IsNull() | IsTruth() | Negative() | Cast() | SortKey():
            changed = {"term": next(it)}
        case InList():
            changed = {"term": new[0], "items": new[1:]}
        case Case(branches=branches):
            changed = {"branches": tuple((next(it), next(it)) for _ in branches), "otherwise": next(it)}
        case Call():
            changed = {"arguments": new}
        case Aggregate(arguments=arguments, condition=condition, order=order):
            changed = {
                "arguments": take(len(arguments)),
                "condition": None if condition is None else next(it),
                "order": take(len(order)),
            }
        case Frame(start=start, end=end):
            changed = {
                "start": (None if start[0] is None else next(it), start[1]),
                "end": (None if end[0] is None else next(it), end[1]),
            }
        case WindowCall(partition=partition, order=order, frame=frame):
            changed = {
                "function": next(it),
                "partition": take(len(partition)),
                "order": take(len(order)),
                "frame": None if frame is None else next(it),
            }
        case _:
            raise TypeError(f"not a scalar with parts: {node!r}")
    values = {name: getattr(node, name) for name in _field_names(type(node))}
    return type(node)(**{**values, **changed})


def walk(*roots: Node) -> Iterator[Node]:
    """Every node in and below the roots, outer before inner, in order of writing."""
    pending = list(reversed(roots))
    while pending:
        node = pending.pop()
        yield node
        pending.extend(reversed(parts(node)))


def refs(*roots: Node) -> frozenset[Attribute]:
    """The attributes that the scalars read."""
    return frozenset(node.attribute for node in walk(*roots) if isinstance(node, Ref))


def transform(root: N, change: Callable[[Node], Node]) -> N:
    """The scalar rebuilt from the inside out: `change` sees every node with its parts already changed.

    Equal inner nodes are changed once. The same object comes back where nothing changed.
    """
    done: dict[Node, Node] = {}
    unchanged: set[Node] = set()

    def became(node: Node) -> Node:
        # An equal node may stand for this one in `done`: what did not change must stay the very object.
        return node if node in unchanged else done[node]

    pending: list[tuple[Node, bool]] = [(root, False)]
    while pending:
        node, ready = pending.pop()
        if node in done:
            continue
        inner = parts(node)
        if ready or not inner:
            done[node] = change(with_parts(node, tuple(became(part) for part in inner)))
            if done[node] is node:
                unchanged.add(node)
        else:
            pending.append((node, True))
            pending.extend((part, False) for part in inner)
    return became(root)  # type: ignore[return-value]


def substitute(root: N, mapping: Mapping[Attribute, Scalar]) -> N:
    """The scalar with attributes replaced by scalars. The same object where nothing changed."""
    if not mapping or mapping.keys().isdisjoint(refs(root)):
        return root
    return transform(root, lambda node: mapping.get(node.attribute, node) if isinstance(node, Ref) else node)


def renamed(root: N, mapping: Mapping[Attribute, Attribute]) -> N:
    """The scalar reading other attributes in place of those in the mapping."""
    # The mapping may hold every attribute of a large graph; a scalar reads few.
    return substitute(root, {old: Ref(mapping[old]) for old in refs(root) if old in mapping})


def conjuncts(condition: Scalar) -> tuple[Scalar, ...]:
    """The terms of a conjunction, flattened; none for the literal TRUE."""
    return _flatten(condition, And, TRUE)


def disjuncts(condition: Scalar) -> tuple[Scalar, ...]:
    """The terms of a disjunction, flattened; none for the literal FALSE."""
    return _flatten(condition, Or, FALSE)


def conjunction(terms: Iterable[Scalar]) -> Scalar:
    """The flattened conjunction of the terms without repetitions; TRUE of none."""
    return _join(terms, And, TRUE)


def disjunction(terms: Iterable[Scalar]) -> Scalar:
    """The flattened disjunction of the terms without repetitions; FALSE of none."""
    return _join(terms, Or, FALSE)


def _flatten(condition: Scalar, cls: type[And | Or], unit: Literal) -> tuple[Scalar, ...]:
    found: list[Scalar] = []
    pending = [condition]
    while pending:
        term = pending.pop()
        if isinstance(term, (And, Or)) and type(term) is cls:
            pending.extend(reversed(term.terms))
        elif term != unit:
            found.append(term)
    return tuple(found)


def _join(terms: Iterable[Scalar], cls: type[And | Or], unit: Literal) -> Scalar:
    flat = tuple(dict.fromkeys(itertools.chain.from_iterable(_flatten(term, cls, unit) for term in terms)))
    if not flat:
        return unit
    return flat[0] if len(flat) == 1 else cls(flat)


def equal(left: Scalar, right: Scalar) -> Comparison:
    return Comparison(ComparisonOperator.EQUAL, left, right)
