"""Random small data and random queries over it: NULLs, duplicates, empty relations, every construct the reader knows.

Everything comes from one seed, so that a failing case is reproduced by its number.
"""

from __future__ import annotations

import random
from dataclasses import dataclass, field
from typing import Any

SCHEMA = """
create table r (a integer not null primary key, b integer not null, c integer, d varchar);
create table s (e integer not null primary key, a integer references r (a), f integer, g varchar not null);
create table t (a integer, b integer, h integer);
create table u (a integer not null references r (a), e integer not null references s (e), k integer,
                primary key (a, e));
"""
COLUMNS = {
    "r": ["a", "b", "c", "d"],
    "s": ["e", "a", "f", "g"],
    "t": ["a", "b", "h"],
    "u": ["a", "e", "k"],
}
TEXTS = {"d", "g"}
Data = dict[str, list[tuple[Any, ...]]]


def random_data(rng: random.Random, most: int = 6) -> Data:
    """An instance that obeys the schema."""

    def small(nulls: float = 0.25) -> int | None:
        return None if rng.random() < nulls else rng.randint(0, 3)

    def text() -> str:
        return rng.choice(["x", "y", "xy", ""])

    def count() -> int:
        return 0 if rng.random() < 0.12 else rng.randint(1, most)

    keys = rng.sample(range(8), count())
    r = [(k, rng.randint(0, 3), small(), rng.choice([None, text()])) for k in keys]
    refs = [*keys, None]
    s = [(k, rng.choice(refs), small(), text()) for k in rng.sample(range(8), count())]
    t = [(small(), small(), small()) for _ in range(count())]
    t += [rng.choice(t) for _ in range(rng.randint(0, 2))] if t else []
    pairs = [(x[0], y[0]) for x in r for y in s]
    u = [(x, y, small()) for x, y in rng.sample(pairs, min(len(pairs), count()))]
    return {"r": r, "s": s, "t": t, "u": u}


@dataclass
class _Scope:
    """Columns in view: (text, is it a text column)."""

    columns: list[tuple[str, bool]] = field(default_factory=list)


