"""Small graphs, each about one thing: the exact text, and that it means what the graph means."""

from __future__ import annotations

import random

import pytest

from core.algebra.formulation import Formulation, Output
from core.algebra.graph import attributes
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
    Unnest,
    Values,
)
from core.algebra.scalars import (
    TRUE,
    Aggregate,
    Arithmetic,
    ArithmeticOperator,
    Attribute,
    Call,
    Comparison,
    ComparisonOperator,
    IsNull,
    IsTruth,
    Literal,
    Negative,
    Not,
    Or,
    Ref,
    Scalar,
    SortKey,
    conjunction,
    equal,
    fresh,
    fresh_key,
    fresh_like,
)
from core.algebra.types import BIGINT, BOOLEAN, INTEGER, RELATION, type_named
from core.language.sql.write import WriteError, write_query, write_sql
from tests.language.graphs import RELATIONS, GraphMaker, number
from tests.language.test_write_graphs import INSTANCES, check


def relation(name: str, alias: str = "") -> Relation:
    return Relation(name, tuple(fresh(column, type_) for column, type_ in RELATIONS[name]), alias)


def again(operator: Operator) -> Project:
    return Project(operator, tuple(Column(fresh_like(a), Ref(a)) for a in attributes(operator)))


def kept(operator: Operator, *chosen: Attribute) -> Project:
    return Project(operator, tuple(Column(a, Ref(a)) for a in chosen))


def meant(root: Operator, names: dict[Operator, str] | None = None, aliases: dict[Operator, str] | None = None) -> str:
    """The text, once it has been checked on every instance."""
    maker = GraphMaker(random.Random(0))
    maker.names, maker.aliases = names or {}, aliases or {}
    check(root, maker, range(INSTANCES))
    return write_query(root, None, "duckdb", maker.names, maker.aliases)


def greater(left: Scalar, right: Scalar) -> Comparison:
    return Comparison(ComparisonOperator.GREATER, left, right)


def count() -> AggregateColumn:
    return AggregateColumn(fresh("n", BIGINT), Aggregate("count", (), BIGINT))


# --- one block as long as SQL's clauses allow -----------------------------------------------------------------------


def test_one_block_takes_what_the_order_of_clauses_allows() -> None:
    r = relation("r")
    a, b, _ = r.attributes
    grouped = Group(Select(r, greater(Ref(b), number(0))), (a,), (n := count(),))
    having = Select(grouped, greater(Ref(n.attribute), number(1)))
    root = Limit(Sort(Distinct(having), (SortKey(Ref(a)), SortKey(Ref(n.attribute)))), number(3))
    assert meant(root) == (
        "SELECT DISTINCT a, count(*) AS n FROM r WHERE b > 0 GROUP BY a HAVING count(*) > 1 ORDER BY a, n LIMIT 3"
    )


def test_a_selection_over_a_limit_needs_a_derived_table() -> None:
    r = relation("r")
    keys = tuple(SortKey(Ref(a)) for a in r.attributes)
    root = Select(Limit(Sort(r, keys), number(2)), greater(Ref(r.attributes[0]), number(0)))
    assert meant(root) == ("SELECT a, b, d FROM (SELECT a, b, d FROM r ORDER BY a, b, d LIMIT 2) AS r WHERE a > 0")


def test_filters_stay_on_their_side_of_an_outer_join() -> None:
    r, s = relation("r"), relation("s")
    on = conjunction([equal(Ref(r.attributes[0]), Ref(s.attributes[0])), greater(Ref(r.attributes[1]), number(1))])
    root = Select(Join(JoinKind.LEFT, r, s, on), IsNull(Ref(s.attributes[1])))
    assert meant(root).endswith("FROM r LEFT JOIN s ON r.a = s.a AND r.b > 1 WHERE s.e IS NULL")


def test_a_filtered_right_side_of_an_outer_join_stays_below_it() -> None:
    r, s = relation("r"), relation("s")
    right = Select(s, greater(Ref(s.attributes[1]), number(1)))
    root = Join(JoinKind.LEFT, r, right, equal(Ref(r.attributes[0]), Ref(s.attributes[0])))
    assert "LEFT JOIN (SELECT a, e, g FROM s WHERE e > 1) AS s ON r.a = s.a" in meant(root)


