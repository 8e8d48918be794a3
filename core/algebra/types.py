"""SQL types as far as the algebra needs them: a family to reason with and a name to print.

The name is the type as DuckDB spells it (`DECIMAL(12, 2)`, `BIGINT[]`); rooms that print another dialect hand it to the
SQL writer. The family decides comparability, arithmetic and the values that generated data may take.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum


class Family(Enum):
    BOOLEAN = "boolean"
    INTEGER = "integer"
    DECIMAL = "decimal"
    FLOAT = "float"
    TEXT = "text"
    BINARY = "binary"
    DATE = "date"
    TIME = "time"
    TIMESTAMP = "timestamp"
    INTERVAL = "interval"
    NESTED = "nested"
    NULL = "null"
    OTHER = "other"
    UNKNOWN = "unknown"


@dataclass(frozen=True, slots=True)
class Type:
    family: Family
    name: str

    def __str__(self) -> str:
        return self.name.lower()


BOOLEAN = Type(Family.BOOLEAN, "BOOLEAN")
INTEGER = Type(Family.INTEGER, "INTEGER")
BIGINT = Type(Family.INTEGER, "BIGINT")
HUGEINT = Type(Family.INTEGER, "HUGEINT")
DECIMAL = Type(Family.DECIMAL, "DECIMAL(18, 3)")
DOUBLE = Type(Family.FLOAT, "DOUBLE")
TEXT = Type(Family.TEXT, "VARCHAR")
DATE = Type(Family.DATE, "DATE")
TIME = Type(Family.TIME, "TIME")
TIMESTAMP = Type(Family.TIMESTAMP, "TIMESTAMP")
INTERVAL = Type(Family.INTERVAL, "INTERVAL")
RELATION = Type(Family.NESTED, "RELATION")
NULL = Type(Family.NULL, "NULL")
UNKNOWN = Type(Family.UNKNOWN, "UNKNOWN")

NUMERIC = (Family.INTEGER, Family.DECIMAL, Family.FLOAT)
TEMPORAL = (Family.DATE, Family.TIME, Family.TIMESTAMP)

_FAMILIES = {
    "BOOLEAN": Family.BOOLEAN,
    "BOOL": Family.BOOLEAN,
    "TINYINT": Family.INTEGER,
    "SMALLINT": Family.INTEGER,
    "INT": Family.INTEGER,
    "INTEGER": Family.INTEGER,
    "BIGINT": Family.INTEGER,
    "HUGEINT": Family.INTEGER,
    "INT128": Family.INTEGER,
    "UTINYINT": Family.INTEGER,
    "USMALLINT": Family.INTEGER,
    "UINTEGER": Family.INTEGER,
    "UBIGINT": Family.INTEGER,
    "UHUGEINT": Family.INTEGER,
    "DECIMAL": Family.DECIMAL,
    "NUMERIC": Family.DECIMAL,
    "REAL": Family.FLOAT,
    "FLOAT": Family.FLOAT,
    "DOUBLE": Family.FLOAT,
    "DOUBLE PRECISION": Family.FLOAT,
    "CHAR": Family.TEXT,
    "VARCHAR": Family.TEXT,
    "TEXT": Family.TEXT,
    "STRING": Family.TEXT,
    "BLOB": Family.BINARY,
    "BYTEA": Family.BINARY,
    "DATE": Family.DATE,
    "TIME": Family.TIME,
    "TIMESTAMP": Family.TIMESTAMP,
    "TIMESTAMPTZ": Family.TIMESTAMP,
    "TIMESTAMP WITH TIME ZONE": Family.TIMESTAMP,
    "DATETIME": Family.TIMESTAMP,
    "INTERVAL": Family.INTERVAL,
    "STRUCT": Family.NESTED,
    "LIST": Family.NESTED,
    "MAP": Family.NESTED,
    "NULL": Family.NULL,
    "UNKNOWN": Family.UNKNOWN,
}


def type_named(name: str) -> Type:
    """The type with this DuckDB spelling. An unheard-of name keeps its text and gets the family OTHER."""
    text = name.strip()
    upper = text.upper()
    if upper.endswith("]"):
        return Type(Family.NESTED, upper)
    stem = upper.split("(", 1)[0].strip()
    family = _FAMILIES.get(upper, _FAMILIES.get(stem, Family.OTHER))
    return Type(family, text if family is Family.NESTED else upper)


def comparable(left: Type, right: Type) -> bool:
    """Whether values of the two types compare without a cast that a reader would want to know of."""
    if Family.UNKNOWN in (left.family, right.family) or Family.NULL in (left.family, right.family):
        return True
    if left.family in NUMERIC and right.family in NUMERIC:
        return True
    if {left.family, right.family} == {Family.DATE, Family.TIMESTAMP}:
        return True
    return left.family is right.family


def common_type(left: Type, right: Type) -> Type:
    """The type of a value that may come from either side (CASE branches, set operations)."""
    if left == right or right.family in (Family.NULL, Family.UNKNOWN):
        return left
    if left.family in (Family.NULL, Family.UNKNOWN):
        return right
    if left.family in NUMERIC and right.family in NUMERIC:
        rank = {family: place for place, family in enumerate(NUMERIC)}
        if left.family is right.family:
            return left if _width(left) >= _width(right) else right
        return left if rank[left.family] > rank[right.family] else right
    if {left.family, right.family} == {Family.DATE, Family.TIMESTAMP}:
        return left if left.family is Family.TIMESTAMP else right
    if Family.TEXT in (left.family, right.family):
        return TEXT
    return left


_WIDTHS = {
    "TINYINT": 1,
    "UTINYINT": 1,
    "SMALLINT": 2,
    "USMALLINT": 2,
    "INT": 4,
    "INTEGER": 4,
    "UINTEGER": 4,
    "REAL": 4,
    "FLOAT": 4,
    "BIGINT": 8,
    "UBIGINT": 8,
    "DOUBLE": 8,
    "HUGEINT": 16,
    "INT128": 16,
}


def _width(type_: Type) -> int:
    if type_.family is Family.DECIMAL:
        precision = type_.name.partition("(")[2].partition(",")[0].strip(") ")
        return int(precision) if precision.isdigit() else 18
    return _WIDTHS.get(type_.name, 8)


_BYTES = {
    Family.BOOLEAN: 1,
    Family.INTEGER: 8,
    Family.DECIMAL: 8,
    Family.FLOAT: 8,
    Family.TEXT: 16,
    Family.BINARY: 32,
    Family.DATE: 4,
    Family.TIME: 8,
    Family.TIMESTAMP: 8,
    Family.INTERVAL: 16,
    Family.NESTED: 64,
    Family.NULL: 1,
    Family.OTHER: 16,
    Family.UNKNOWN: 16,
}


def assumed_bytes(type_: Type) -> int:
    """Bytes one value takes where nothing is known of the data: the storage width of fixed-width types, else a guess."""
    if type_.family in (Family.INTEGER, Family.FLOAT):
        return _WIDTHS.get(type_.name, 8)
    return _BYTES[type_.family]
