"""The type of a scalar, from the types of what it reads."""

from __future__ import annotations

from collections.abc import Sequence

from core.algebra.scalars import (
    Aggregate,
    And,
    Arithmetic,
    ArithmeticOperator,
    Call,
    Case,
    Cast,
    Comparison,
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
    SortKey,
    WindowCall,
)
from core.algebra.types import (
    BOOLEAN,
    DOUBLE,
    INTERVAL,
    NULL,
    NUMERIC,
    TEMPORAL,
    TEXT,
    TIMESTAMP,
    UNKNOWN,
    Family,
    Type,
    common_type,
)


def type_of(node: Node) -> Type:
    """The type of a scalar's values; UNKNOWN where it rests on something unknown.

    Recursion is bounded by constant work a node: only the parts that decide the type are followed, without the stack.
    """
    while True:
        match node:
            case Ref(attribute=attribute):
                return attribute.type
            case Comparison() | And() | Or() | Not() | IsNull() | IsTruth() | InList():
                return BOOLEAN
            case (
                Literal(type=type_)
                | Cast(type=type_)
                | Call(type=type_)
                | Arithmetic(type=type_)
                | Aggregate(type=type_)
            ):
                return type_
            case Negative(term=term) | SortKey(term=term):
                node = term
            case WindowCall(function=function):
                node = function
            case Case(branches=branches, otherwise=otherwise):
                return _case_type([value for _, value in branches] + [otherwise])
            case Frame():
                return UNKNOWN
            case _:
                raise TypeError(f"not a scalar: {node!r}")


def _case_type(values: Sequence[Node]) -> Type:
    result = NULL
    pending = list(reversed(values))
    while pending:
        value = pending.pop()
        if isinstance(value, Case):
            pending.append(value.otherwise)
            pending.extend(branch for _, branch in value.branches)
        else:
            result = common_type(result, type_of(value))
    return result


def arithmetic_type(operator: ArithmeticOperator, left: Type, right: Type) -> Type:
    """The type of an arithmetic result under DuckDB's rules, as far as families go."""
    families = (left.family, right.family)
    if operator is ArithmeticOperator.CONCATENATE:
        return left if left.family is Family.NESTED else TEXT
    if Family.UNKNOWN in families:
        return UNKNOWN
    if Family.INTERVAL in families:
        other = right if left.family is Family.INTERVAL else left
        return TIMESTAMP if other.family in TEMPORAL and other.family is not Family.TIME else INTERVAL
    if left.family in TEMPORAL and right.family in TEMPORAL:
        return Type(Family.INTEGER, "BIGINT") if left.family is Family.DATE else INTERVAL
    if left.family in TEMPORAL:
        return left
    if right.family in TEMPORAL:
        return right
    if operator is ArithmeticOperator.DIVIDE and left.family in NUMERIC and right.family in NUMERIC:
        return DOUBLE
    return common_type(left, right)
