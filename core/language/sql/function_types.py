"""Result types of functions that are carried whole, as sqlglot infers them from the types of the arguments."""

from __future__ import annotations

from functools import lru_cache

from sqlglot import exp

from core.algebra.scalars import Scalar
from core.algebra.types import UNKNOWN, Family, Type, type_named
from core.algebra.typing import type_of
from core.language.sql.forms import filled


def result_type(form: str, arguments: tuple[Scalar, ...], dialect: str) -> Type:
    """The type of a call with these arguments, UNKNOWN where nobody knows."""
    return _inferred(form, tuple(type_of(argument).name for argument in arguments), dialect)


@lru_cache(maxsize=4096)
def _inferred(form: str, names: tuple[str, ...], dialect: str) -> Type:
    from sqlglot.optimizer.annotate_types import annotate_types

    typed: list[exp.Expression] = []
    for name in names:
        known = type_named(name)
        if known.family in (Family.UNKNOWN, Family.NULL, Family.OTHER):
            typed.append(exp.Null())
        else:
            typed.append(exp.cast(exp.Null(), exp.DataType.build(name, dialect="duckdb")))
    node = annotate_types(filled(form, typed), dialect=dialect)
    found = node.type
    if found is None or found.this in (exp.DType.UNKNOWN, exp.DType.NULL):
        return UNKNOWN
    return type_named(found.sql("duckdb"))