def test_chains_lean_left_without_parentheses_and_right_with() -> None:
    r, s, t = relation("r"), relation("s"), relation("t")
    rs, st = equal(Ref(r.attributes[0]), Ref(s.attributes[0])), equal(Ref(s.attributes[1]), Ref(t.attributes[0]))
    left = Join(JoinKind.LEFT, Join(JoinKind.INNER, r, s, rs), t, st)
    assert meant(left).endswith("FROM r JOIN s ON r.a = s.a LEFT JOIN t ON s.e = t.a")
    right = Join(JoinKind.LEFT, r, Join(JoinKind.INNER, s, t, st), rs)
    assert meant(right).endswith("FROM r LEFT JOIN (s JOIN t ON s.e = t.a) ON r.a = s.a")


# --- subqueries -----------------------------------------------------------------------------------------------------


def test_semi_and_anti_joins_are_conditions() -> None:
    r, s = relation("r"), relation("s")
    same = equal(Ref(r.attributes[0]), Ref(s.attributes[0]))
    assert meant(Join(JoinKind.SEMI, r, s, same)).endswith("FROM r WHERE a IN (SELECT a FROM s)")
    assert meant(Join(JoinKind.ANTI, r, s, Not(IsTruth(same, False)))).endswith("WHERE NOT a IN (SELECT a FROM s)")
    assert meant(Join(JoinKind.ANTI, r, s, same)).endswith("WHERE NOT EXISTS(SELECT 1 FROM s WHERE r.a = s.a)")
    both = conjunction([same, greater(Ref(r.attributes[1]), Ref(s.attributes[1]))])
    assert meant(Join(JoinKind.SEMI, r, s, both)).endswith(
        "WHERE EXISTS(SELECT 1 FROM s WHERE r.a = s.a AND r.b > s.e)"
    )


def test_a_mark_is_three_valued() -> None:
    r, s = relation("r"), relation("s")
    mark = fresh("known", BOOLEAN)
    same = equal(Ref(r.attributes[0]), Ref(s.attributes[0]))
    joined = Join(JoinKind.MARK, r, s, same, mark)
    used = Select(joined, Or((Ref(mark), greater(Ref(r.attributes[1]), number(2)))))
    assert meant(kept(used, *r.attributes)).endswith("WHERE a IN (SELECT a FROM s) OR b > 2")
    general = Join(JoinKind.MARK, r, s, greater(Ref(r.attributes[0]), Ref(s.attributes[0])), fresh("some", BOOLEAN))
    assert "THEN NULL ELSE FALSE END" in meant(general)


def test_a_scalar_subquery_stands_where_its_value_is_read() -> None:
    r, s = relation("r"), relation("s")
    most = AggregateColumn(fresh("most", BIGINT), Aggregate("max", (Ref(s.attributes[1]),), BIGINT))
    inner = Group(Select(s, equal(Ref(s.attributes[0]), Ref(r.attributes[0]))), (), (most,))
    single = Join(JoinKind.SINGLE, r, inner, TRUE)
    root = kept(Select(single, greater(Ref(r.attributes[1]), Ref(most.attribute))), *r.attributes)
    assert meant(root).endswith("FROM r WHERE b > (SELECT max(s.e) FROM s WHERE s.a = r.a)")


def test_two_values_of_one_row_are_one_lateral_join() -> None:
    r, s = relation("r"), relation("s")
    values = (
        AggregateColumn(fresh("most", BIGINT), Aggregate("max", (Ref(s.attributes[1]),), BIGINT)),
        AggregateColumn(fresh("least", BIGINT), Aggregate("min", (Ref(s.attributes[1]),), BIGINT)),
    )
    inner = Group(Select(s, equal(Ref(s.attributes[0]), Ref(r.attributes[0]))), (), values)
    text = meant(Join(JoinKind.SINGLE, r, inner, TRUE))
    assert text.count("LEFT JOIN LATERAL (") == 1 and text.count("FROM s") == 1


# --- graphs ---------------------------------------------------------------------------------------------------------


def test_a_shared_step_is_written_once_and_each_use_has_its_alias() -> None:
    r = relation("r")
    step = Group(r, (r.attributes[0],), (count(),))
    first, second = again(step), again(step)
    same = equal(Ref(attributes(first)[1]), Ref(attributes(second)[1]))
    root = Join(JoinKind.INNER, first, second, same)
    assert meant(root, {step: "totals"}, {first: "x", second: "y"}) == (
        "WITH totals AS (SELECT a, count(*) AS n FROM r GROUP BY a) "
        "SELECT x.a, x.n, y.a AS a_2, y.n AS n_2 FROM totals AS x JOIN totals AS y ON x.n = y.n"
    )


