"""What holds for every row an operator can give, on every data set that obeys the declared constraints.

Keys are meant for bags and with NULLs as equal: no two rows agree on a key. In a correlated part the outer attributes
are constants, so its facts hold for each outer row. Dependencies: Klug, Price, TODS 7(3) 1982; keys through outer joins:
Paulley, Larson, ICDE 1994.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from weakref import WeakKeyDictionary

from core.algebra.functions import NEVER_NULL, volatile
from core.algebra.graph import attributes, inputs
from core.algebra.operators import (
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
)
from core.algebra.scalars import (
    Aggregate,
    Attribute,
    Comparison,
    ComparisonOperator,
    InList,
    Literal,
    Ref,
    Scalar,
    WindowCall,
    conjuncts,
    refs,
)
from core.algebra.typing import type_of
from core.catalog.model import Catalog
from core.derive.comparing import decides, one_value
from core.derive.reject import can_be_null, rejects_null_each

Key = frozenset[Attribute]
Dependency = tuple[Key, Key]
_MOST_KEYS = 12


@dataclass(frozen=True, slots=True)
class Properties:
    """Facts about an operator's rows.

    `keys`: sets of attributes on which no two rows agree (the empty set: at most one row). `never_null`: attributes that
    are not NULL. `dependencies`: (X, Y) where rows that agree on X agree on Y. `same`: classes of attributes that are
    not distinct from each other in any row. `constants`: attributes with one value in all rows.
    """

    keys: frozenset[Key] = frozenset()
    never_null: Key = frozenset()
    dependencies: frozenset[Dependency] = frozenset()
    same: tuple[Key, ...] = ()
    constants: Key = frozenset()
    exactly_one: bool = False


class Facts:
    """Derived properties under one catalog, memoised by operator identity."""

    def __init__(self, catalog: Catalog) -> None:
        self.catalog = catalog
        self._known: WeakKeyDictionary[Operator, Properties] = WeakKeyDictionary()

    def of(self, operator: Operator) -> Properties:
        """The properties of an operator; inputs first, without recursion."""
        known = self._known.get(operator)
        if known is not None:
            return known
        pending: list[tuple[Operator, bool]] = [(operator, False)]
        while pending:
            current, ready = pending.pop()
            if current in self._known:
                continue
            if ready:
                self._known[current] = self._derive(current)
            else:
                pending.append((current, True))
                pending.extend((below, False) for below in inputs(current))
        return self._known[operator]

    def keys(self, operator: Operator) -> frozenset[Key]:
        return self.of(operator).keys

    def never_null(self, operator: Operator) -> Key:
        return self.of(operator).never_null

    def is_key(self, operator: Operator, candidate: Iterable[Attribute]) -> bool:
        """Whether no two rows agree on these attributes."""
        found = self.of(operator)
        reach = closure(candidate, found)
        return any(key <= reach for key in found.keys)

    def determined(self, operator: Operator, given: Iterable[Attribute]) -> Key:
        """The attributes that have one value among rows that agree on the given ones."""
        found = self.of(operator)
        reach = closure(given, found)
        return frozenset(attributes(operator)) if any(key <= reach for key in found.keys) else reach

    # --- by operator -------------------------------------------------------------------------------------------------

    def _derive(self, operator: Operator) -> Properties:
        match operator:
            case Relation():
                return self._relation(operator)
            case Values(rows=rows):
                one = len(rows) <= 1
                return Properties(frozenset({frozenset()}) if one else frozenset(), exactly_one=len(rows) == 1)
            case TableFunction() | Recurrence():
                return Properties()
            case Select():
                return self._select(operator)
            case Project():
                return self._project(operator)
            case Join():
                return self._join(operator)
            case SetOperation():
                return self._set_operation(operator)
            case Fixpoint(distinct=distinct, attributes=own):
                return Properties(frozenset({frozenset(own)}) if distinct else frozenset())
            case Divide():
                return Properties(frozenset({frozenset(attributes(operator))}))
            case Distinct(input=below):
                found = self.of(below)
                everything = frozenset(attributes(operator))
                return _replaced(found, keys=_minimal({*found.keys, everything}, found))
            case Group():
                return self._group(operator)
            case Nest(keys=keys):
                return Properties(frozenset({frozenset(keys)}))
            case Unnest():
                return self._unnest(operator)
            case Window():
                return self._window(operator)
            case Sort(input=below):
                return self.of(below)
            case Limit(input=below, count=count, with_ties=ties):
                found = self.of(below)
                single = isinstance(count, Literal) and count.text in ("0", "1") and not ties
                few: frozenset[Key] = frozenset({frozenset()})
                return _replaced(found, keys=few if single else found.keys, exactly_one=False)

    def _relation(self, operator: Relation) -> Properties:
        facts = self.catalog.relation(operator.name)
        if facts is None:
            return Properties()
        by_name = {a.name.lower(): a for a in operator.attributes}
        never_null = frozenset(
            by_name[a.name.lower()] for a in facts.attributes if not a.nullable and a.name.lower() in by_name
        )
        keys = set()
        for names in facts.keys:
            key = frozenset(by_name[n.lower()] for n in names if n.lower() in by_name)
            if len(key) == len(names) and key <= never_null:
                keys.add(key)
        everything = frozenset(operator.attributes)
        dependencies = frozenset((key, everything) for key in keys)
        return Properties(frozenset(keys), never_null, dependencies)

    def _select(self, operator: Select) -> Properties:
        found = self.of(operator.input)
        found = _restricted(found, operator.condition, frozenset(attributes(operator.input)))
        return _replaced(found, exactly_one=False)

    def _project(self, operator: Project) -> Properties:
        found = self.of(operator.input)
        moved: dict[Attribute, list[Attribute]] = {}
        never_null, constants = set(), set()
        extra: list[Dependency] = []
        for column in operator.columns:
            if isinstance(column.value, Ref):
                moved.setdefault(column.value.attribute, []).append(column.attribute)
            if not can_be_null(column.value, found.never_null):
                never_null.add(column.attribute)
            read = refs(column.value)
            if volatile(column.value):
                continue
            if read <= closure((), found):
                constants.add(column.attribute)
            elif not isinstance(column.value, Ref):
                extra.append((read, frozenset({column.attribute})))
        names = {a: targets[0] for a, targets in moved.items()}
        renamed_keys = {k for key in found.keys if (k := _moved(key, names, found)) is not None}
        # Dependencies of computed columns hold over the input's attributes; those kept are translated.
        dependencies = set()
        for left, right in (*found.dependencies, *extra):
            new_left = _moved(left, names, found)
            if new_left is not None:
                new_right = frozenset(t for a in right for t in moved.get(a, ())) | (
                    right & frozenset(c.attribute for c in operator.columns)
                )
                dependencies.add((new_left, new_right))
        same = [frozenset(targets) for targets in moved.values() if len(targets) > 1]
        same += [frozenset(t for a in group for t in moved.get(a, ())) for group in found.same]
        result = Properties(
            frozenset(renamed_keys),
            frozenset(never_null),
            frozenset(dependencies),
            _merged(same),
            frozenset(constants),
            found.exactly_one,
        )
        return _replaced(result, keys=_minimal(result.keys, result))

    def _join(self, operator: Join) -> Properties:
        left, right = self.of(operator.left), self.of(operator.right)
        kind = operator.kind
        if kind in (JoinKind.SEMI, JoinKind.ANTI):
            if kind is JoinKind.ANTI:
                return _replaced(left, exactly_one=False)
            shown = frozenset(attributes(operator.left))
            proven = rejects_null_each(operator.condition, left.never_null) & shown
            return _replaced(left, never_null=left.never_null | proven, exactly_one=False)
        if kind is JoinKind.MARK:
            assert operator.mark is not None
            sure = not can_be_null(operator.condition, left.never_null | right.never_null)
            never_null = left.never_null | ({operator.mark} if sure else set())
            return _replaced(left, never_null=frozenset(never_null))
        if kind is JoinKind.INNER:
            return self._inner(operator, left, right)
        if kind in (JoinKind.LEFT, JoinKind.SINGLE):
            return self._outer(operator, left, right, operator.left, operator.right)
        if kind is JoinKind.RIGHT:
            return self._outer(operator, right, left, operator.right, operator.left)
        return self._full(operator, left, right)

    def _inner(self, operator: Join, left: Properties, right: Properties) -> Properties:
        both = Properties(
            frozenset(),
            left.never_null | right.never_null,
            left.dependencies | right.dependencies,
            _merged((*left.same, *right.same)),
            left.constants | right.constants,
        )
        own = frozenset(attributes(operator))
        joined = _restricted(both, operator.condition, own)
        keys: set[Key] = set()
        for mine in left.keys:
            if any(other <= closure(mine, joined) for other in right.keys):
                keys.add(mine)
        for mine in right.keys:
            if any(other <= closure(mine, joined) for other in left.keys):
                keys.add(mine)
        if not keys:
            keys = {a | b for a in left.keys for b in right.keys}
        return _replaced(joined, keys=_minimal(keys, joined))

    def _outer(
        self, operator: Join, kept: Properties, padded: Properties, kept_side: Operator, padded_side: Operator
    ) -> Properties:
        """A join that keeps one side whole and pads the other with NULLs."""
        single = operator.kind is JoinKind.SINGLE or self._at_most_one(operator.condition, kept_side, padded_side)
        if single:
            keys = set(kept.keys)
        else:
            keys = {a | b for a in kept.keys for b in padded.keys if b & padded.never_null or not b}
        never_null = kept.never_null
        if operator.kind is JoinKind.SINGLE and padded.exactly_one:
            never_null = never_null | padded.never_null
        kept_dependencies = {d for d in padded.dependencies if d[0] & padded.never_null}
        found = Properties(
            frozenset(),
            never_null,
            kept.dependencies | frozenset(kept_dependencies),
            _merged((*kept.same, *padded.same)),
            kept.constants,
            kept.exactly_one and single,
        )
        return _replaced(found, keys=_minimal(keys, found))

    def _at_most_one(self, condition: Scalar, kept_side: Operator, other_side: Operator) -> bool:
        """Whether, for one row of the kept side, the condition is true for at most one row of the other."""
        other = frozenset(attributes(other_side))
        found = self.of(other_side)
        fixed = set(closure((), found))
        for term in conjuncts(condition):
            match term:
                case Comparison(operator=ComparisonOperator.EQUAL, left=a, right=b):
                    for mine, theirs in ((a, b), (b, a)):
                        if isinstance(mine, Ref) and mine.attribute in other and not refs(theirs) & other:
                            if decides(type_of(theirs), mine.attribute.type) and not volatile(theirs):
                                fixed.add(mine.attribute)
        reach = closure(fixed, found)
        return any(key <= reach for key in found.keys)

    def _full(self, operator: Join, left: Properties, right: Properties) -> Properties:
        keys = {a | b for a in left.keys for b in right.keys if a & left.never_null and b & right.never_null}
        dependencies = {d for side in (left, right) for d in side.dependencies if d[0] & side.never_null}
        return Properties(frozenset(keys), frozenset(), frozenset(dependencies), _merged((*left.same, *right.same)))

    def _set_operation(self, operator: SetOperation) -> Properties:
        parts = [self.of(part) for part in operator.inputs]
        sure = [
            frozenset(mine for mine, a in zip(operator.attributes, source, strict=True) if a in part.never_null)
            for part, source in zip(parts, operator.sources, strict=True)
        ]
        pairs = zip(operator.sources[0], operator.attributes, strict=True)
        # A column that is cast to the common type may lose what told its values apart.
        names = {source: mine for source, mine in pairs if decides(mine.type, source.type)}
        keys: set[Key] = {frozenset(operator.attributes)} if operator.distinct else set()
        if operator.kind is SetKind.UNION:
            never_null = frozenset.intersection(*sure)
        else:
            never_null = sure[0] | sure[1] if operator.kind is SetKind.INTERSECT else sure[0]
            keys |= {k for key in parts[0].keys if (k := _moved(key, names, parts[0])) is not None}
        result = Properties(never_null=never_null)
        return _replaced(result, keys=_minimal(keys, result))

    def _group(self, operator: Group) -> Properties:
        found = self.of(operator.input)
        counted = {c.attribute for c in operator.aggregates if self._never_null_aggregate(c.aggregate, operator, found)}
        if operator.sets is not None:
            everywhere = (
                frozenset.intersection(*(frozenset(part) for part in operator.sets)) if operator.sets else frozenset()
            )
            return Properties(never_null=(found.never_null & everywhere) | counted)
        keys = frozenset(operator.keys)
        own = frozenset(attributes(operator))
        dependencies = {(left, right & own) for left, right in found.dependencies if left <= keys}
        dependencies.add((keys, own))
        same = tuple(group & keys for group in found.same)
        result = Properties(
            frozenset(),
            (found.never_null & keys) | counted,
            frozenset(dependencies),
            _merged(same),
            found.constants & keys,
            not operator.keys,
        )
        inherited = {key for key in found.keys if key <= keys}
        return _replaced(result, keys=_minimal({keys, *inherited}, result))

    def _never_null_aggregate(self, call: Aggregate, operator: Group, found: Properties) -> bool:
        if call.name in NEVER_NULL:
            return True
        full = bool(operator.keys) and call.condition is None and operator.sets is None
        return (
            full and call.name in ("sum", "avg", "min", "max") and not can_be_null(call.arguments[0], found.never_null)
        )

    def _unnest(self, operator: Unnest) -> Properties:
        found = self.of(operator.input)
        keys: set[Key] = set()
        if operator.position is not None:
            keys = {key | {operator.position} for key in found.keys}
        never_null = found.never_null
        if operator.position is not None and not operator.keep_empty:
            never_null = never_null | {operator.position}
        return _replaced(found, keys=frozenset(keys), never_null=never_null, exactly_one=False)

    def _window(self, operator: Window) -> Properties:
        found = self.of(operator.input)
        never_null, keys = set(found.never_null), set(found.keys)
        for column in operator.columns:
            call = column.call
            if call.function.name in NEVER_NULL or self._over_itself(call, found):
                never_null.add(column.attribute)
            if call.function.name == "row_number" and all(isinstance(p, Ref) for p in call.partition):
                keys.add(refs(*call.partition) | {column.attribute})
        result = _replaced(found, never_null=frozenset(never_null))
        return _replaced(result, keys=_minimal(keys, result))

    def _over_itself(self, call: WindowCall, found: Properties) -> bool:
        """Whether the function sees at least the row's own value, and that is not NULL: the default frame holds it."""
        function = call.function
        plain = call.frame is None and function.condition is None and function.name in ("sum", "avg", "min", "max")
        return plain and not can_be_null(function.arguments[0], found.never_null)