class QueryMaker:
    """Makes query texts. `order` allows a final ORDER BY with LIMIT over all columns (so that ties do not matter)."""

    def __init__(self, rng: random.Random, depth: int = 2) -> None:
        self.rng = rng
        self.depth = depth
        self.number = 0
        self.steps: list[tuple[str, list[tuple[str, bool]]]] = []

    def chance(self, share: float) -> bool:
        return self.rng.random() < share

    def alias(self) -> str:
        self.number += 1
        return f"q{self.number}"

    def query(self) -> str:
        text, columns = self._with_steps()
        if self.chance(0.15):
            places = ", ".join(str(i + 1) + self.rng.choice(["", " desc", " nulls first"]) for i in range(len(columns)))
            text = f"select * from ({text}) {self.alias()} order by {places} limit {self.rng.randint(0, 4)}"
        return text

    def _with_steps(self) -> tuple[str, list[bool]]:
        texts = []
        if self.chance(0.25):
            for _ in range(self.rng.randint(1, 2)):
                body, kinds = self.select(self.depth - 1, None)
                name = f"w{len(self.steps)}"
                names = [f"{name}_{i}" for i in range(len(kinds))]
                texts.append(f"{name} ({', '.join(names)}) as ({body})")
                self.steps.append((name, list(zip(names, kinds, strict=True))))
        body, kinds = self.set_operation(self.depth, None)
        return (f"with {', '.join(texts)} " if texts else "") + body, kinds

    def set_operation(self, depth: int, outer: _Scope | None) -> tuple[str, list[bool]]:
        if depth > 0 and self.chance(0.2):
            left, kinds = self.select(depth - 1, outer)
            for _ in range(self.rng.randint(1, 2)):
                right, _ = self.select(depth - 1, outer, kinds)
                kind = self.rng.choice(["union", "union all", "intersect", "except", "intersect all", "except all"])
                left = f"({left}) {kind} ({right})"
            return left, kinds
        return self.select(depth, outer)

    def item(self, depth: int) -> tuple[str, list[tuple[str, bool]]]:
        alias = self.alias()
        if self.steps and self.chance(0.4):
            name, columns = self.rng.choice(self.steps)
            return f"{name} as {alias}", [(f"{alias}.{c}", text) for c, text in columns]
        if depth > 0 and self.chance(0.2):
            body, kinds = self.set_operation(depth - 1, None)
            names = [f"z{i}" for i in range(len(kinds))]
            return f"({body}) as {alias} ({', '.join(names)})", [
                (f"{alias}.{n}", text) for n, text in zip(names, kinds, strict=True)
            ]
        name = self.rng.choice(list(COLUMNS))
        return f"{name} as {alias}", [(f"{alias}.{c}", c in TEXTS) for c in COLUMNS[name]]

    def source(self, depth: int, outer: _Scope | None) -> tuple[str, _Scope]:
        text, columns = self.item(depth)
        for _ in range(self.rng.choice([0, 0, 1, 1, 2])):
            other, more = self.item(depth)
            kind = self.rng.choice(
                ["join", "join", "left join", "right join", "full join", ",", "semi join", "anti join"]
            )
            if kind == ",":
                text, columns = f"{text} cross join {other}", columns + more
                continue
            scope = _Scope(columns + more)
            on = self._equality(columns, more)
            if self.chance(0.25) and kind != "full join":
                on += " and " + self.condition(scope, 0, None)
            text = f"{text} {kind} {other} on {on}"
            columns = columns if kind in ("semi join", "anti join") else columns + more
        return text, _Scope(columns)

    def _equality(self, left: list[tuple[str, bool]], right: list[tuple[str, bool]]) -> str:
        numbers = [[c for c, text in side if not text] for side in (left, right)]
        texts = [[c for c, text in side if text] for side in (left, right)]
        chosen = texts if all(texts) and (self.chance(0.15) or not all(numbers)) else numbers
        if not all(chosen):
            return "true"
        return f"{self.rng.choice(chosen[0])} = {self.rng.choice(chosen[1])}"

    def number_term(self, scope: _Scope, depth: int = 0) -> str:
        numbers = [c for c, text in scope.columns if not text]
        roll = self.rng.random()
        if not numbers or roll < 0.15:
            return str(self.rng.randint(0, 3))
        column = self.rng.choice(numbers)
        if roll < 0.7:
            return column
        if roll < 0.8:
            return f"{column} {self.rng.choice(['+', '-', '*'])} {self.number_term(scope)}"
        if roll < 0.87:
            return f"coalesce({column}, {self.rng.randint(0, 3)})"
        if roll < 0.94:
            return f"case when {self.condition(scope, 0, None)} then {column} else {self.number_term(scope)} end"
        return f"-{column}"

    def text_term(self, scope: _Scope) -> str:
        texts = [c for c, text in scope.columns if text]
        if not texts or self.chance(0.2):
            return self.rng.choice(["'x'", "'y'", "''"])
        column = self.rng.choice(texts)
        return self.rng.choice([column, column, f"upper({column})", f"{column} || 'x'"])

    def condition(self, scope: _Scope, depth: int, outer: _Scope | None) -> str:
        roll = self.rng.random()
        if depth > 0 and roll < 0.25:
            return self.subquery_condition(scope, depth - 1)
        if roll < 0.5:
            sign = self.rng.choice(["=", "<>", "<", "<=", ">", ">=", "is distinct from", "is not distinct from"])
            return f"{self.number_term(scope)} {sign} {self.number_term(scope)}"
        if roll < 0.58:
            return f"{self.number_term(scope)} is {self.rng.choice(['', 'not '])}null"
        if roll < 0.65:
            items = ", ".join(self.rng.choice(["0", "1", "2", "3", "null"]) for _ in range(self.rng.randint(1, 3)))
            return f"{self.number_term(scope)} {self.rng.choice(['', 'not '])}in ({items})"
        if roll < 0.71:
            return f"{self.number_term(scope)} between {self.rng.randint(0, 2)} and {self.rng.randint(1, 3)}"
        if roll < 0.77:
            return (
                f"{self.text_term(scope)} {self.rng.choice(['=', '<', 'like'])} {self.rng.choice(['x', '%y', 'x_'])!r}"
            )
        if roll < 0.9:
            joiner = self.rng.choice(["and", "or"])
            return f"({self.condition(scope, depth, outer)} {joiner} {self.condition(scope, depth, outer)})"
        return f"not ({self.condition(scope, depth, outer)})"

    def subquery_condition(self, scope: _Scope, depth: int) -> str:
        inner_outer = scope if self.chance(0.6) else None
        body, _ = self.select(depth, inner_outer, [False])
        roll = self.rng.random()
        negated = self.rng.choice(["", "not "])
        if roll < 0.4:
            return f"{negated}exists ({body})"
        if roll < 0.75:
            return f"{self.number_term(scope)} {negated}in ({body})"
        if roll < 0.85:
            sign, which = self.rng.choice(["=", "<", ">="]), self.rng.choice(["any", "all"])
            return f"{self.number_term(scope)} {sign} {which} ({body})"
        return f"{self.number_term(scope)} {self.rng.choice(['=', '<', '>'])} {self.scalar(scope, depth)}"

    def scalar(self, scope: _Scope, depth: int) -> str:
        """A scalar subquery, aggregated so that it gives one row."""
        source, inner = self.source(0, scope)
        where = self._correlated(inner, scope)
        call = self.aggregate(inner)
        return f"(select {call} from {source}{where})"

    def _correlated(self, inner: _Scope, outer: _Scope) -> str:
        if self.chance(0.7):
            return f" where {self._equality(inner.columns, outer.columns)}"
        return f" where {self.condition(_Scope(inner.columns + outer.columns), 0, None)}"

    def aggregate(self, scope: _Scope) -> str:
        roll = self.rng.random()
        if roll < 0.25:
            return "count(*)"
        name = self.rng.choice(["sum", "min", "max", "count", "count"])
        distinct = "distinct " if self.chance(0.2) else ""
        text = f"{name}({distinct}{self.number_term(scope)})"
        return f"{text} filter (where {self.condition(scope, 0, None)})" if self.chance(0.12) else text

    def select(self, depth: int, outer: _Scope | None, kinds: list[bool] | None = None) -> tuple[str, list[bool]]:
        source, scope = self.source(depth, outer)
        visible = _Scope(scope.columns + (outer.columns if outer is not None else []))
        where = f" where {self.condition(visible, depth, outer)}" if self.chance(0.6) else ""
        if outer is not None and self.chance(0.7):
            extra = self._equality(scope.columns, outer.columns)
            where = f"{where} and {extra}" if where else f" where {extra}"
        wanted = kinds if kinds is not None else [self.chance(0.2) for _ in range(self.rng.randint(1, 3))]
        if self.chance(0.3):
            return self._grouped(source, where, scope, wanted, depth)
        items = []
        for i, text in enumerate(wanted):
            if text:
                items.append(f"{self.text_term(scope)} as c{i}")
            elif depth > 0 and self.chance(0.12):
                items.append(f"{self.scalar(scope, depth - 1)} as c{i}")
            elif self.chance(0.1):
                items.append(f"{self._window(scope)} as c{i}")
            else:
                items.append(f"{self.number_term(scope)} as c{i}")
        distinct = "distinct " if self.chance(0.15) else ""
        return f"select {distinct}{', '.join(items)} from {source}{where}", wanted

    def _window(self, scope: _Scope) -> str:
        call = self.rng.choice(
            ["count(*)", "rank()", f"sum({self.number_term(scope)})", f"max({self.number_term(scope)})"]
        )
        by = f"partition by {self.number_term(scope)} " if self.chance(0.6) else ""
        numbers = [c for c, text in scope.columns if not text]
        order = f"order by {self.rng.choice(numbers)}" if numbers and (call == "rank()" or self.chance(0.5)) else ""
        if call == "rank()" and not order:
            call = "count(*)"
        return f"{call} over ({by}{order})"

    def _grouped(
        self, source: str, where: str, scope: _Scope, wanted: list[bool], depth: int
    ) -> tuple[str, list[bool]]:
        numbers = [c for c, text in scope.columns if not text]
        texts = [c for c, text in scope.columns if text]
        keys = self.rng.sample(numbers, min(len(numbers), self.rng.randint(0, 2)))
        if any(wanted) and texts:
            keys.append(self.rng.choice(texts))
        expression = f"{self.rng.choice(numbers)} + 1" if numbers and self.chance(0.15) else ""
        items = []
        for i, text in enumerate(wanted):
            if text:
                mine = [k for k in keys if k in texts]
                items.append(f"{mine[0] if mine else 'max(' + repr('x') + ')'} as c{i}")
            elif keys and keys[0] in numbers and self.chance(0.4):
                items.append(f"{keys[0]} as c{i}")
            elif expression and self.chance(0.5):
                items.append(f"{expression} as c{i}")
            else:
                items.append(f"{self.aggregate(scope)} as c{i}")
        grouped = [*keys, *([expression] if expression else [])]
        by = f" group by {', '.join(grouped)}" if grouped else ""
        having = f" having {self.aggregate(scope)} >= {self.rng.randint(0, 2)}" if self.chance(0.2) else ""
        return f"select {', '.join(items)} from {source}{where}{by}{having}", wanted


def random_query(seed: int, depth: int = 2) -> tuple[str, Data]:
    """The query text and the data of a seed."""
    rng = random.Random(seed)
    return QueryMaker(rng, depth).query(), random_data(rng)
