"""Random legal operator graphs: not only the shapes a reader makes, but whatever rewrites might leave behind.

A graph comes from any `random.Random`: a seeded one, or one that hypothesis drives and shrinks.
"""

from __future__ import annotations

from collections.abc import Sequence
from random import Random

from core.algebra.graph import attributes, postorder
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
    SetKind,
    SetOperation,
    Sort,
    TableFunction,
    Unnest,
    Values,
    Window,
    WindowColumn,
)
from core.algebra.scalars import (
    FALSE,
    TRUE,
    Aggregate,
    And,
    Arithmetic,
    ArithmeticOperator,
    Attribute,
    Call,
    Case,
    Cast,
    Comparison,
    ComparisonOperator,
    Frame,
    InList,
    IsNull,
    IsTruth,
    Literal,
    Negative,
    Not,
    Or,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    conjunction,
    equal,
    fresh,
    fresh_key,
    fresh_like,
)
from core.algebra.types import BIGINT, BOOLEAN, INTEGER, RELATION, TEXT, Family, Type, type_named

RELATIONS: dict[str, tuple[tuple[str, Type], ...]] = {
    "r": (("a", INTEGER), ("b", INTEGER), ("d", TEXT)),
    "s": (("a", INTEGER), ("e", INTEGER), ("g", TEXT)),
    "t": (("a", INTEGER), ("b", INTEGER), ("order", INTEGER)),
}
SCHEMA = """
create table r (a integer, b integer, d varchar);
create table s (a integer, e integer, g varchar);
create table t (a integer, b integer, "order" integer);
"""
WORDS = ("r", "S", "late", "order", "two words", "part", "q", "Élan")
LIST = type_named("INTEGER[]")
Rows = list[tuple[object, ...]]


def random_instance(rng: Random) -> dict[str, Rows]:
    """Rows for every relation: NULLs, duplicates, sometimes none."""

    def cell(type_: Type) -> object:
        if rng.random() < 0.25:
            return None
        return rng.choice(["x", "y", ""]) if type_ is TEXT else rng.randint(0, 3)

    data: dict[str, Rows] = {}
    for name, columns in RELATIONS.items():
        rows: Rows = [
            tuple(cell(t) for _, t in columns) for _ in range(0 if rng.random() < 0.12 else rng.randint(1, 5))
        ]
        data[name] = rows + [rng.choice(rows) for _ in range(rng.randint(0, 2))] if rows else []
    return data


def numbers_of(given: Sequence[Attribute]) -> list[Attribute]:
    return [a for a in given if a.type.family is Family.INTEGER]


def texts_of(given: Sequence[Attribute]) -> list[Attribute]:
    return [a for a in given if a.type.family is Family.TEXT]


def truths_of(given: Sequence[Attribute]) -> list[Attribute]:
    return [a for a in given if a.type.family is Family.BOOLEAN]


def plain_of(given: Sequence[Attribute]) -> list[Attribute]:
    return [a for a in given if a.type.family is not Family.NESTED]


def number(n: int) -> Literal:
    return Literal(str(n), INTEGER)


