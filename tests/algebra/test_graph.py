"""Operator graphs: schemas, walking, rebuilding, copying, and what makes a graph illegal."""

from __future__ import annotations

import random

import pytest

from core.algebra.formulation import Formulation, IllegalFormulation, Output
from core.algebra.graph import (
    at,
    attributes,
    copied,
    dependent,
    exchanged,
    faults,
    free,
    inputs,
    parents,
    places,
    postorder,
    produced,
    read_here,
    rebuilt,
    replaced,
    replaced_at,
    scalars,
    with_inputs,
    with_scalars,
)
from core.algebra.notation import tree_text
from core.algebra.operators import (
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
    Values,
)
from core.algebra.scalars import TRUE, Attribute, Literal, Ref, SortKey, equal, fresh, fresh_key, fresh_like, renamed
from core.algebra.types import INTEGER, RELATION
from core.catalog.ddl import catalog_from_ddl
from core.language.sql.read import read_sql
from tests.generate.queries import SCHEMA, random_query

ONE = Literal("1", INTEGER)


def relation(name: str = "r", names: str = "ab") -> Relation:
    return Relation(name, tuple(fresh(n, INTEGER) for n in names))


def renaming(below: Operator) -> Project:
    return Project(below, tuple(Column(fresh_like(a), Ref(a)) for a in attributes(below)))


def shared_join() -> tuple[Join, Relation]:
    """One relation used twice: as it is, and renamed."""
    base = relation()
    other = renaming(base)
    condition = equal(Ref(base.attributes[0]), Ref(attributes(other)[0]))
    return Join(JoinKind.INNER, base, other, condition), base


def random_graphs(count: int) -> list[Operator]:
    catalog = catalog_from_ddl(SCHEMA)
    return [read_sql(random_query(seed)[0], catalog).root for seed in range(count)]


GRAPHS = random_graphs(60)


def test_schemas() -> None:
    r, s = relation("r", "ab"), relation("s", "cd")
    a, b = r.attributes
    c, d = s.attributes
    mark, whole = fresh("m", INTEGER), fresh("n", RELATION)
    on = equal(Ref(a), Ref(c))
    assert attributes(Join(JoinKind.INNER, r, s, on)) == (a, b, c, d)
    assert attributes(Join(JoinKind.SEMI, r, s, on)) == attributes(Join(JoinKind.ANTI, r, s, on)) == (a, b)
    assert attributes(Join(JoinKind.MARK, r, s, on, mark)) == (a, b, mark)
    assert attributes(Divide(r, s, ((b, c),))) == (a,)
    assert attributes(Nest(r, (a,), (b,), whole)) == (a, whole)
    assert attributes(Group(r, (b,), ())) == (b,)
    assert attributes(Sort(r, (SortKey(Ref(a)),))) == attributes(Limit(r, ONE)) == attributes(Distinct(r)) == (a, b)


def test_illegal_operators_cannot_be_made() -> None:
    r = relation()
    a, b = r.attributes
    with pytest.raises(ValueError, match="twice"):
        Relation("r", (a, a))
    with pytest.raises(ValueError, match="twice"):
        Project(r, (Column(a, Ref(a)), Column(a, Ref(b))))
    with pytest.raises(ValueError, match="mark"):
        Join(JoinKind.MARK, r, relation(), TRUE)
    with pytest.raises(ValueError, match="mark"):
        Join(JoinKind.INNER, r, relation(), TRUE, fresh("m", INTEGER))
    with pytest.raises(ValueError, match="2 values for 1"):
        Values((a,), ((ONE, ONE),))
    with pytest.raises(ValueError, match="intersect of 3"):
        SetOperation(SetKind.INTERSECT, (r, r, r), ((a, b),) * 3, (fresh("x", INTEGER), fresh("y", INTEGER)), True)
    with pytest.raises(ValueError, match="1 against 2"):
        SetOperation(SetKind.UNION, (r, r), ((a,), (a, b)), (fresh("x", INTEGER), fresh("y", INTEGER)), True)


def test_faults_are_named() -> None:
    r, s = relation("r", "ab"), relation("s", "cd")
    lost = fresh("lost", INTEGER)
    assert faults(Join(JoinKind.INNER, r, s, TRUE)) == []
    assert faults(Select(r, equal(Ref(lost), ONE))) == ["lost is read but nothing produces it"]
    assert faults(Join(JoinKind.INNER, r, r, TRUE)) == [
        "both sides of a join produce a",
        "both sides of a join produce b",
    ]
    union = SetOperation(
        SetKind.UNION,
        (r, s),
        (r.attributes, (lost, s.attributes[1])),
        (fresh("x", INTEGER), fresh("y", INTEGER)),
        False,
    )
    assert "an input of a setoperation lacks lost" in faults(union)
    with pytest.raises(IllegalFormulation, match="lost is read"):
        Formulation((Output("q", Select(r, equal(Ref(lost), ONE)), ((r.attributes[0], "a"),)),))
    with pytest.raises(IllegalFormulation, match="output q lacks c"):
        Formulation((Output("q", r, ((s.attributes[0], "c"),)),))
    with pytest.raises(IllegalFormulation, match="needs an output"):
        Formulation(())


