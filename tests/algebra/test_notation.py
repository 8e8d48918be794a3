"""The algebra as text: a line for every operator, and trees with shared parts."""

from __future__ import annotations

import pytest

from core.algebra.notation import is_product, is_renaming, line, name_of, qualified, scalar_text, sign, tree_text
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
    TRUE,
    Aggregate,
    And,
    Arithmetic,
    ArithmeticOperator,
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
    equal,
    fresh,
)
from core.algebra.types import BIGINT, DATE, INTEGER, RELATION, TEXT

A, B, C, D = (fresh(name, INTEGER) for name in "abcd")
X = fresh("x", INTEGER)
R, S = Relation("r", (A, B)), Relation("s", (C, D), "t")
ONE, TWO = Literal("1", INTEGER), Literal("2", INTEGER)
COUNT = Aggregate("count", (), BIGINT)
RANK = WindowCall(Aggregate("rank", (), BIGINT), (Ref(A),), (SortKey(Ref(B), True),))
ON = equal(Ref(A), Ref(C))


def added(left: Scalar, right: Scalar) -> Scalar:
    return Arithmetic(ArithmeticOperator.ADD, left, right, INTEGER)


def times(left: Scalar, right: Scalar) -> Scalar:
    return Arithmetic(ArithmeticOperator.MULTIPLY, left, right, INTEGER)


def minus(left: Scalar, right: Scalar) -> Scalar:
    return Arithmetic(ArithmeticOperator.SUBTRACT, left, right, INTEGER)


OPERATORS: list[tuple[Operator, str, str]] = [
    (R, "r (a, b)", "relation"),
    (S, "s as t (c, d)", "relation"),
    (Values((X,), ((ONE,), (TWO,))), "2 rows", "values"),
    (Values((), ((),)), "1 row", "values"),
    (TableFunction(Call("range", (ONE,), INTEGER), (X,)), "range(1)", "table function"),
    (Select(R, equal(Ref(A), ONE)), "σ a = 1", "select"),
    (Project(R, (Column(A, Ref(A)), Column(X, added(Ref(B), ONE)))), "π a, b + 1 → x", "project"),
    (Project(R, (Column(C, Ref(A)), Column(D, Ref(B)))), "ρ a → c, b → d", "rename"),
    (Join(JoinKind.INNER, R, S, ON), "⋈ a = c", "join"),
    (Join(JoinKind.INNER, R, S, TRUE), "×", "product"),
    (Join(JoinKind.LEFT, R, S, ON), "⟕ a = c", "left join"),
    (Join(JoinKind.RIGHT, R, S, ON), "⟖ a = c", "right join"),
    (Join(JoinKind.FULL, R, S, ON), "⟗ a = c", "full join"),
    (Join(JoinKind.SEMI, R, S, ON), "⋉ a = c", "semi join"),
    (Join(JoinKind.ANTI, R, S, ON), "▷ a = c", "anti join"),
    (Join(JoinKind.MARK, R, S, ON, X), "⋉[?] a = c → x", "mark join"),
    (Join(JoinKind.SINGLE, R, S, TRUE), "⟕[1]", "single join"),
    (SetOperation(SetKind.UNION, (R, S), ((A, B), (C, D)), (X, fresh("y", INTEGER)), False), "∪[all] x, y", "union"),
    (SetOperation(SetKind.INTERSECT, (R, S), ((A,), (C,)), (X,), True), "∩ x", "intersection"),
    (SetOperation(SetKind.EXCEPT, (R, S), ((A,), (C,)), (X,), True), "− x", "difference"),
    (Divide(R, S, ((B, C),)), "÷ b = c", "division"),
    (Distinct(R), "δ a, b", "distinct"),
    (Group(R, (A,), (AggregateColumn(X, COUNT),)), "γ a ; count(*) → x", "group"),
    (Group(R, (), (AggregateColumn(X, COUNT),)), "γ count(*) → x", "group"),
    (Group(R, (A, B), (), ((A,), (B,), ())), "γ (a), (b), ()", "group"),
    (Nest(R, (A,), (B,), fresh("bag", RELATION)), "ν a ; (b) → bag", "nest"),
    (Unnest(R, Ref(B), (X,)), "μ b → x", "unnest"),
    (Window(R, (WindowColumn(X, RANK),)), "ω rank() over (by a in order of b desc) → x", "window"),
    (Sort(R, (SortKey(Ref(A)), SortKey(Ref(B), True, True))), "τ a, b desc nulls first", "sort"),
    (Limit(R, TWO, ONE, True), "λ 2 with ties after 1", "limit"),
    (
        Fixpoint(R, Recurrence("w", (C, D), 7), ((A, B), (C, D)), (X, fresh("y", INTEGER)), 7, True, "w"),
        "fix w",
        "fixpoint",
    ),
    (Recurrence("w", (C, D), 7), "w", "rows so far"),
]


