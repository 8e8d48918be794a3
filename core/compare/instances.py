"""Small instances of the relations two formulations read: they obey every declared constraint, and are aimed at differences."""

from __future__ import annotations

import random
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any

from core.algebra.formulation import Formulation
from core.algebra.graph import scalars
from core.algebra.operators import Relation
from core.algebra.scalars import Call, Comparison, InList, Literal, Ref, walk
from core.algebra.types import INTEGER, TEXT, Family, Type
from core.catalog.model import AttributeFacts, Catalog, ForeignKey, RelationFacts, catalog_of
from core.size.values import literal_value

Data = dict[str, list[tuple[Any, ...]]]


def schema_of(formulations: Iterable[Formulation], catalog: Catalog) -> tuple[Catalog, list[str]]:
    """The relations that matter: those read, and those their foreign keys lead to. Notes say what had to be assumed."""
    notes: list[str] = []
    found: dict[str, RelationFacts] = {}
    pending: list[str] = []
    for formulation in formulations:
        for operator in formulation.operators():
            if not isinstance(operator, Relation):
                continue
            facts = catalog.relation(operator.name)
            if facts is not None:
                pending.append(facts.name)
                continue
            assumed = _inferred(operator, formulation)
            known = found.get(operator.name.lower())
            if known is not None:
                extra = tuple(a for a in assumed.attributes if known.attribute(a.name) is None)
                assumed = replace(known, attributes=known.attributes + extra)
            found[operator.name.lower()] = assumed
            note = f"the types of {operator.name}'s attributes are assumed: the catalog does not describe it"
            if note not in notes:
                notes.append(note)
    while pending:
        name = pending.pop()
        facts = catalog.relation(name)
        if facts is None or facts.name.lower() in found:
            continue
        found[facts.name.lower()] = facts
        pending.extend(key.relation for key in facts.foreign_keys)
    kept = catalog_of(found.values())
    # Foreign keys into relations that nobody describes cannot be checked.
    return catalog_of(
        replace(f, foreign_keys=tuple(k for k in f.foreign_keys if kept.relation(k.relation))) for f in kept
    ), notes


def _inferred(relation: Relation, formulation: Formulation) -> RelationFacts:
    texts = _compared_with_text(formulation)
    attributes = tuple(AttributeFacts(a.name, TEXT if a in texts else INTEGER) for a in relation.attributes)
    return RelationFacts(relation.name, attributes)


def _compared_with_text(formulation: Formulation) -> set[object]:
    found: set[object] = set()
    for operator in formulation.operators():
        for node in walk(*scalars(operator)):
            parts: Sequence[object] = ()
            if isinstance(node, Comparison):
                parts = (node.left, node.right)
            elif isinstance(node, InList):
                parts = (node.term, *node.items)
            elif isinstance(node, Call) and node.name in ("like", "ilike", "lower", "upper", "substring"):
                found.update(p.attribute for p in node.arguments if isinstance(p, Ref))
            if any(isinstance(p, Literal) and p.type == TEXT for p in parts):
                found.update(p.attribute for p in parts if isinstance(p, Ref))
    return found


class Pools:
    """Values worth trying, by kind: the constants of the texts with their neighbours, and a few plain ones."""

    def __init__(self, formulations: Iterable[Formulation]) -> None:
        self.numbers: list[Decimal] = []
        self.texts: list[str] = []
        self.days: list[date] = []
        for formulation in formulations:
            for operator in formulation.operators():
                for node in walk(*scalars(operator)):
                    if isinstance(node, Literal):
                        self._add(literal_value(node))
        self.numbers = _unique([Decimal(n) for n in (0, 1, 2)] + self.numbers)
        self.texts = _unique([*self.texts, "a", "b", ""])
        self.days = _unique([*self.days, date(2024, 1, 31), date(2024, 2, 1)])

    def _add(self, value: object) -> None:
        if isinstance(value, bool) or value is None:
            return
        if isinstance(value, (int, Decimal, float)):
            number = Decimal(str(value))
            if abs(number) < 10**9:
                self.numbers += [number, number - 1, number + 1]
        elif isinstance(value, str):
            self.texts += [value, *_likenesses(value), value + "a", *_next_text(value)]
        elif isinstance(value, date):
            day = value.date() if isinstance(value, datetime) else value
            self.days += [day, day - timedelta(days=1), day + timedelta(days=1)]

    def draw(self, rng: random.Random, type_: Type) -> Any:
        """A value of the type."""
        family = type_.family
        if family is Family.BOOLEAN:
            return rng.random() < 0.5
        if family is Family.INTEGER:
            return int(rng.choice(self.numbers))
        if family is Family.DECIMAL:
            return rng.choice(self.numbers)
        if family is Family.FLOAT:
            return float(rng.choice(self.numbers))
        if family is Family.DATE:
            return rng.choice(self.days)
        if family is Family.TIMESTAMP:
            return datetime.combine(rng.choice(self.days), time(rng.choice((0, 12))))
        if family is Family.TIME:
            return time(rng.choice((0, 12)))
        if family is Family.INTERVAL:
            return timedelta(days=rng.choice((0, 1)))
        return rng.choice(self.texts)

    def narrowed(self, rng: random.Random, most: int = 4) -> Pools:
        """A few of the values only, so that they meet."""
        few = object.__new__(Pools)
        few.numbers = rng.sample(self.numbers, min(most, len(self.numbers)))
        few.texts = rng.sample(self.texts, min(most, len(self.texts)))
        few.days = rng.sample(self.days, min(most, len(self.days)))
        return few