def _replaced(
    found: Properties,
    *,
    keys: frozenset[Key] | None = None,
    never_null: Key | None = None,
    exactly_one: bool | None = None,
) -> Properties:
    return Properties(
        found.keys if keys is None else keys,
        found.never_null if never_null is None else never_null,
        found.dependencies,
        found.same,
        found.constants,
        found.exactly_one if exactly_one is None else exactly_one,
    )


def _restricted(found: Properties, condition: Scalar, own: Key) -> Properties:
    """The facts after keeping the rows for which the condition is true."""
    same, constants, decided = list(found.same), set(found.constants), set(found.dependencies)
    for left, right in _equations(condition):
        if isinstance(left, Ref) and isinstance(right, Ref) and {left.attribute, right.attribute} <= own:
            a, b = left.attribute, right.attribute
            if a.type.family is b.type.family and one_value(a.type, b.type):
                same.append(frozenset({a, b}))
                continue
            decided |= {(frozenset({x}), frozenset({y})) for x, y in ((a, b), (b, a)) if decides(x.type, y.type)}
            continue
        for side, other in ((left, right), (right, left)):
            if isinstance(side, Ref) and side.attribute in own and not refs(other) & own and not volatile(other):
                if decides(type_of(other), side.attribute.type):
                    constants.add(side.attribute)
    never_null = found.never_null | (rejects_null_each(condition, found.never_null) & own)
    result = Properties(found.keys, never_null, frozenset(decided), _merged(same), frozenset(constants))
    return _replaced(result, keys=_minimal(result.keys, result))


