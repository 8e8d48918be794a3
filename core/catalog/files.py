"""The catalog file: one readable TOML file that a team keeps beside its queries.

    format = "planimeter catalog 1"

    [relations.parcels]
    rows = 52000
    primary = ["parcel_id"]

    [relations.parcels.attributes.depot_id]
    type = "INTEGER"
    nullable = true
    distinct = 412

Every figure is optional. Values of an attribute (low, high, heavy hitters, histogram) are written in TOML's own types;
decimals and times as text, restored by the attribute's type.
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Mapping
from dataclasses import fields
from datetime import date, datetime, time
from decimal import Decimal
from pathlib import Path
from typing import Any

from core.algebra.types import Family, Type, type_named
from core.catalog.ddl import CatalogError
from core.catalog.model import (
    AttributeFacts,
    Catalog,
    Evidence,
    ForeignKey,
    HeavyHitter,
    Joint,
    RelationFacts,
    Statistics,
    Value,
    catalog_of,
)
from core.whole_file import write_whole

FORMAT = "planimeter catalog 1"
_RELATION_KEYS = (
    "rows", "rows_exact", "rows_evidence", "bytes", "source", "as_of", "location", "primary", "unique", "checks",
    "foreign_keys", "joint", "attributes",
)  # fmt: skip
_ATTRIBUTE_KEYS = (
    "type", "nullable", "inferred", "distinct", "nulls", "low", "high", "width", "largest_group", "heavy", "histogram",
    "exact", "declared", "evidence", "source", "as_of",
)  # fmt: skip
_FIGURES = tuple(field.name for field in fields(Statistics))


def load_catalog(path: str | Path) -> Catalog:
    """The catalog in a file. Raises `CatalogError` that names the file, the key and what was expected."""
    try:
        text = Path(path).read_text(encoding="utf-8")
    except OSError as error:
        raise CatalogError(f"{path}: {error.strerror}") from error
    try:
        return catalog_from_toml(text)
    except CatalogError as error:
        raise CatalogError(f"{path}: {error}") from error


def save_catalog(catalog: Catalog, path: str | Path) -> None:
    """Writes the catalog so that a reader never sees half a file."""
    write_whole(path, catalog_to_toml(catalog))


# --- writing ---------------------------------------------------------------------------------------------------------


def catalog_to_toml(catalog: Catalog) -> str:
    """The catalog as text; the same bytes for the same catalog."""
    lines = [f"format = {_text(FORMAT)}"]
    for facts in sorted(catalog, key=lambda f: f.name.lower()):
        head = f"relations.{_key(facts.name)}"
        lines += ["", f"[{head}]"]
        lines += _pairs(
            rows=facts.rows,
            rows_exact=facts.rows_exact or None,
            rows_evidence=None if facts.rows is None else facts.rows_evidence.word,
            bytes=facts.bytes,
            source=facts.source or None,
            as_of=facts.as_of,
            location=facts.location or None,
            primary=None if facts.primary is None else list(facts.primary),
            unique=[list(names) for names in facts.unique] or None,
            checks=list(facts.checks) or None,
        )
        for attribute in facts.attributes:
            lines += ["", f"[{head}.attributes.{_key(attribute.name)}]", *_attribute_lines(attribute)]
        for key in facts.foreign_keys:
            lines += ["", f"[[{head}.foreign_keys]]"]
            lines += _pairs(attributes=list(key.attributes), relation=key.relation, target=list(key.target))
        for joint in facts.joint:
            lines += ["", f"[[{head}.joint]]"]
            lines += _pairs(
                attributes=list(joint.attributes),
                distinct=joint.distinct,
                largest_group=joint.largest_group,
                exact=joint.exact or None,
                evidence=joint.evidence.word,
            )
    return "\n".join(lines) + "\n"


def _attribute_lines(attribute: AttributeFacts) -> list[str]:
    lines = _pairs(type=attribute.type.name, nullable=attribute.nullable, inferred=attribute.inferred or None)
    known = attribute.statistics
    if known is None:
        return lines
    return lines + _pairs(
        distinct=known.distinct,
        nulls=known.nulls,
        low=known.low,
        high=known.high,
        width=known.width,
        largest_group=known.largest_group,
        heavy=[[hitter.value, hitter.rows] for hitter in known.heavy] or None,
        histogram=list(known.histogram) or None,
        exact=sorted(known.exact) or None,
        declared=sorted(known.declared) or None,
        evidence=known.evidence.word,
        source=known.source or None,
        as_of=known.as_of,
    )


def _pairs(**values: Any) -> list[str]:
    return [f"{name} = {_value(value)}" for name, value in values.items() if value is not None]


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return repr(value) if value == value and abs(value) != float("inf") else str(value)
    if isinstance(value, (datetime, date, time)):
        return value.isoformat()
    if isinstance(value, list):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    return _text(str(value))


def _text(text: str) -> str:
    # JSON strings are TOML basic strings once DEL is escaped.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007F")


def _key(name: str) -> str:
    bare = name.isascii() and name.replace("_", "").replace("-", "").isalnum()
    return name if bare else _text(name)


# --- reading ---------------------------------------------------------------------------------------------------------


def catalog_from_toml(text: str) -> Catalog:
    """The catalog that a text describes. Raises `CatalogError`."""
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise CatalogError(str(error)) from error
    if document.get("format") != FORMAT:
        raise CatalogError(f'the first line should be format = "{FORMAT}", not {document.get("format")!r}')
    _known_keys(document, ("format", "relations"), "the catalog", text)
    relations = document.get("relations", {})
    return catalog_of(_relation(name, part, text) for name, part in relations.items())


def _known_keys(part: Mapping[str, Any], known: tuple[str, ...], where: str, text: str) -> None:
    from difflib import get_close_matches

    for key in part:
        if key not in known:
            close = get_close_matches(key, known, n=1)
            row = next((i for i, line in enumerate(text.split("\n"), 1) if line.strip().startswith(key)), None)
            at = f" (line {row})" if row else ""
            guess = f"; did you mean {close[0]}?" if close else f"; known keys: {', '.join(known)}"
            raise CatalogError(f"{where} has no key {key}{at}{guess}")


def _relation(name: str, part: Mapping[str, Any], text: str) -> RelationFacts:
    where = f"relation {name}"
    if not isinstance(part, Mapping):
        raise CatalogError(f"{where} should be a table")
    _known_keys(part, _RELATION_KEYS, where, text)
    attributes = tuple(_attribute(n, p, where, text) for n, p in part.get("attributes", {}).items())
    primary = part.get("primary")
    return RelationFacts(
        name,
        attributes,
        primary=None if primary is None else tuple(primary),
        unique=tuple(tuple(names) for names in part.get("unique", ())),
        foreign_keys=tuple(
            ForeignKey(tuple(k["attributes"]), k["relation"], tuple(k["target"])) for k in part.get("foreign_keys", ())
        ),
        checks=tuple(part.get("checks", ())),
        rows=_count(part.get("rows"), "rows", where),
        rows_exact=bool(part.get("rows_exact", False)),
        rows_evidence=_evidence(part.get("rows_evidence", "declared" if "rows" in part else "assumed"), where),
        bytes=_count(part.get("bytes"), "bytes", where),
        joint=tuple(
            Joint(
                tuple(j["attributes"]),
                j["distinct"],
                j.get("largest_group"),
                bool(j.get("exact", False)),
                _evidence(j.get("evidence", "declared"), where),
            )
            for j in part.get("joint", ())
        ),
        source=str(part.get("source", "")),
        as_of=part.get("as_of"),
        location=str(part.get("location", "")),
    )


def _count(value: Any, key: str, where: str) -> int | None:
    if value is None:
        return None
    if not isinstance(value, int) or isinstance(value, bool) or value < 0:
        raise CatalogError(f"{where}: {key} should be a whole number, not {value!r}")
    return value


def _evidence(word: str, where: str) -> Evidence:
    try:
        return Evidence[str(word).upper()]
    except KeyError:
        words = ", ".join(e.word for e in Evidence)
        raise CatalogError(f"{where}: evidence is one of {words}, not {word!r}") from None


def _attribute(name: str, part: Mapping[str, Any], where: str, text: str) -> AttributeFacts:
    here = f"{where}, attribute {name}"
    _known_keys(part, _ATTRIBUTE_KEYS, here, text)
    type_ = type_named(str(part.get("type", "UNKNOWN")))
    figures = {key: part[key] for key in part if key in _FIGURES}
    statistics = None if not figures else _statistics(figures, type_, here)
    nullable, inferred = bool(part.get("nullable", True)), bool(part.get("inferred", False))
    return AttributeFacts(name, type_, nullable, statistics, inferred)


def _statistics(part: Mapping[str, Any], type_: Type, where: str) -> Statistics:
    width = part.get("width")
    return Statistics(
        distinct=_count(part.get("distinct"), "distinct", where),
        nulls=_count(part.get("nulls"), "nulls", where),
        low=None if "low" not in part else _restored(part["low"], type_, where),
        high=None if "high" not in part else _restored(part["high"], type_, where),
        heavy=tuple(HeavyHitter(_restored(v, type_, where), int(n)) for v, n in part.get("heavy", ())),
        histogram=tuple(_restored(v, type_, where) for v in part.get("histogram", ())),
        width=None if width is None else float(width),
        largest_group=_count(part.get("largest_group"), "largest_group", where),
        exact=frozenset(part.get("exact", ())),
        declared=frozenset(part.get("declared", ())),
        evidence=_evidence(part.get("evidence", "declared"), where),
        source=str(part.get("source", "")),
        as_of=part.get("as_of"),
    )


def _restored(value: Any, type_: Type, where: str) -> Value:
    """A value in the Python type that the attribute's SQL type has."""
    try:
        if type_.family is Family.DECIMAL and not isinstance(value, bool):
            return Decimal(str(value))
        if type_.family is Family.FLOAT and isinstance(value, int) and not isinstance(value, bool):
            return float(value)
    except ArithmeticError:
        raise CatalogError(f"{where}: {value!r} is no {type_}") from None
    found: Value = value
    return found
