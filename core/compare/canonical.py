"""A canonical text of a query: two queries with the same text mean the same, whatever names and orders they were written in.

Selections, projections, inner joins, semi- and anti-joins are gathered into blocks: a multiset of inputs and a set of
conditions. Inputs that look alike are tried in every order and the smallest text is kept, so that the text does not
depend on the order of writing (isomorphism of conjunctive queries under bags: Chaudhuri, Vardi, PODS 1993).
"""

from __future__ import annotations

import hashlib
import itertools
from collections.abc import Sequence
from dataclasses import dataclass, field

from core.algebra.functions import volatile
from core.algebra.graph import attributes, dependent, free, scalars
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
    TRUE,
    And,
    Attribute,
    Comparison,
    ComparisonOperator,
    Node,
    Not,
    Or,
    Ref,
    Scalar,
    conjuncts,
)
from core.algebra.types import Family
from core.compare.terms import Label, bounded_texts, term_text

_MOST_ORDERS = 720


class NoForm(Exception):
    """A query that has no canonical text here; the message says why. Nothing is claimed of it."""


@dataclass(slots=True)
class Leaf:
    """An input of a block that is no block itself: its own text, and what its attributes are called inside."""

    key: str
    labels: dict[Attribute, str]


@dataclass(slots=True)
class Filter:
    """A semi- or anti-join of a block, or a mark or single join that defines an attribute."""

    kind: JoinKind
    right: Operator
    condition: Scalar
    shown: Attribute | None = None


@dataclass(slots=True)
class Cluster:
    leaves: list[Leaf] = field(default_factory=list)
    conditions: list[Scalar] = field(default_factory=list)
    filters: list[Filter] = field(default_factory=list)
    definitions: dict[Attribute, Scalar | Filter] = field(default_factory=dict)


def digest(text: str) -> str:
    return hashlib.sha1(text.encode()).hexdigest()[:20]


def _no_outer(attribute: Attribute) -> str:
    raise NoForm(f"{attribute.name} is read from outside")


def canonical(root: Operator, columns: Sequence[Attribute]) -> str:
    """The canonical text of a bag of rows with these columns in this order. Raises `NoForm`."""
    text, labels = _finished(root, [Ref(a) for a in columns], _no_outer)
    return f"{text} -> {', '.join(labels)}"


def part_key(operator: Operator) -> str | None:
    """A short key that two operators share only if they give the same rows with the same attributes (by position-free labels)."""
    if free(operator):
        return None
    try:
        text, labels = _finished(operator, [Ref(a) for a in attributes(operator)], _no_outer)
    except NoForm:
        return None
    return digest(f"{text} -> {', '.join(sorted(labels))}")


def _finished(operator: Operator, extras: list[Node], outer: Label) -> tuple[str, list[str]]:
    """The text of a block with what its consumer reads of it, in the order of inputs that makes all of it smallest."""

    def further_out(attribute: Attribute) -> str:
        # A name from outside may look like one of this block; the sign tells them apart at any depth.
        return "^" + outer(attribute)

    cluster = _cluster(operator, further_out)
    best: tuple[str, list[str]] | None = None
    for order in _orders(cluster, further_out):
        found = _written(cluster, order, extras, further_out)
        if best is None or (found[0], found[1]) < (best[0], best[1]):
            best = found
    assert best is not None
    return best


def _written(cluster: Cluster, order: Sequence[int], extras: list[Node], outer: Label) -> tuple[str, list[str]]:
    place = {leaf: tag for tag, leaf in enumerate(order)}
    names = {
        attribute: f"{place[i]}.{label}"
        for i, leaf in enumerate(cluster.leaves)
        for attribute, label in leaf.labels.items()
    }
    label, classes = _labels(cluster, names, outer)
    others = [c for c in cluster.conditions if not _equates(c)]
    conditions = sorted({*classes, *bounded_texts(others, label)})
    filters = sorted({_filter_text(f, label) for f in cluster.filters})
    keys = [cluster.leaves[i].key for i in order]
    text = f"block({' '.join(keys)} | {' & '.join(conditions)} | {' & '.join(filters)})"
    return text, [term_text(extra, label) for extra in extras]


