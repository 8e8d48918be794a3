"""What a text is read as, and what is said of a text that cannot be read."""

from __future__ import annotations

import pytest

from core.algebra.notation import tree_text
from core.catalog.ddl import catalog_from_ddl
from core.language.diagnostic import ReadError
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql
from tests.generate.queries import SCHEMA

CATALOG = catalog_from_ddl(SCHEMA)

TREES = {
    "the comma binds less tightly than join": (
        "select r.a from r, s left join t on s.f = t.a",
        "π a\n  ×\n    r (a, b, c, d)\n    ⟕ f = a\n      s (e, a, f, g)\n      t (a, b, h)",
    ),
    "conditions first, subqueries as joins above them": (
        "select a from r where exists (select 1 from t where t.a = r.a) and b > 1",
        "π a\n  ⋉\n    σ b > 1\n      r (a, b, c, d)\n    σ a = a\n      t (a, b, h)",
    ),
    "NOT IN keeps its three truth values": (
        "select a from r where a not in (select h from t)",
        "π a\n  ▷ not (a = h) is false\n    r (a, b, c, d)\n    π h\n      t (a, b, h)",
    ),
    "IN under OR is a truth value": (
        "select a from r where b = 1 or c in (select h from t)",
        "π a\n  σ b = 1 or holds\n    ⋉[?] c = h → holds\n      r (a, b, c, d)\n      π h\n        t (a, b, h)",
    ),
    "group keys that are expressions are computed below": (
        "select a + b as k, count(*) as n from t group by a + b having count(*) > 1",
        "ρ value → k, count → n\n  σ count > 1\n    γ value ; count(*) → count\n      π a, b, h, a + b → value\n        t (a, b, h)",
    ),
    "a step used twice is one operator": (
        "with x as (select a, b from t) select p.a from x p join x q on p.a = q.b",
        "π a\n  ⋈ a = b\n    ρ a, b\n      π a, b  *1:\n        t (a, b, h)\n    ρ a, b\n      *1",
    ),
    "recursion is a fixpoint": (
        "with recursive n(i) as (select 1 union all select i + 1 from n where i < 3) select i from n",
        "fix n (all)\n  π 1 → value\n    1 row\n  π i + 1 → value\n    σ i < 3\n      n",
    ),
}


@pytest.mark.parametrize(("text", "tree"), TREES.values(), ids=TREES.keys())
def test_trees(text: str, tree: str) -> None:
    assert tree_text(read_sql(text, CATALOG).root) == tree


ERRORS = {
    "an unknown column, with the one that was meant": (
        "select aa from r",
        "line 1, column 8: no column aa\n  select aa from r\n         ^^\n  help: did you mean a?",
    ),
    "an unknown alias": (
        "select x.a from r q",
        "line 1, column 8: no item of FROM is called x\n  select x.a from r q\n         ^\n  note: in view: q",
    ),
    "an ambiguous name": (
        "select b from r join t on r.a = t.a",
        "line 1, column 8: b is ambiguous\n  select b from r join t on r.a = t.a\n         ^\n"
        "  note: it is a column of r, t\n  help: write which one",
    ),
    "not grouped": (
        "select b, count(*) from t group by a",
        "line 1, column 8: b is neither grouped nor inside an aggregate\n  select b, count(*) from t group by a\n         ^\n"
        "  help: group by b too, or aggregate it",
    ),
    "no query": (
        "delete from t",
        "line 1, column 1: this is a delete statement, not a query\n  delete from t\n  ^^^^^^^^^^^^^",
    ),
}


@pytest.mark.parametrize(("text", "message"), ERRORS.values(), ids=ERRORS.keys())
def test_errors_point_at_the_spot(text: str, message: str) -> None:
    with pytest.raises(ReadError) as error:
        read_sql(text, CATALOG)
    assert str(error.value) == message


def test_independent_errors_come_together() -> None:
    with pytest.raises(ReadError) as error:
        read_sql("select nope, t.x from t where q = 1", CATALOG)
    assert {d.message for d in error.value.diagnostics} == {"no column nope", "no column x in t", "no column q"}


@pytest.mark.parametrize(
    "text",
    [
        "select * from r tablesample 10%",
        "select a from r limit 10%",
        "select * from unheard_of",
        "select a from r asof join t on r.a >= t.a",
        "select",
        "select a from r where (a > 1",
        "select 'abc",
        "",
        "select a from r; select b from t",
        "select a from r where a in (select a, b from t)",
        "select (select a, b from t) from r",
    ],
)
def test_what_cannot_be_read_is_refused_in_words(text: str) -> None:
    with pytest.raises(ReadError) as error:
        read_sql(text, CATALOG)
    assert all(d.message for d in error.value.diagnostics)


def test_relations_without_a_catalog_get_the_columns_that_are_used() -> None:
    formulation = read_sql("select p.x, q.y from somewhere p join elsewhere q on p.k = q.k where p.z > 1")
    tree = tree_text(formulation.root)
    assert "somewhere as p (k, z, x)" in tree and "elsewhere as q (k, y)" in tree
    assert write_sql(formulation).startswith("SELECT")


def test_spans_point_into_the_text() -> None:
    text = "select a from r where b > 1 and c is null"
    formulation = read_sql(text, CATALOG)
    spans = {type(op).__name__: text[s.start : s.end] for op, s in formulation.spans.items()}
    assert spans["Relation"] == "r"
    assert spans["Select"].startswith("b > 1")


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("terms", "select a from r where " + " or ".join(f"a = {i}" for i in range(10_000))),
        ("list", f"select a from r where a in ({', '.join(map(str, range(10_000)))})"),
        ("parentheses", "select " + "(" * 200 + "a" + ")" * 200 + " from r"),
        ("sum", "select " + " + ".join(["a"] * 2000) + " as s from r"),
        (
            "steps",
            "with "
            + ", ".join(f"x{i} as (select a from {'r' if i == 0 else f'x{i - 1}'})" for i in range(1000))
            + " select a from x999",
        ),
        ("unions", " union all ".join(["select a from r"] * 1000)),
        ("joins", "select q0.a from r q0 " + " ".join(f"join r q{i} on q{i}.a = q{i - 1}.a" for i in range(1, 300))),
    ],
    ids=lambda value: value if len(str(value)) < 20 else "",
)
def test_deep_and_wide_texts(name: str, text: str) -> None:
    formulation = read_sql(text, CATALOG)
    assert write_sql(formulation)
