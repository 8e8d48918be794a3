"""Scalars: equality by structure, rebuilding, and the three truth-valued joiners; none of it recurses."""

from __future__ import annotations

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from core.algebra.functions import duplicate_insensitive, order_sensitive, volatile
from core.algebra.notation import scalar_text
from core.algebra.scalars import (
    FALSE,
    MIRRORED,
    NEGATED,
    NULL_LITERAL,
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
    Node,
    Not,
    Or,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    conjunction,
    conjuncts,
    disjunction,
    disjuncts,
    equal,
    fresh,
    fresh_like,
    parts,
    refs,
    renamed,
    substitute,
    transform,
    walk,
    with_parts,
)
from core.algebra.types import BIGINT, BOOLEAN, DECIMAL, INTEGER, TEXT

A, B, C = (fresh(name, INTEGER) for name in "abc")
ONE, TWO = Literal("1", INTEGER), Literal("2", INTEGER)


def sums(depth: int, last: Scalar = ONE) -> Scalar:
    term = last
    for _ in range(depth):
        term = Arithmetic(ArithmeticOperator.ADD, term, Ref(A), INTEGER)
    return term


LEAVES: st.SearchStrategy[Scalar] = st.sampled_from([Ref(A), Ref(B), Ref(C), ONE, TWO, TRUE, FALSE, NULL_LITERAL])


def _nodes(inner: st.SearchStrategy[Scalar]) -> st.SearchStrategy[Scalar]:
    several = st.lists(inner, min_size=1, max_size=3).map(tuple)
    return st.one_of(
        st.builds(Comparison, st.sampled_from(ComparisonOperator), inner, inner),
        st.builds(And, several),
        st.builds(Or, several),
        st.builds(Not, inner),
        st.builds(IsNull, inner),
        st.builds(IsTruth, inner, st.booleans()),
        st.builds(InList, inner, several),
        st.builds(Arithmetic, st.sampled_from(ArithmeticOperator), inner, inner, st.just(INTEGER)),
        st.builds(Negative, inner),
        st.builds(Case, st.lists(st.tuples(inner, inner), min_size=1, max_size=2).map(tuple), inner),
        st.builds(Cast, inner, st.sampled_from([TEXT, BIGINT]), st.booleans()),
        st.builds(Call, st.sampled_from(["abs", "coalesce", "random"]), several, st.just(INTEGER)),
    )


SCALARS = st.recursive(LEAVES, _nodes, max_leaves=12)


def again(node: Node) -> Node:
    """The node built anew from the leaves up, sharing no inner node with the old one."""
    inner = parts(node)
    if not inner:
        return type(node)(*(getattr(node, name) for name in node.__dataclass_fields__))  # type: ignore[attr-defined]
    made = tuple(again(part) for part in inner)
    fields = {name: getattr(node, name) for name in node.__dataclass_fields__}  # type: ignore[attr-defined]
    return type(node)(**{**fields, **{n: getattr(with_parts(node, made), n) for n in fields}})


@given(SCALARS)
def test_equality_is_structural(scalar: Scalar) -> None:
    other = again(scalar)
    assert other == scalar
    assert hash(other) == hash(scalar)
    assert {scalar: 1}[other] == 1  # type: ignore[index]


@given(SCALARS, SCALARS)
def test_different_texts_are_different_scalars(left: Scalar, right: Scalar) -> None:
    if scalar_text(left, repr) != scalar_text(right, repr):
        assert left != right


@given(SCALARS)
def test_nothing_changed_is_the_same_object(scalar: Scalar) -> None:
    assert with_parts(scalar, parts(scalar)) is scalar
    assert transform(scalar, lambda node: node) is scalar
    assert substitute(scalar, {}) is scalar
    assert substitute(scalar, {fresh("z", INTEGER): ONE}) is scalar
    assert renamed(scalar, {A: A}) == scalar


@given(SCALARS)
def test_substitution_replaces_every_reading(scalar: Scalar) -> None:
    other = fresh_like(A)
    moved = renamed(scalar, {A: other})
    assert A not in refs(moved)
    assert (other in refs(moved)) == (A in refs(scalar))
    assert renamed(moved, {other: A}) == scalar
    # All at once, not one after the other.
    swapped = renamed(scalar, {A: B, B: A})
    assert renamed(swapped, {A: B, B: A}) == scalar


@given(SCALARS)
def test_walking_sees_every_part_outer_first(scalar: Scalar) -> None:
    seen = list(walk(scalar))
    assert seen[0] is scalar
    assert len(seen) == 1 + sum(len(list(walk(part))) for part in parts(scalar))
    assert refs(scalar) == {node.attribute for node in seen if isinstance(node, Ref)}