def test_a_relation_joined_with_its_own_renaming() -> None:
    r = relation("r")
    other = again(r)
    root = Join(JoinKind.LEFT, r, other, equal(Ref(r.attributes[0]), Ref(attributes(other)[1])))
    assert meant(root).endswith("FROM r LEFT JOIN r AS r_2 ON r.a = r_2.b")
    third = Join(JoinKind.INNER, Join(JoinKind.RIGHT, r, relation("s"), TRUE), other, TRUE)
    meant(third)


def test_what_sorts_for_a_limit_is_no_step() -> None:
    r = relation("r")
    ordered = Sort(r, tuple(SortKey(Ref(a)) for a in r.attributes))
    root = Limit(ordered, number(2))
    assert meant(root, {ordered: "late"}) == "SELECT a, b, d FROM r ORDER BY a, b, d LIMIT 2"
    shown = Join(JoinKind.INNER, again(root), again(Limit(ordered, number(1))), TRUE)
    meant(shown)


def test_a_limit_with_ties_goes_by_rank_where_the_engine_has_none() -> None:
    r = relation("r")
    ordered = Sort(r, (SortKey(Ref(r.attributes[1]), descending=True),))
    root = Limit(ordered, number(2), with_ties=True)
    assert "QUALIFY rank() OVER (ORDER BY b DESC) <= 2" in meant(root)
    assert write_query(root, None, "postgres").endswith("FETCH FIRST 2 ROWS WITH TIES")


def test_a_recursion_keeps_its_parts_inside() -> None:
    t = relation("t")
    key = fresh_key()
    found = Recurrence("reach", (fresh("a", INTEGER), fresh("b", INTEGER)), key)
    base = kept(t, *t.attributes[:2])
    links = again(t)
    first, second, _ = attributes(links)
    joined = Join(JoinKind.INNER, found, links, equal(Ref(found.attributes[1]), Ref(first)))
    sources = (attributes(base), (found.attributes[0], second))
    root = Fixpoint(base, joined, sources, (fresh("a", INTEGER), fresh("b", INTEGER)), key, True, "t")
    text = meant(root, {joined: "longer"})
    assert text.startswith("WITH RECURSIVE t_2(a, b) AS (SELECT a, b FROM t UNION SELECT t_2.a, t.b FROM t_2 JOIN t ON")
    assert "longer" not in text


# --- what SQL would read otherwise ----------------------------------------------------------------------------------


def test_an_aggregate_over_outer_columns_stays_in_its_query() -> None:
    r, s = relation("r"), relation("s")
    total = AggregateColumn(fresh("total", BIGINT), Aggregate("max", (Ref(r.attributes[0]),), BIGINT))
    root = Join(JoinKind.INNER, r, Group(s, (), (total,)), TRUE)
    assert "LATERAL (SELECT max(a) AS total FROM (SELECT r.a FROM s" in meant(root)


def test_set_operations_may_take_a_column_twice() -> None:
    r, s = relation("r"), relation("s")
    a, b, _ = r.attributes
    c, e, _ = s.attributes
    for sources in (((a, a), (c, e)), ((a, b), (c, c))):
        for kind in SetKind:
            own = (fresh("x", INTEGER), fresh("y", INTEGER))
            both = SetOperation(kind, (r, s), sources, own, False)
            meant(Select(both, greater(Ref(own[0]), Ref(own[1]))))
            meant(Select(both, IsNull(Ref(own[1]))))


def test_a_union_of_several_is_flat() -> None:
    parts = tuple(relation("r") for _ in range(3))
    own = (fresh("a", INTEGER),)
    root = SetOperation(SetKind.UNION, parts, tuple((p.attributes[0],) for p in parts), own, False)
    assert meant(root) == "SELECT a FROM r UNION ALL SELECT a FROM r UNION ALL SELECT a FROM r"


def test_grouping_sets_may_leave_a_key_out() -> None:
    r = relation("r")
    a, b, _ = r.attributes
    assert "CAST(NULL AS INT) AS b" in meant(Group(r, (a, b), (count(),), ((a,), ())))