def _likenesses(pattern: str) -> list[str]:
    """Texts that match a LIKE pattern."""
    if "%" not in pattern and "_" not in pattern:
        return []
    return [pattern.replace("%", "").replace("_", "a"), pattern.replace("%", "b").replace("_", "b")]


def _next_text(value: str) -> list[str]:
    """A text that sorts after every text with this beginning."""
    stem = value.rstrip("%_")
    return [stem[:-1] + chr(ord(stem[-1]) + 1)] if stem and ord(stem[-1]) < 0x7E else []


def _unique(values: list[Any]) -> list[Any]:
    return list(dict.fromkeys(values))


def random_instance(rng: random.Random, order: Sequence[RelationFacts], pools: Pools, most: int) -> Data:
    """An instance with up to `most` rows a relation. `order` puts referenced relations first."""
    few = pools.narrowed(rng, rng.randint(1, 4))
    nulls = rng.choice((0.0, 0.15, 0.4))
    repeat = rng.choice((0.0, 0.3))
    others = {facts.name.lower(): facts for facts in order}
    data: Data = {}
    for facts in order:
        count = 0 if rng.random() < 0.08 else rng.randint(1, most)
        rows: list[tuple[Any, ...]] = []
        for _ in range(count):
            row = rng.choice(rows) if rows and rng.random() < repeat else _row(rng, facts, few, data, nulls, others)
            if row is not None and unique_in(facts, [*rows, row]):
                rows.append(row)
        data[facts.name.lower()] = rows
    return data


def _row(
    rng: random.Random,
    facts: RelationFacts,
    pools: Pools,
    data: Data,
    nulls: float,
    others: Mapping[str, RelationFacts],
) -> tuple[Any, ...] | None:
    values: dict[str, Any] = {}
    for attribute in facts.attributes:
        null = attribute.nullable and rng.random() < nulls
        values[attribute.name.lower()] = None if null else pools.draw(rng, attribute.type)
    for key in facts.foreign_keys:
        mine = [name.lower() for name in key.attributes]
        partners = _partners(key, data, others, values)
        fixed = [p for p in partners if all(values[m] == v for m, v in zip(mine, p, strict=True))]
        if any(values[m] is None for m in mine) or fixed:
            continue
        if partners:
            values.update(zip(mine, rng.choice(partners), strict=True))
        elif all(_nullable(facts, m) for m in mine):
            values.update(dict.fromkeys(mine))
        else:
            return None
    return tuple(values[a.name.lower()] for a in facts.attributes)


def _partners(
    key: ForeignKey, data: Data, others: Mapping[str, RelationFacts], values: dict[str, Any]
) -> list[tuple[Any, ...]]:
    """The values that a foreign key may take. A relation that refers to itself may refer to the row in the making."""
    rows = data.get(key.relation.lower())
    if rows is None:
        return [tuple(values.get(name.lower()) for name in key.target)]
    found = dict.fromkeys(projected(rows, others[key.relation.lower()], key.target))
    return [row for row in found if None not in row]


def projected(rows: Iterable[tuple[Any, ...]], facts: RelationFacts, names: tuple[str, ...]) -> list[tuple[Any, ...]]:
    """The values of some attributes, row by row."""
    places = {a.name.lower(): i for i, a in enumerate(facts.attributes)}
    return [tuple(row[places[name.lower()]] for name in names) for row in rows]


def _nullable(facts: RelationFacts, name: str) -> bool:
    found = facts.attribute(name)
    return found is None or found.nullable


def unique_in(facts: RelationFacts, rows: Sequence[tuple[Any, ...]]) -> bool:
    """Whether the rows obey the relation's keys (a unique key lets rows with a NULL repeat)."""
    places = {a.name.lower(): i for i, a in enumerate(facts.attributes)}
    for names in facts.keys:
        seen = set()
        for row in rows:
            value = tuple(row[places[name.lower()]] for name in names)
            if None in value:
                continue
            if value in seen:
                return False
            seen.add(value)
    return True


def obeys(order: Sequence[RelationFacts], data: Data) -> bool:
    """Whether an instance obeys keys, foreign keys and not-null (CHECKs are left to the engine)."""
    others = {facts.name.lower(): facts for facts in order}
    for facts in order:
        rows = data.get(facts.name.lower(), [])
        places = {a.name.lower(): i for i, a in enumerate(facts.attributes)}
        for i, attribute in enumerate(facts.attributes):
            if not attribute.nullable and any(row[i] is None for row in rows):
                return False
        if not unique_in(facts, rows):
            return False
        for key in facts.foreign_keys:
            partners = set(projected(data.get(key.relation.lower(), []), others[key.relation.lower()], key.target))
            for row in rows:
                value = tuple(row[places[name.lower()]] for name in key.attributes)
                if None not in value and value not in partners:
                    return False
    return True