def test_free_attributes_are_those_of_an_outer_row() -> None:
    r, s = relation("r", "ab"), relation("s", "cd")
    inner = Select(s, equal(Ref(s.attributes[0]), Ref(r.attributes[0])))
    join = Join(JoinKind.SEMI, r, inner, TRUE)
    assert free(inner) == {r.attributes[0]} == dependent(join)
    assert free(join) == frozenset()
    # A left input never sees the right one.
    assert free(Join(JoinKind.INNER, inner, r, TRUE)) == {r.attributes[0]}


@pytest.mark.parametrize("root", GRAPHS, ids=range(len(GRAPHS)))
def test_walking(root: Operator) -> None:
    order = postorder(root)
    position = {operator: i for i, operator in enumerate(order)}
    assert order[-1] is root
    assert len(position) == len(order)
    assert all(position[below] < position[operator] for operator in order for below in inputs(operator))
    seen = dict(places(root))
    assert seen[()] is root
    assert set(seen.values()) == set(order)
    assert all(at(root, place) is operator for place, operator in seen.items())
    readers = parents(root)
    assert sum(len(found) for found in readers.values()) == sum(len(inputs(operator)) for operator in order)
    assert readers[root] == []


@pytest.mark.parametrize("root", GRAPHS, ids=range(len(GRAPHS)))
def test_rebuilding(root: Operator) -> None:
    assert replaced(root, {}) is root
    roots, became = rebuilt((root, root), {})
    assert roots == (root, root)
    assert all(old is new for old, new in became.items())
    for operator in postorder(root):
        assert with_inputs(operator, inputs(operator)) is operator
        assert with_scalars(operator, lambda node: node) is operator
    leaf = next(o for o in postorder(root) if not inputs(o))
    marked = replaced(root, {leaf: Select(leaf, TRUE)})
    assert attributes(marked) == attributes(root)
    untouched = [o for o in postorder(root) if leaf not in postorder(o)]
    assert all(operator in postorder(marked) for operator in untouched)


@pytest.mark.parametrize("root", GRAPHS, ids=range(len(GRAPHS)))
def test_copying(root: Operator) -> None:
    copy, mapping = copied(root)
    assert faults(copy) == []
    made = {a for operator in postorder(root) for a in produced(operator)}
    new = {a for operator in postorder(copy) for a in produced(operator)}
    assert set(mapping) == made
    assert set(mapping.values()) == new
    assert not made & new
    assert len(postorder(copy)) == len(postorder(root))
    assert [a.name for a in attributes(copy)] == [a.name for a in attributes(root)]
    assert attributes(copy) == tuple(mapping[a] for a in attributes(root))
    assert tree_text(copy) == tree_text(root)
    back = exchanged(copy, {new: old for old, new in mapping.items()})
    assert tree_text(back, repr) == tree_text(root, repr)


@pytest.mark.parametrize("root", GRAPHS[:20], ids=range(20))
def test_what_an_operator_reads_is_there(root: Operator) -> None:
    for operator in postorder(root):
        below = {a for part in inputs(operator) for a in attributes(part)}
        assert read_here(operator) <= below | free(operator)
        for node in scalars(operator):
            assert renamed(node, {}) is node


def test_one_place_of_a_shared_operator() -> None:
    join, base = shared_join()
    only = Select(base, equal(Ref(base.attributes[0]), ONE))
    left = replaced_at(join, (0,), only)
    assert inputs(left)[0] is only
    assert at(left, (1, 0)) is base
    both = replaced(join, {base: only})
    assert inputs(both)[0] is only is at(both, (1, 0))
    assert parents(join)[base] == [inputs(join)[1], join]


def test_a_fixpoint_copied_keeps_its_own_recurrence() -> None:
    base, key = relation("e", "ab"), fresh_key()
    own = tuple(fresh(n, INTEGER) for n in "xy")
    step = Recurrence("reach", tuple(fresh(n, INTEGER) for n in "uv"), key)
    fix = Fixpoint(base, step, (base.attributes, step.attributes), own, key, True, "reach")
    copy, _ = copied(fix)
    assert isinstance(copy, Fixpoint) and isinstance(copy.step, Recurrence)
    assert copy.key == copy.step.key != key


def test_five_thousand_levels() -> None:
    base = relation()
    rng = random.Random(1)
    root: Operator = base
    for i in range(5000):
        match rng.randint(0, 3):
            case 0:
                root = Select(root, equal(Ref(attributes(root)[0]), Literal(str(i), INTEGER)))
            case 1:
                root = renaming(root)
            case 2:
                root = Distinct(root)
            case _:
                root = Limit(root, ONE)
    assert len(postorder(root)) == 5001
    assert sum(1 for _ in places(root)) == 5001
    assert len(attributes(root)) == 2
    assert free(root) == frozenset()
    assert faults(root) == []
    copy, _ = copied(root)
    assert len(postorder(copy)) == 5001
    swapped = replaced(root, {base: Select(base, TRUE)})
    assert len(postorder(swapped)) == 5002
    assert len(tree_text(root).splitlines()) == 5001


def test_a_graph_of_many_shared_parts_is_walked_once() -> None:
    root: Operator = relation()
    for _ in range(60):
        root = Join(JoinKind.INNER, root, renaming(root), TRUE) if len(attributes(root)) < 64 else _narrow(root)
    assert len(postorder(root)) < 300
    assert faults(root) == []
    assert len(postorder(copied(root)[0])) == len(postorder(root))


def _narrow(root: Operator) -> Project:
    kept: tuple[Attribute, ...] = attributes(root)[:2]
    return Project(root, tuple(Column(a, Ref(a)) for a in kept))