def test_keys_of_grouping_sets_that_are_one_column_stay_apart() -> None:
    r = relation("r")
    a, b, _ = r.attributes
    copy = fresh("copy", INTEGER)
    below = Project(r, (Column(a, Ref(a)), Column(b, Ref(b)), Column(copy, Ref(b))))
    meant(Group(below, (a, b, copy), (count(),), ((a, b, copy), (copy,))))


def test_constants_are_no_column_numbers() -> None:
    r = relation("r")
    constant = fresh("zero", INTEGER)
    below = Project(r, (*(Column(a, Ref(a)) for a in r.attributes), Column(constant, Negative(number(1)))))
    meant(Group(below, (constant,), (count(),)))
    keys = (SortKey(Ref(constant)), *(SortKey(Ref(a)) for a in r.attributes))
    assert "ORDER BY a, b, d LIMIT 1" in meant(Limit(Sort(below, keys), number(1)))


def test_a_group_that_nothing_is_asked_of_is_one_row() -> None:
    grouped = Group(relation("r"), (), (count(),))
    one = fresh("one", INTEGER)
    assert meant(Project(grouped, (Column(one, number(1)),))) == "SELECT 1 AS one FROM r HAVING count(*) >= 0"


def test_rows_written_out_may_come_first_in_parentheses() -> None:
    listed = Values((fresh("x", INTEGER),), ((number(1),), (number(2),)))
    r, s = relation("r"), relation("s")
    nested = Join(JoinKind.LEFT, listed, s, equal(Ref(listed.attributes[0]), Ref(s.attributes[0])))
    meant(Join(JoinKind.LEFT, r, nested, equal(Ref(r.attributes[0]), Ref(listed.attributes[0]))))


def test_a_projection_of_an_outer_column_over_a_relation() -> None:
    r, s = relation("r"), relation("s")
    outer = Project(s, (Column(fresh("v", INTEGER), Ref(r.attributes[1])),))
    meant(Join(JoinKind.INNER, r, outer, TRUE))


# --- further operators ----------------------------------------------------------------------------------------------


def test_division_by_two_missing_partners() -> None:
    r, t = relation("r"), relation("t")
    dividend = kept(r, r.attributes[0], r.attributes[1])
    root = Divide(dividend, t, ((r.attributes[1], t.attributes[1]),))
    assert meant(root).count("NOT EXISTS(") == 2


def test_nesting_and_unnesting() -> None:
    r = relation("r")
    a, b, d = r.attributes
    bag = fresh("bag", RELATION)
    nest = Nest(r, (a,), (b, d), bag)
    assert meant(nest) == "SELECT a, array_agg({'b': b, 'd': d}) AS bag FROM r GROUP BY a"
    flat = Unnest(nest, Ref(bag), (fresh_like(b), fresh_like(d)), fresh("place", BIGINT))
    text = write_query(kept(flat, a, *flat.attributes))
    assert text.startswith("SELECT r.a, element.item.b AS b, element.item.d AS d FROM (SELECT")
    meant(kept(flat, a, *flat.attributes))
    meant(Nest(r, (), (a, b), fresh("bag", RELATION)))
    with pytest.raises(WriteError, match="nested relation has no form in mysql"):
        write_query(nest, None, "mysql")


def test_an_unnest_that_keeps_empty_lists_keeps_a_row_without_from() -> None:
    nothing = Literal(None, type_named("INTEGER[]"))
    one = Project(Values((), ((),)), (Column(fresh("one", INTEGER), number(1)),))
    assert meant(Unnest(one, nothing, (fresh("item", INTEGER),), None, True)).endswith(
        "FROM (SELECT 1 AS one) AS part LEFT JOIN UNNEST(CAST(NULL AS INT[])) AS element(item) ON TRUE"
    )
    meant(Unnest(Values((), ((),)), nothing, (fresh("item", INTEGER),), fresh("place", BIGINT), True))


# --- scalars --------------------------------------------------------------------------------------------------------