class GraphMaker:
    """Grows one graph. `names` and `aliases` are handed to the writer beside it."""

    def __init__(self, rng: Random) -> None:
        self.rng = rng
        self.shared: list[Operator] = []
        self.recurring: list[Recurrence] = []
        self.names: dict[Operator, str] = {}
        self.aliases: dict[Operator, str] = {}

    def chance(self, share: float) -> bool:
        return self.rng.random() < share

    def graph(self, depth: int) -> Operator:
        root = self.grow(depth, ())
        for operator in postorder(root):
            if self.chance(0.12):
                self.names[operator] = self.rng.choice(WORDS)
            if self.chance(0.12):
                self.aliases[operator] = self.rng.choice(WORDS)
        return root

    # --- scalars ---------------------------------------------------------------------------------------------------

    def term(self, given: Sequence[Attribute], depth: int = 1) -> Scalar:
        """A number."""
        numbers = numbers_of(given)
        roll = self.rng.random()
        if not numbers or roll < 0.12:
            return Literal(None, INTEGER) if self.chance(0.1) else number(self.rng.randint(-1, 3))
        if roll < 0.65 or depth <= 0:
            return Ref(self.rng.choice(numbers))
        if roll < 0.8:
            operator = self.rng.choice([ArithmeticOperator.ADD, ArithmeticOperator.SUBTRACT])
            return Arithmetic(operator, self.term(given, depth - 1), self.term(given, depth - 1), INTEGER)
        if roll < 0.84:
            return Arithmetic(ArithmeticOperator.MULTIPLY, self.term(given, depth - 1), number(2), INTEGER)
        if roll < 0.89:
            return Negative(self.term(given, depth - 1))
        if roll < 0.94:
            return Call("coalesce", (self.term(given, depth - 1), number(self.rng.randint(0, 3))), INTEGER)
        branches = tuple(
            (self.condition(given, depth - 1), self.term(given, depth - 1)) for _ in range(self.rng.randint(1, 2))
        )
        return Case(branches, self.term(given, depth - 1))

    def text(self, given: Sequence[Attribute]) -> Scalar:
        texts = texts_of(given)
        roll = self.rng.random()
        if texts and roll < 0.7:
            return Ref(self.rng.choice(texts))
        if texts and roll < 0.8:
            return Arithmetic(ArithmeticOperator.CONCATENATE, Ref(self.rng.choice(texts)), Literal("it's", TEXT), TEXT)
        if numbers_of(given) and roll < 0.87:
            return Cast(self.term(given), TEXT)
        return Literal(self.rng.choice(["x", "y", "", "'"]), TEXT)

    def condition(self, given: Sequence[Attribute], depth: int = 2) -> Scalar:
        roll = self.rng.random()
        truths = truths_of(given)
        if truths and self.chance(0.35):
            return Ref(self.rng.choice(truths))
        if depth <= 0 or roll < 0.45:
            operator = self.rng.choice(list(ComparisonOperator))
            if self.chance(0.2):
                return Comparison(operator, self.text(given), self.text(given))
            return Comparison(operator, self.term(given), self.term(given))
        if roll < 0.53:
            return IsNull(self.rng.choice([self.term, self.condition])(given, depth - 1))
        if roll < 0.6:
            items = tuple(
                self.rng.choice([number(self.rng.randint(0, 3)), self.term(given), Literal(None, INTEGER)])
                for _ in range(self.rng.randint(1, 3))
            )
            return InList(self.term(given), items)
        if roll < 0.67:
            return IsTruth(self.condition(given, depth - 1), self.chance(0.5))
        if roll < 0.73:
            low, term = self.term(given), self.term(given)
            between = (
                Comparison(ComparisonOperator.AT_LEAST, term, low),
                Comparison(ComparisonOperator.AT_MOST, term, number(self.rng.randint(0, 3))),
            )
            return conjunction(between)
        if roll < 0.85:
            return Not(self.condition(given, depth - 1))
        if roll < 0.87:
            return self.rng.choice([TRUE, FALSE, Literal(None, BOOLEAN)])
        terms = tuple(self.condition(given, depth - 1) for _ in range(self.rng.randint(2, 3)))
        return self.rng.choice([And, Or])(terms)

    def link(self, left: Sequence[Attribute], right: Sequence[Attribute]) -> Scalar:
        """A condition that joins two sides, mostly an equality."""
        mine, theirs = numbers_of(left), numbers_of(right)
        if not mine or not theirs or self.chance(0.15):
            return self.condition([*left, *right])
        found: Scalar = equal(Ref(self.rng.choice(mine)), Ref(self.rng.choice(theirs)))
        if self.chance(0.15):
            found = Not(IsTruth(found, False))
        return conjunction([found, self.condition([*left, *right], 1)]) if self.chance(0.2) else found

    # --- operators -------------------------------------------------------------------------------------------------

    def grow(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        """An operator; with `outer`, one that may read these attributes of a row around it."""
        operator = self._grown(depth, outer)
        if outer and self.chance(0.6):
            operator = Select(operator, self.link(attributes(operator), outer))
        elif not outer and self.chance(0.3):
            self.shared.append(operator)
        return operator

    def _grown(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        if self.shared and self.chance(0.12):
            return self.again(self.rng.choice(self.shared))
        if depth <= 0:
            return self.leaf(outer)
        makers = [
            (self.select, 14),
            (self.project, 16),
            (self.join, 30),
            (self.group, 12),
            (self.distinct, 5),
            (self.window, 7),
            (self.limit, 5),
            (self.set_operation, 10),
            (self.divide, 3),
            (self.nested, 4),
            (self.unnest, 4),
            (self.fixpoint, 2 if not outer and not self.recurring else 0),
        ]
        chosen = self.rng.choices([maker for maker, _ in makers], [weight for _, weight in makers])[0]
        return chosen(depth - 1, outer)

    def again(self, operator: Operator) -> Operator:
        """Another use of a result, with attributes of its own."""
        return Project(operator, tuple(Column(fresh_like(a), Ref(a)) for a in attributes(operator)))

    def leaf(self, outer: Sequence[Attribute]) -> Operator:
        roll = self.rng.random()
        if self.recurring and roll < 0.4:
            return self.recurring[-1]
        if roll < 0.08:
            own = tuple(fresh(name, INTEGER) for name in self.rng.sample(["x", "y", "a"], self.rng.randint(1, 2)))
            rows = tuple(
                tuple(number(self.rng.randint(0, 3)) if self.chance(0.8) else Literal(None, INTEGER) for _ in own)
                for _ in range(self.rng.randint(0, 3))
            )
            return Values(own, rows)
        if roll < 0.12:
            first = number(self.rng.randint(0, 4))
            return TableFunction(Call("generate_series", (first, number(3)), BIGINT), (fresh("n", BIGINT),))
        if roll < 0.18:
            given = Values((), ((),))
            return Project(
                given, (Column(fresh("one", INTEGER), self.term(outer)), Column(fresh("d", TEXT), self.text(outer)))
            )
        name = self.rng.choice(list(RELATIONS))
        alias = self.rng.choice(WORDS) if self.chance(0.2) else ""
        return Relation(name, tuple(fresh(column, type_) for column, type_ in RELATIONS[name]), alias)

    def select(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        below = self.grow(depth, outer)
        return Select(below, self.condition([*attributes(below), *outer]))

    def project(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        return self.projected(self.grow(depth, outer), outer)

    def projected(self, below: Operator, outer: Sequence[Attribute]) -> Operator:
        own = attributes(below)
        visible = [*own, *outer]
        columns = [Column(a, Ref(a)) for a in own if self.chance(0.6)]
        for _ in range(self.rng.randint(0 if columns else 1, 2)):
            name = self.rng.choice([*(a.name for a in own), "v", "Total", "select"])
            roll = self.rng.random()
            if roll < 0.25 and own:
                source = self.rng.choice(own)
                columns.append(Column(fresh(name, source.type), Ref(source)))
            elif roll < 0.7:
                columns.append(Column(fresh(name, INTEGER), self.term(visible)))
            elif roll < 0.85:
                columns.append(Column(fresh(name, TEXT), self.text(visible)))
            else:
                columns.append(Column(fresh(name, BOOLEAN), self.condition(visible, 1)))
        self.rng.shuffle(columns)
        return Project(below, tuple(columns))

    def distinct(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        return Distinct(self.without_lists(self.grow(depth, outer)))

    def without_lists(self, below: Operator) -> Operator:
        """Less its nested attributes, whose order of elements no engine promises."""
        own = attributes(below)
        if len(plain_of(own)) == len(own):
            return below
        kept = plain_of(own)
        columns = [Column(a, Ref(a)) for a in kept] or [Column(fresh("one", INTEGER), number(1))]
        return Project(below, tuple(columns))

    def join(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        kind = self.rng.choice(
            [JoinKind.INNER] * 3 + [JoinKind.LEFT] * 2 + [kind for kind in JoinKind if kind is not JoinKind.INNER]
        )
        if kind in (JoinKind.RIGHT, JoinKind.FULL):
            # No engine takes a correlated input of these.
            outer = ()
        left = self.grow(depth - self.rng.randint(0, 1), outer)
        around: list[Attribute] = list(outer)
        if kind not in (JoinKind.RIGHT, JoinKind.FULL) and self.chance(0.25 if kind is not JoinKind.SINGLE else 0.7):
            around += plain_of(attributes(left))
        right = self.grow(depth - self.rng.randint(0, 2), around)
        if kind is JoinKind.SINGLE and self.chance(0.8):
            right = self.one_row(right, around)
        own, theirs = attributes(left), attributes(right)
        condition = TRUE if self.chance(0.2) or kind is JoinKind.SINGLE else self.link(own, theirs)
        if outer and condition != TRUE and self.chance(0.15):
            condition = conjunction([condition, self.condition([*theirs, *outer], 1)])
        return Join(kind, left, right, condition, fresh("mark", BOOLEAN) if kind is JoinKind.MARK else None)

    def one_row(self, below: Operator, outer: Sequence[Attribute]) -> Operator:
        aggregates = tuple(
            AggregateColumn(fresh("value", BIGINT), self.aggregate(attributes(below)))
            for _ in range(self.rng.choice([1, 1, 2]))
        )
        found: Operator = Group(below, (), aggregates)
        return self.projected(found, outer) if self.chance(0.3) else found

    def aggregate(self, given: Sequence[Attribute]) -> Aggregate:
        condition = self.condition(given, 1) if self.chance(0.15) else None
        if self.chance(0.25):
            return Aggregate("count", (), BIGINT, condition=condition)
        name = self.rng.choice(["count", "sum", "min", "max"])
        argument = self.term(given)
        return Aggregate(name, (argument,), BIGINT, distinct=self.chance(0.2), condition=condition)

    def group(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        below = self.grow(depth, outer)
        own = plain_of(attributes(below))
        keys = tuple(self.rng.sample(own, min(len(own), self.rng.choice([0, 1, 1, 2, 3]))))
        sets = None
        if keys and self.chance(0.2):
            sets = tuple(tuple(key for key in keys if self.chance(0.5)) for _ in range(self.rng.randint(1, 3)))
        columns = [
            AggregateColumn(fresh(self.rng.choice(["n", "total", "a"]), BIGINT), self.aggregate(attributes(below)))
            for _ in range(self.rng.randint(0 if keys and sets is None else 1, 2))
        ]
        return Group(below, keys, tuple(columns), sets)

    def window(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        below = self.grow(depth, outer)
        given = attributes(below)
        columns = tuple(
            WindowColumn(fresh(self.rng.choice(["place", "running"]), BIGINT), self.window_call(given))
            for _ in range(self.rng.randint(1, 2))
        )
        found: Operator = Window(below, columns)
        if self.chance(0.4):
            found = Select(found, Comparison(ComparisonOperator.AT_MOST, Ref(columns[0].attribute), number(2)))
        return found

    def window_call(self, given: Sequence[Attribute]) -> WindowCall:
        partition = tuple(self.term(given) for _ in range(self.rng.randint(0, 1)))
        order = tuple(
            SortKey(self.term(given), self.chance(0.5), self.chance(0.5)) for _ in range(self.rng.randint(0, 2))
        )
        if order and self.chance(0.5):
            return WindowCall(Aggregate(self.rng.choice(["rank", "dense_rank"]), (), BIGINT), partition, order)
        whole = Frame("rows", (None, "preceding"), (None, "following")) if self.chance(0.2) else None
        call = self.aggregate(given)
        plain = Aggregate(call.name, call.arguments, BIGINT)
        return WindowCall(plain, partition, order, whole)

    def limit(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        below = self.without_lists(self.grow(depth, outer))
        own = list(attributes(below))
        self.rng.shuffle(own)
        ties = self.chance(0.2)
        keys = [SortKey(Ref(a), self.chance(0.5), self.chance(0.5)) for a in own]
        if ties:
            keys = [SortKey(self.term(own), self.chance(0.5), self.chance(0.5))]
        sorted_: Operator = Sort(below, tuple(keys))
        if not ties and self.chance(0.15):
            sorted_ = self.projected(sorted_, ())
        count = number(self.rng.randint(0, 3)) if ties or self.chance(0.9) else None
        offset = number(self.rng.randint(0, 2)) if not ties and (count is None or self.chance(0.3)) else None
        return Limit(sorted_, count, offset, ties)

    def set_operation(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        kind = self.rng.choice(list(SetKind))
        parts = [self.grow(depth - 1, outer) for _ in range(self.rng.choice([2, 2, 3]) if kind is SetKind.UNION else 2)]
        first = plain_of(attributes(parts[0]))
        if not first:
            return Distinct(self.without_lists(parts[0]))
        shape = [self.rng.choice(first) for _ in range(self.rng.randint(1, 3))]
        sources = [tuple(shape)]
        for i, part in enumerate(parts[1:], 1):
            columns: list[Attribute] = []
            added: list[Column] = []
            for a in shape:
                like = [b for b in attributes(part) if b.type.family is a.type.family]
                if like:
                    columns.append(self.rng.choice(like))
                else:
                    extra = fresh("extra", a.type)
                    literal = {Family.TEXT: Literal("x", TEXT), Family.BOOLEAN: TRUE}.get(a.type.family, number(1))
                    added.append(Column(extra, literal))
                    columns.append(extra)
            if added:
                parts[i] = Project(part, (*(Column(a, Ref(a)) for a in attributes(part)), *added))
            sources.append(tuple(columns))
        own = tuple(fresh_like(a) for a in shape)
        return SetOperation(kind, tuple(parts), tuple(sources), own, self.chance(0.5))

    def divide(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        dividend = self.without_lists(self.grow(depth - 1, outer))
        divisor = self.without_lists(self.grow(depth - 1, outer))
        mine, theirs = numbers_of(attributes(dividend)), numbers_of(attributes(divisor))
        if not mine or not theirs or len(attributes(dividend)) < 2:
            return dividend
        return Divide(dividend, divisor, ((self.rng.choice(mine), self.rng.choice(theirs)),))

    def nested(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        """A nesting, mostly opened again."""
        below = self.without_lists(self.grow(depth - 1, outer))
        own = attributes(below)
        if len(own) < 2:
            return below
        split = self.rng.randint(0, len(own) - 1)
        bag = fresh("bag", RELATION)
        found: Operator = Nest(below, own[:split], own[split:], bag)
        if self.chance(0.3):
            found = Project(found, tuple(Column(fresh_like(a), Ref(a)) for a in attributes(found)))
            bag = attributes(found)[-1]
        if self.chance(0.8):
            found = Unnest(found, Ref(bag), tuple(fresh_like(a) for a in own[split:]), keep_empty=self.chance(0.3))
        return found

    def unnest(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        below = self.grow(depth, outer)
        given = [*attributes(below), *outer]
        items = Call("list_value", tuple(self.term(given) for _ in range(self.rng.randint(1, 2))), LIST)
        several: Scalar = items
        if self.chance(0.3):
            several = Case(((self.condition(given, 1), items),), Literal(None, LIST))
        position = fresh("place", BIGINT) if self.chance(0.3) else None
        return Unnest(below, several, (fresh("item", INTEGER),), position, self.chance(0.3))

    def fixpoint(self, depth: int, outer: Sequence[Attribute]) -> Operator:
        """Paths along pairs of small numbers; the ones that count their length end by it."""
        key, distinct = fresh_key(), self.chance(0.6)
        base = self.pairs(depth - 1)
        recurrence = Recurrence("reach", (fresh("a", INTEGER), fresh("b", INTEGER), fresh("n", INTEGER)), key)
        start = Project(base, (*(Column(a, Ref(a)) for a in attributes(base)), Column(fresh("n", INTEGER), number(0))))
        links = self.pairs(depth - 1)
        condition = equal(Ref(recurrence.attributes[1]), Ref(attributes(links)[0]))
        joined = Join(JoinKind.INNER, recurrence, links, condition)
        kept = Select(joined, Comparison(ComparisonOperator.LESS, Ref(recurrence.attributes[2]), number(2)))
        longer = fresh("n", INTEGER)
        step = Project(
            kept,
            (
                Column(longer, Arithmetic(ArithmeticOperator.ADD, Ref(recurrence.attributes[2]), number(1), INTEGER)),
                Column(recurrence.attributes[0], Ref(recurrence.attributes[0])),
                Column(attributes(links)[1], Ref(attributes(links)[1])),
            ),
        )
        sources = (attributes(start), (recurrence.attributes[0], attributes(links)[1], longer))
        own = tuple(fresh_like(a) for a in recurrence.attributes)
        return Fixpoint(start, step, sources, own, key, distinct, self.rng.choice(["reach", "", "r"]))

    def pairs(self, depth: int) -> Operator:
        below = self.grow(min(depth, 1), ())
        columns = tuple(Column(fresh(name, INTEGER), Cast(self.term(attributes(below), 0), INTEGER)) for name in "ab")
        return Project(below, columns)