def _equations(condition: Scalar) -> Iterator[tuple[Scalar, Scalar]]:
    """The pairs of scalars that are not distinct wherever the condition is true."""
    for term in conjuncts(condition):
        match term:
            case Comparison(
                operator=ComparisonOperator.EQUAL | ComparisonOperator.NOT_DISTINCT, left=left, right=right
            ):
                yield left, right
            case InList(term=left, items=(right,)):
                yield left, right
            case _:
                pass


def closure(given: Iterable[Attribute], found: Properties) -> Key:
    """The attributes that the given ones determine, constants included (Armstrong 1974)."""
    reach = set(given) | found.constants
    growing = True
    while growing:
        growing = False
        for group in found.same:
            if reach & group and not group <= reach:
                reach |= group
                growing = True
        for left, right in found.dependencies:
            if left <= reach and not right <= reach:
                reach |= right
                growing = True
    return frozenset(reach)


def _minimal(keys: Iterable[Key], found: Properties) -> frozenset[Key]:
    """Keys without attributes that the rest determines, and without keys that contain another; the smallest few."""
    reduced: set[Key] = set()
    for key in sorted(keys, key=lambda k: (len(k), sorted(a.id for a in k)))[: 4 * _MOST_KEYS]:
        kept = set(key)
        for attribute in sorted(key, key=lambda a: -a.id):
            if attribute in closure(kept - {attribute}, found):
                kept.discard(attribute)
        reduced.add(frozenset(kept))
    smallest = [key for key in reduced if not any(other < key for other in reduced)]
    return frozenset(sorted(smallest, key=lambda k: (len(k), sorted(a.id for a in k)))[:_MOST_KEYS])


def _merged(groups: Iterable[Key]) -> tuple[Key, ...]:
    """Classes of at least two, overlapping ones made one."""
    found: list[set[Attribute]] = []
    for group in groups:
        if len(group) < 2:
            continue
        joined = set(group)
        rest = []
        for other in found:
            if other & joined:
                joined |= other
            else:
                rest.append(other)
        found = [*rest, joined]
    return tuple(sorted((frozenset(group) for group in found), key=lambda g: min(a.id for a in g)))


def _moved(key: Key, names: Mapping[Attribute, Attribute], found: Properties) -> Key | None:
    """A key under new names; an attribute that is dropped may be replaced by one that is the same, or is a constant."""
    moved = set()
    for attribute in key:
        if attribute in names:
            moved.add(names[attribute])
            continue
        if attribute in found.constants:
            continue
        group = next((g for g in found.same if attribute in g), frozenset())
        stand_in = next((names[a] for a in sorted(group) if a in names), None)
        if stand_in is None:
            return None
        moved.add(stand_in)
    return frozenset(moved)