@pytest.mark.parametrize(("operator", "text", "name"), OPERATORS, ids=[text for _, text, _ in OPERATORS])
def test_operators(operator: Operator, text: str, name: str) -> None:
    assert line(operator) == text
    assert name_of(operator) == name
    assert line(operator).startswith(sign(operator))


def test_products_and_renamings_are_recognised() -> None:
    assert [text for o, text, _ in OPERATORS if is_product(o)] == ["×"]
    assert [text for o, text, _ in OPERATORS if is_renaming(o)] == ["ρ a → c, b → d"]


YES = equal(Ref(A), ONE)
NO = Comparison(ComparisonOperator.UNEQUAL, Ref(B), TWO)
SCALARS: list[tuple[Scalar, str]] = [
    (times(added(Ref(A), ONE), TWO), "(a + 1) * 2"),
    (added(times(Ref(A), ONE), TWO), "a * 1 + 2"),
    (minus(Ref(A), minus(Ref(B), ONE)), "a - (b - 1)"),
    (minus(minus(Ref(A), Ref(B)), ONE), "a - b - 1"),
    (Or((And((YES, NO)), YES)), "a = 1 and b ≠ 2 or a = 1"),
    (And((Or((YES, NO)), YES)), "(a = 1 or b ≠ 2) and a = 1"),
    (Not(And((YES, NO))), "not (a = 1 and b ≠ 2)"),
    (Not(YES), "not a = 1"),
    (Not(IsNull(Ref(A))), "a is not null"),
    (Not(InList(Ref(A), (ONE, TWO))), "a not in (1, 2)"),
    (IsTruth(YES, False), "(a = 1) is false"),
    (equal(YES, NO), "(a = 1) = (b ≠ 2)"),
    (Comparison(ComparisonOperator.AT_MOST, Ref(A), Literal("2026-01-02", DATE)), "a ≤ '2026-01-02'"),
    (Negative(added(Ref(A), ONE)), "-(a + 1)"),
    (Case(((YES, TWO),), Literal(None, INTEGER)), "case when a = 1 then 2 else null end"),
    (Cast(Ref(A), TEXT, True), "try_cast(a as varchar)"),
    (Call("like", (Ref(A), Literal("x%", TEXT)), INTEGER), "a like 'x%'"),
]


@pytest.mark.parametrize(("scalar", "text"), SCALARS, ids=[text for _, text in SCALARS])
def test_scalars(scalar: Scalar, text: str) -> None:
    assert scalar_text(scalar) == text


def test_aggregates_and_windows() -> None:
    total = Aggregate("sum", (Ref(A),), INTEGER, True, YES, (SortKey(Ref(B)),))
    assert scalar_text(total) == "sum(distinct a order by b) where a = 1"
    frame = Frame("rows", (TWO, "preceding"), (None, "current"), "ties")
    call = WindowCall(Aggregate("sum", (Ref(A),), INTEGER), (), (SortKey(Ref(B)),), frame)
    text = "sum(a) over (in order of b rows between 2 preceding and current row exclude ties)"
    assert scalar_text(call) == text


def test_names_borne_twice_get_numbers() -> None:
    other = fresh("a", INTEGER)
    naming = qualified([A, B, other])
    assert scalar_text(equal(Ref(A), Ref(other)), naming) == f"a#{A.id} = a#{other.id}"
    assert scalar_text(equal(Ref(B), ONE), naming) == "b = 1"


def test_a_shared_part_is_written_once() -> None:
    left = Select(R, equal(Ref(A), ONE))
    right = Project(left, (Column(C, Ref(A)), Column(D, Ref(B))))
    text = tree_text(Join(JoinKind.INNER, left, right, ON), facts=lambda o: "!" if o is R else "")
    assert text == "⋈ a = c\n  σ a = 1  *1:\n    r (a, b)  !\n  ρ a → c, b → d\n    *1"
