"""The operators of the algebra: immutable values over bags of rows.

Operators compare and hash by identity: a plan is a graph, and one operator object in two places is one shared result.
Whether two operators mean the same is a question for `core.compare`. What follows from an operator (schema, keys,
sizes) is computed beside it, never stored in it. Signs and readable text: `core.algebra.notation`.

Attributes are unique: no operator may see one attribute from two inputs. Using a result twice therefore takes a
`Project` with fresh attributes over it (a renaming, drawn as rho).
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from core.algebra.scalars import Aggregate, Attribute, Call, Scalar, SortKey, WindowCall


class JoinKind(Enum):
    """INNER with the condition TRUE is the product.

    SEMI and ANTI keep the left rows that have / have not a partner for which the condition is true. MARK keeps every
    left row and adds a truth value: true if the condition is true for some right row, else unknown if it is unknown
    for some, else false (Neumann, Kemper, BTW 2015). SINGLE is LEFT with at most one partner a row: more is a run-time
    error, as SQL demands of a scalar subquery.
    """

    INNER = "inner"
    LEFT = "left"
    RIGHT = "right"
    FULL = "full"
    SEMI = "semi"
    ANTI = "anti"
    MARK = "mark"
    SINGLE = "single"


class SetKind(Enum):
    UNION = "union"
    INTERSECT = "intersect"
    EXCEPT = "except"


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Relation:
    """A base relation. `name` is what the catalog is asked for (dotted where qualified); `alias` what the text calls it."""

    name: str
    attributes: tuple[Attribute, ...]
    alias: str = ""

    def __post_init__(self) -> None:
        _distinct("relation " + self.name, self.attributes)


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Values:
    """Rows written out. One row without attributes is the input of a SELECT without FROM."""

    attributes: tuple[Attribute, ...]
    rows: tuple[tuple[Scalar, ...], ...]

    def __post_init__(self) -> None:
        _distinct("values", self.attributes)
        for row in self.rows:
            if len(row) != len(self.attributes):
                raise ValueError(f"a row of {len(row)} values for {len(self.attributes)} attributes")


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class TableFunction:
    """A function that gives rows, such as generate_series(1, 10) or read_parquet('f')."""

    call: Call
    attributes: tuple[Attribute, ...]
    alias: str = ""


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Select:
    """Keeps the rows for which the condition is true."""

    input: Operator
    condition: Scalar


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Column:
    """One column of a projection: `attribute` is `value`. A column kept as it is keeps its attribute: Column(a, Ref(a))."""

    attribute: Attribute
    value: Scalar


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Project:
    """Computes columns row by row; keeps duplicates."""

    input: Operator
    columns: tuple[Column, ...]

    def __post_init__(self) -> None:
        _distinct("projection", tuple(column.attribute for column in self.columns))


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Join:
    """Any join. A right input that reads attributes of the left makes it dependent: it is evaluated for each left row.

    `mark` is the truth value that a MARK join adds, and None for every other kind.
    """

    kind: JoinKind
    left: Operator
    right: Operator
    condition: Scalar
    mark: Attribute | None = None

    def __post_init__(self) -> None:
        if (self.kind is JoinKind.MARK) != (self.mark is not None):
            raise ValueError("a mark join, and no other, has a mark attribute")


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class SetOperation:
    """Union, intersection or difference; NULLs are not distinct. UNION takes two or more inputs, the others two.

    `sources[i]` lists which attributes of input i give `attributes`, by position, so that the order of an input's own
    schema never matters. `distinct` False is the bag version (ALL).
    """

    kind: SetKind
    inputs: tuple[Operator, ...]
    sources: tuple[tuple[Attribute, ...], ...]
    attributes: tuple[Attribute, ...]
    distinct: bool

    def __post_init__(self) -> None:
        if len(self.inputs) < 2 or (self.kind is not SetKind.UNION and len(self.inputs) != 2):
            raise ValueError(f"{self.kind.value} of {len(self.inputs)} inputs")
        if len(self.sources) != len(self.inputs):
            raise ValueError("a set operation needs the attributes of each input")
        for source in self.sources:
            if len(source) != len(self.attributes):
                raise ValueError(f"{self.kind.value} of {len(source)} against {len(self.attributes)} attributes")
        _distinct(self.kind.value, self.attributes)


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Divide:
    """The rows of `dividend`, less the attributes `by` pairs, that occur with every row of `divisor` (Codd 1972).

    A set operation: the quotient has no duplicates. `by` pairs an attribute of the dividend with one of the divisor.
    """

    dividend: Operator
    divisor: Operator
    by: tuple[tuple[Attribute, Attribute], ...]


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Distinct:
    """Removes duplicates; NULLs are not distinct."""

    input: Operator


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class AggregateColumn:
    attribute: Attribute
    aggregate: Aggregate


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Group:
    """One row a group, NULLs grouped together. Keys are attributes of the input and keep their identity.

    Without keys and without `sets` there is one row, also over an empty input. `sets` are grouping sets over the keys:
    a key that is not in a set is NULL in that set's rows.
    """

    input: Operator
    keys: tuple[Attribute, ...]
    aggregates: tuple[AggregateColumn, ...]
    sets: tuple[tuple[Attribute, ...], ...] | None = None

    def __post_init__(self) -> None:
        _distinct("grouping", (*self.keys, *(column.attribute for column in self.aggregates)))


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Nest:
    """Groups by the keys and gathers the other attributes of each group into one relation-valued attribute."""

    input: Operator
    keys: tuple[Attribute, ...]
    nested: tuple[Attribute, ...]
    into: Attribute


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Unnest:
    """One row for each element of a list or nested relation, beside the row it stood in.

    `keep_empty` keeps a row whose list is empty or NULL, with NULLs (a left lateral unnest). `position` numbers from 1.
    """

    input: Operator
    term: Scalar
    attributes: tuple[Attribute, ...]
    position: Attribute | None = None
    keep_empty: bool = False


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class WindowColumn:
    attribute: Attribute
    call: WindowCall


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Window:
    """Adds columns computed over the window of each row."""

    input: Operator
    columns: tuple[WindowColumn, ...]


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Sort:
    """Orders the rows. Order is a property of this operator alone, and of a limit, projection or selection right above it."""

    input: Operator
    keys: tuple[SortKey, ...]


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Limit:
    """Keeps `count` rows after skipping `offset`; which ones is decided by a sort below, else arbitrary.

    `with_ties` also keeps the rows that tie with the last under that sort. `count` None keeps all.
    """

    input: Operator
    count: Scalar | None
    offset: Scalar | None = None
    with_ties: bool = False


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Recurrence:
    """Inside a fixpoint's step: the rows found so far (semi-naive: those found by the last round)."""

    name: str
    attributes: tuple[Attribute, ...]
    key: int


@dataclass(frozen=True, slots=True, eq=False, weakref_slot=True)
class Fixpoint:
    """`base`, then `step` over the last round's rows until none is new (`distinct`) or none comes (else it may not end).

    The step's `Recurrence` leaves carry the same `key`. Sources by position as in a set operation.
    """

    base: Operator
    step: Operator
    sources: tuple[tuple[Attribute, ...], tuple[Attribute, ...]]
    attributes: tuple[Attribute, ...]
    key: int
    distinct: bool
    name: str = ""


Operator = (
    Relation
    | Values
    | TableFunction
    | Select
    | Project
    | Join
    | SetOperation
    | Divide
    | Distinct
    | Group
    | Nest
    | Unnest
    | Window
    | Sort
    | Limit
    | Recurrence
    | Fixpoint
)

LEAVES = (Relation, Values, TableFunction, Recurrence)


def _distinct(where: str, attributes: tuple[Attribute, ...]) -> None:
    if len(set(attributes)) != len(attributes):
        seen: set[Attribute] = set()
        twice = next(a for a in attributes if a in seen or seen.add(a))  # type: ignore[func-returns-value]
        raise ValueError(f"{where} has the attribute {twice!r} twice")
