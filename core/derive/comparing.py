"""What an equality between two types says of the values: a comparison may cast, and a cast may make several values one.

As in '01' = 1 and '1' = 1 (text is cast to a number), or 9007199254740993 = 9007199254740992.0 (an integer is cast to a
float). Keys and constants follow from an equality only where it leaves one value.
"""

from __future__ import annotations

from core.algebra.types import Family, Type

_EXACT = (Family.INTEGER, Family.DECIMAL)
_SHORT = ("TINYINT", "SMALLINT", "INTEGER", "INT", "UTINYINT", "USMALLINT", "UINTEGER")
"""Integers that a double holds to the last digit."""


def decides(by: Type, of: Type) -> bool:
    """Whether at most one value of type `of` equals a given value of type `by`.

    Columns of unknown type (relations without a catalog entry) are taken to compare without a cast.
    """
    families = (by.family, of.family)
    if Family.UNKNOWN in families or Family.NULL in families:
        return True
    if by.family is of.family:
        plain = by.family not in (Family.TIMESTAMP, Family.TIME, Family.NESTED, Family.OTHER)
        return plain or by.name == of.name
    if of.family in _EXACT:
        return by.family in _EXACT or (by.name == "DOUBLE" and of.name in _SHORT)
    if of.family is Family.FLOAT:
        return by.family in _EXACT
    return {*families} == {Family.DATE, Family.TIMESTAMP} and "TIMESTAMP" in (by.name, of.name)


def one_value(left: Type, right: Type) -> bool:
    """Whether values that are equal are the same: each side decides the other."""
    return decides(left, right) and decides(right, left)