def _equates(condition: Scalar) -> bool:
    """Whether a condition equates two attributes of one type, so that one may stand for the other."""
    match condition:
        case Comparison(operator=ComparisonOperator.EQUAL, left=Ref(attribute=a), right=Ref(attribute=b)):
            return a.type == b.type and a.type.family in _ONE_VALUE
    return False


_ONE_VALUE = frozenset(
    {
        Family.BOOLEAN,
        Family.INTEGER,
        Family.DECIMAL,
        Family.TEXT,
        Family.DATE,
        Family.TIME,
        Family.TIMESTAMP,
        Family.UNKNOWN,
    }
)
"""Families where equal values cannot be told apart. Others can: -0.0 = 0.0, and 30 days = 1 month, have other texts."""


def _labels(cluster: Cluster, names: dict[Attribute, str], outer: Label) -> tuple[Label, list[str]]:
    """What attributes are called inside a block: equated ones by the smallest name of their class; and the classes."""

    def plain(attribute: Attribute) -> str:
        if attribute in names:
            return names[attribute]
        definition = cluster.definitions.get(attribute)
        if isinstance(definition, Filter):
            return _filter_text(definition, plain)
        if definition is not None:
            return term_text(definition, plain)
        return outer(attribute)

    classes: dict[str, str] = {}

    def root(name: str) -> str:
        while classes.get(name, name) != name:
            name = classes[name]
        return name

    members: set[str] = set()
    for condition in cluster.conditions:
        if _equates(condition):
            assert isinstance(condition, Comparison)
            one, other = sorted(root(plain(a)) for a in _pair(condition))
            classes[other] = one
            members.update(plain(a) for a in _pair(condition))
    # A class of one is `a = a`: it says that a is not NULL.
    by_root: dict[str, list[str]] = {}
    for name in sorted(members):
        by_root.setdefault(root(name), []).append(name)
    written = [f"same({', '.join(group)})" for group in by_root.values()]
    return (lambda attribute: root(plain(attribute))), written


def _pair(condition: Comparison) -> tuple[Attribute, Attribute]:
    left, right = condition.left, condition.right
    assert isinstance(left, Ref) and isinstance(right, Ref)
    return left.attribute, right.attribute


def _filter_text(part: Filter, label: Label) -> str:
    inner = Select(part.right, part.condition) if part.condition != TRUE else part.right
    if part.kind in (JoinKind.SEMI, JoinKind.ANTI):
        text, _ = _finished(_without_columns(inner), [], label)
        return f"{part.kind.value}[{text}]"
    if part.kind is JoinKind.MARK:
        # The condition of a mark join is three-valued, so it is kept apart from the conditions of the right side.
        text, (condition,) = _finished(part.right, [part.condition], label)
        return f"mark[{text} : {condition}]"
    assert part.shown is not None
    text, (shown,) = _finished(inner, [Ref(part.shown)], label)
    return f"the[{text} : {shown}]"


def _without_columns(operator: Operator) -> Operator:
    while isinstance(operator, (Project, Sort, Distinct)):
        operator = operator.input
    return operator


def _orders(cluster: Cluster, outer: Label) -> list[tuple[int, ...]]:
    """The orders of inputs worth trying: inputs that look different have one order among themselves."""
    count = len(cluster.leaves)
    looks = []
    for i in range(count):
        names = {
            attribute: f"{'*' if j == i else leaf.key}.{label}"
            for j, leaf in enumerate(cluster.leaves)
            for attribute, label in leaf.labels.items()
        }
        label = _plain_labels(cluster, names, outer)
        looks.append((cluster.leaves[i].key, " & ".join(sorted(term_text(c, label) for c in cluster.conditions))))
    by_look: dict[tuple[str, str], list[int]] = {}
    for i in sorted(range(count), key=lambda i: looks[i]):
        by_look.setdefault(looks[i], []).append(i)
    groups = list(by_look.values())
    total = 1
    for group in groups:
        for k in range(2, len(group) + 1):
            total *= k
    if total > _MOST_ORDERS:
        return [tuple(i for group in groups for i in group)]
    choices = itertools.product(*(itertools.permutations(group) for group in groups))
    return [tuple(itertools.chain.from_iterable(choice)) for choice in choices]


def _plain_labels(cluster: Cluster, names: dict[Attribute, str], outer: Label) -> Label:
    def plain(attribute: Attribute) -> str:
        if attribute in names:
            return names[attribute]
        definition = cluster.definitions.get(attribute)
        if isinstance(definition, Filter):
            return f"{definition.kind.value}"
        if definition is not None:
            return term_text(definition, plain)
        return outer(attribute)

    return plain