def test_parentheses_keep_the_tree() -> None:
    r = relation("r")
    a, b = Ref(r.attributes[0]), Ref(r.attributes[1])

    def text(value: Scalar, type_: object = INTEGER) -> str:
        root = Project(r, (Column(fresh("v", INTEGER), value),))
        return meant(root).removeprefix("SELECT ").removesuffix(" AS v FROM r")

    minus, plus, times = ArithmeticOperator.SUBTRACT, ArithmeticOperator.ADD, ArithmeticOperator.MULTIPLY

    def calc(operator: ArithmeticOperator, left: Scalar, right: Scalar) -> Arithmetic:
        return Arithmetic(operator, left, right, INTEGER)

    assert text(calc(minus, a, calc(minus, b, a))) == "a - (b - a)"
    assert text(calc(minus, calc(minus, a, b), a)) == "a - b - a"
    assert text(calc(times, calc(plus, a, b), a)) == "(a + b) * a"
    assert text(calc(plus, a, calc(times, b, a))) == "a + b * a"
    assert text(Negative(Negative(a))) == "-(-a)"
    assert text(Negative(calc(plus, a, b))) == "-(a + b)"
    assert text(Not(equal(a, b))) == "NOT a = b"
    assert text(Not(Or((equal(a, b), IsNull(a))))) == "NOT (a = b OR a IS NULL)"
    assert text(IsNull(equal(a, b))) == "(a = b) IS NULL"
    assert text(Not(IsNull(a))) == "a IS NOT NULL"
    assert text(conjunction([Or((equal(a, b), IsNull(a))), IsNull(b)])) == "(a = b OR a IS NULL) AND b IS NULL"
    assert text(equal(IsNull(a), equal(a, b))) == "(a IS NULL) = (a = b)"
    assert text(IsTruth(Not(equal(a, b)), True)) == "(NOT a = b) IS TRUE"


def test_between_is_for_neighbours_with_one_term() -> None:
    r = relation("r")
    a, b = Ref(r.attributes[0]), Ref(r.attributes[1])
    low, high = Comparison(ComparisonOperator.AT_LEAST, a, number(1)), Comparison(ComparisonOperator.AT_MOST, a, b)
    assert meant(Select(r, conjunction([low, high]))).endswith("WHERE a BETWEEN 1 AND b")
    assert meant(Select(r, conjunction([low, IsNull(b), high]))).endswith("WHERE a >= 1 AND b IS NULL AND a <= b")


# --- depth and outputs ----------------------------------------------------------------------------------------------


def test_deep_graphs_and_scalars_are_written() -> None:
    r = relation("r")
    term: Scalar = Ref(r.attributes[0])
    for _ in range(1500):
        term = Arithmetic(ArithmeticOperator.ADD, term, number(1), INTEGER)
    assert write_query(Project(r, (Column(fresh("v", INTEGER), term),))).count("+ 1") == 1500
    for _ in range(1500):
        term = Call("abs", (term,), INTEGER)
    assert write_query(Project(r, (Column(fresh("v", INTEGER), term),))).count("abs(") == 1500

    nested: Operator = relation("r")
    for _ in range(700):
        nested = Select(Distinct(nested), greater(Ref(attributes(nested)[0]), number(0)))
    assert write_query(nested).count("SELECT DISTINCT") == 700

    chain: Operator = relation("r")
    for _ in range(800):
        other = relation("s")
        chain = Join(JoinKind.INNER, chain, other, equal(Ref(attributes(chain)[0]), Ref(other.attributes[0])))
    assert write_query(chain).count("JOIN") == 800


def test_columns_of_the_answer_keep_their_names_and_may_repeat() -> None:
    r = relation("r")
    a, b, _ = r.attributes
    root = Sort(r, (SortKey(Ref(b)),))
    formulation = Formulation((Output("answer", root, ((a, "first"), (a, "Second Time"))),))
    assert write_sql(formulation, pretty=False) == 'SELECT a AS first, a AS "Second Time" FROM r ORDER BY b'


def test_a_derived_table_lists_what_is_read_and_a_named_one_what_it_was_given() -> None:
    r = relation("r")
    limited = Limit(Sort(r, tuple(SortKey(Ref(a)) for a in r.attributes)), number(2))
    root = kept(Select(limited, greater(Ref(r.attributes[1]), number(0))), r.attributes[0])
    assert meant(root) == ("SELECT a FROM (SELECT a, b FROM r ORDER BY a, b, d LIMIT 2) AS r WHERE b > 0")
    assert "(SELECT a, b, d FROM r ORDER BY a, b, d LIMIT 2) AS best" in meant(root, {}, {limited: "best"})