@given(st.lists(SCALARS, max_size=4))
def test_conjunctions_are_flat_and_without_repetition(terms: list[Scalar]) -> None:
    for join, split, cls, unit in (
        (conjunction, conjuncts, And, TRUE),
        (disjunction, disjuncts, Or, FALSE),
    ):
        whole = join(terms)
        flat = split(whole)
        assert len(set(flat)) == len(flat)
        assert unit not in flat
        assert not any(isinstance(term, cls) for term in flat)
        assert join(flat) == whole
        assert join([whole, whole, unit]) == whole
        assert set(flat) == {inner for term in terms for inner in split(term)}
    assert conjunction([]) == TRUE
    assert disjunction([]) == FALSE
    assert conjunction([equal(Ref(A), ONE)]) == equal(Ref(A), ONE)


@given(SCALARS)
def test_pickled_scalars_are_equal(scalar: Scalar) -> None:
    assert pickle.loads(pickle.dumps(scalar)) == scalar


def test_literals_of_different_types_stay_apart() -> None:
    kinds = [Literal("1", INTEGER), Literal("1", DECIMAL), Literal("1", TEXT), Literal("1", BOOLEAN), TRUE]
    assert len(set(kinds)) == len(kinds)
    assert Literal(None, INTEGER) != Literal("null", INTEGER)


def test_attributes_are_told_apart_by_identity() -> None:
    other = fresh("a", INTEGER)
    assert other != A
    assert Ref(other) != Ref(A)
    assert Attribute(A.id, "another name", TEXT) == A


def test_case_is_not_the_flat_list_of_its_parts() -> None:
    left = Case(((TRUE, ONE), (FALSE, TWO)), ONE)
    right = Case(((TRUE, ONE),), ONE)
    assert left != right
    assert with_parts(left, (FALSE, ONE, FALSE, TWO, ONE)) == Case(((FALSE, ONE), (FALSE, TWO)), ONE)


def test_window_calls_take_their_parts_back_in_order() -> None:
    total = Aggregate("sum", (Ref(A),), INTEGER, condition=equal(Ref(B), ONE), order=(SortKey(Ref(C)),))
    frame = Frame("rows", (ONE, "preceding"), (None, "following"))
    call = WindowCall(total, (Ref(B), Ref(C)), (SortKey(Ref(A), True),), frame)
    swap = {A: B, B: A}
    moved = renamed(call, swap)
    assert moved.partition == (Ref(A), Ref(C))
    assert moved.function.arguments == (Ref(B),)
    assert moved.function.condition == equal(Ref(A), ONE)
    assert moved.order == (SortKey(Ref(B), True),)
    assert moved.frame == frame
    assert renamed(moved, swap) == call


@pytest.mark.parametrize("operator", ComparisonOperator)
def test_negating_and_mirroring_twice_changes_nothing(operator: ComparisonOperator) -> None:
    assert NEGATED[NEGATED[operator]] is operator
    assert MIRRORED[MIRRORED[operator]] is operator


def test_twenty_thousand_levels() -> None:
    deep, other = sums(20_000), sums(20_000)
    assert deep is not other
    assert deep == other
    assert hash(deep) == hash(other)
    assert deep != sums(20_000, TWO)
    assert refs(deep) == {A}
    assert sum(1 for _ in walk(deep)) == 40_001
    moved = renamed(deep, {A: B})
    assert refs(moved) == {B}
    assert scalar_text(renamed(sums(3000), {A: B})).count("b") == 3000
    assert transform(deep, lambda node: node) is deep
    nested: Scalar = equal(Ref(A), ONE)
    for _ in range(20_000):
        nested = Not(nested)
    assert nested == Not(nested.term)  # type: ignore[union-attr]
    for i in range(20_000):
        nested = And((nested, equal(Ref(A), Literal(str(i % 7), INTEGER))))
    assert len(conjuncts(nested)) == 20_001
    assert len(conjuncts(conjunction([nested]))) == 8


def test_functions_by_name() -> None:
    assert volatile(Call("abs", (Call("random", (), INTEGER),), INTEGER))
    assert not volatile(Call("abs", (Ref(A),), INTEGER))
    assert duplicate_insensitive(Aggregate("max", (Ref(A),), INTEGER))
    assert duplicate_insensitive(Aggregate("sum", (Ref(A),), INTEGER, distinct=True))
    assert not duplicate_insensitive(Aggregate("sum", (Ref(A),), INTEGER))
    assert order_sensitive(Aggregate("string_agg", (Ref(A),), TEXT))
    assert not order_sensitive(Aggregate("sum", (Ref(A),), INTEGER))