# --- gathering -----------------------------------------------------------------------------------------------------


def _cluster(operator: Operator, outer: Label) -> Cluster:
    """The block on top of a graph: everything down to the first operators that are no part of it."""
    found = Cluster()
    pending: list[Operator] = [operator]
    while pending:
        current = pending.pop()
        if volatile(*scalars(current)):
            raise NoForm("a function differs from call to call")
        match current:
            case Select(input=below, condition=condition):
                found.conditions.extend(_terms(condition))
                pending.append(below)
            case Project(input=below, columns=columns):
                for column in columns:
                    if column.value != Ref(column.attribute):
                        found.definitions[column.attribute] = column.value
                pending.append(below)
            case Sort(input=below):
                pending.append(below)
            case Join(kind=JoinKind.INNER, left=left, right=right, condition=condition):
                found.conditions.extend(_terms(condition))
                pending.extend((left, right))
            case Join(kind=JoinKind.SEMI | JoinKind.ANTI, left=left, right=right, condition=condition):
                found.filters.append(Filter(current.kind, right, condition))
                pending.append(left)
            case Join(kind=JoinKind.MARK, left=left, right=right, condition=condition, mark=mark):
                assert mark is not None
                found.definitions[mark] = Filter(JoinKind.MARK, right, condition)
                pending.append(left)
            case Join(kind=JoinKind.SINGLE, left=left, right=right, condition=condition):
                for attribute in attributes(right):
                    found.definitions[attribute] = Filter(JoinKind.SINGLE, right, condition, attribute)
                pending.append(left)
            case Values(attributes=(), rows=((),)):
                pass
            case _:
                found.leaves.append(_leaf(current, outer))
    produced = [a for leaf in found.leaves for a in leaf.labels]
    if len(set(produced)) != len(produced):
        raise NoForm("one shared part is read twice without a renaming")
    return found


def _terms(condition: Scalar) -> list[Scalar]:
    """The terms of a conjunction, a negated disjunction seen as one (De Morgan holds in three-valued logic)."""
    found: list[Scalar] = []
    pending = list(reversed(conjuncts(condition)))
    while pending:
        term = pending.pop()
        if isinstance(term, Not) and isinstance(term.term, Or):
            pending.extend(Not(part) for part in reversed(term.term.terms))
        elif isinstance(term, And):
            pending.extend(reversed(term.terms))
        else:
            found.append(term)
    return found


def _leaf(operator: Operator, outer: Label) -> Leaf:
    match operator:
        case Relation(name=name, attributes=own):
            return Leaf(f"relation:{name.lower()}", {a: a.name.lower() for a in own})
        case Values(attributes=own, rows=rows):
            listed = sorted("(" + ", ".join(term_text(v, outer) for v in row) + ")" for row in rows)
            return Leaf(digest(f"values {listed}"), {a: f"v{i}" for i, a in enumerate(own)})
        case TableFunction(call=call, attributes=own):
            return Leaf(digest(f"function {term_text(call, outer)}"), {a: f"f{i}" for i, a in enumerate(own)})
        case Group():
            return _group(operator, outer)
        case Distinct(input=below):
            return _distinct(below, attributes(operator), outer)
        case SetOperation():
            return _set_operation(operator, outer)
        case Join():
            return _outer_join(operator, outer)
        case Window():
            return _window(operator, outer)
        case Limit():
            return _limit(operator, outer)
        case Unnest(input=below, term=term, attributes=own, position=position, keep_empty=keep):
            kept = list(attributes(below))
            whole, found = _finished(below, [term, *(Ref(a) for a in kept)], outer)
            names = dict(zip(kept, found[1:], strict=True))
            names.update({a: f"element{i}" for i, a in enumerate(own)})
            if position is not None:
                names[position] = "position"
            return Leaf(digest(f"unnest {keep} {found[0]} of {whole}"), names)
        case Divide() | Nest() | Fixpoint() | Recurrence():
            raise NoForm(f"a {type(operator).__name__.lower()} has no canonical text yet")
        case _:
            raise NoForm(f"a {type(operator).__name__.lower()} has no canonical text")


def _group(operator: Group, outer: Label) -> Leaf:
    calls = [c.aggregate for c in operator.aggregates]
    text, labels = _finished(operator.input, [*(Ref(k) for k in operator.keys), *calls], outer)
    keys, values = labels[: len(operator.keys)], labels[len(operator.keys) :]
    if not calls and operator.sets is None and operator.keys:
        return _distinct(operator.input, operator.keys, outer)
    names = dict(zip(operator.keys, keys, strict=True))
    names.update({c.attribute: value for c, value in zip(operator.aggregates, values, strict=True)})
    sets = ""
    if operator.sets is not None:
        by_key = dict(zip(operator.keys, keys, strict=True))
        if len(set(keys)) != len(keys):
            raise NoForm("grouping sets over keys that are equal")
        sets = str(sorted(str(sorted(by_key[k] for k in part)) for part in operator.sets))
    head = f"group by {sorted(set(keys))} {sets}" if operator.keys or operator.sets is not None else "one group"
    return Leaf(digest(f"{head} of {text}"), names)


def _distinct(below: Operator, columns: Sequence[Attribute], outer: Label) -> Leaf:
    text, labels = _finished(below, [Ref(a) for a in columns], outer)
    return Leaf(digest(f"group by {sorted(set(labels))}  of {text}"), dict(zip(columns, labels, strict=True)))


def _set_operation(operator: SetOperation, outer: Label) -> Leaf:
    parts = []
    for part, source in zip(operator.inputs, operator.sources, strict=True):
        text, labels = _finished(part, [Ref(a) for a in source], outer)
        parts.append(f"{text} -> {', '.join(labels)}")
    if operator.kind is not SetKind.EXCEPT:
        parts.sort()
    key = digest(f"{operator.kind.value} {operator.distinct} {' ; '.join(parts)}")
    return Leaf(key, {a: f"u{i}" for i, a in enumerate(operator.attributes)})


def _outer_join(operator: Join, outer: Label) -> Leaf:
    kind, left, right = operator.kind, operator.left, operator.right
    if dependent(operator):
        raise NoForm("a lateral outer join")
    if kind is JoinKind.RIGHT:
        kind, left, right = JoinKind.LEFT, right, left
    sides = []
    for side in (left, right):
        own = list(attributes(side))
        text, labels = _finished(side, [Ref(a) for a in own], outer)
        sides.append((text, dict(zip(own, labels, strict=True))))

    def named(order: tuple[int, int]) -> tuple[str, dict[Attribute, str]]:
        names = {a: f"{tag}({label})" for tag, i in zip("lr", order, strict=True) for a, label in sides[i][1].items()}

        def label(attribute: Attribute) -> str:
            return names[attribute] if attribute in names else outer(attribute)

        terms = sorted({term_text(t, label) for t in conjuncts(operator.condition)})
        return f"{kind.value} {sides[order[0]][0]} ; {sides[order[1]][0]} on {' & '.join(terms)}", names

    forms = [named((0, 1))]
    if kind is JoinKind.FULL:
        forms.append(named((1, 0)))
    best, called = min(forms, key=lambda form: form[0])
    return Leaf(digest(best), called)


def _window(operator: Window, outer: Label) -> Leaf:
    kept = list(attributes(operator.input))
    calls = [c.call for c in operator.columns]
    text, labels = _finished(operator.input, [*(Ref(a) for a in kept), *calls], outer)
    names = dict(zip(kept, labels[: len(kept)], strict=True))
    names.update({c.attribute: label for c, label in zip(operator.columns, labels[len(kept) :], strict=True)})
    return Leaf(digest(f"window over {text}"), names)


def _limit(operator: Limit, outer: Label) -> Leaf:
    below = operator.input
    kept = list(attributes(operator))
    keys: tuple[Node, ...] = ()
    while isinstance(below, (Project, Select)):
        below = below.input
    if isinstance(below, Sort):
        keys = below.keys
    text, labels = _finished(operator.input, [*(Ref(a) for a in kept), *keys], outer)
    bound = " ".join("-" if s is None else term_text(s, outer) for s in (operator.count, operator.offset))
    order = ", ".join(labels[len(kept) :])
    return Leaf(
        digest(f"limit {bound} {operator.with_ties} by {order} of {text}"), dict(zip(kept, labels, strict=False))
    )
