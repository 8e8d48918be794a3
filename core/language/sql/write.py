"""`write_sql`: formulation in, text out, in any dialect of sqlglot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from sqlglot import exp

from core.algebra.formulation import Formulation
from core.algebra.graph import attributes, postorder, scalars
from core.algebra.operators import Operator
from core.algebra.scalars import Attribute, Ref, fresh_like, walk
from core.language.sql.blocks import Block, Query, SetQuery, derived
from core.language.sql.building import Gathering, unique_names
from core.language.sql.depth import deep
from core.language.sql.gather import gather
from core.language.sql.render import steps_node, write_query_node
from core.language.sql.write_dialect import WriteError, fitted

__all__ = ["WriteError", "write_query", "write_sql"]


def write_sql(formulation: Formulation, dialect: str | None = None, pretty: bool = True) -> str:
    """The SQL of a formulation's answer, with one common table expression for each step.

    `dialect` is any dialect of sqlglot (default: the one the formulation was read in). The text means the same on that
    engine as far as sqlglot knows both dialects. Raises `WriteError` for what SQL cannot express.
    """
    output = formulation.outputs[-1]
    target = dialect or formulation.dialect
    return _written(output.operator, output.columns, target, formulation.names, formulation.aliases, pretty)


def write_query(
    root: Operator,
    columns: Sequence[tuple[Attribute, str]] | None = None,
    dialect: str = "duckdb",
    names: Mapping[Operator, str] | None = None,
    aliases: Mapping[Operator, str] | None = None,
    pretty: bool = False,
) -> str:
    """The SQL of any operator of a graph. Without `columns`, all its attributes under unique names."""
    shown = columns if columns is not None else list(unique_names(attributes(root)).items())
    return _written(root, shown, dialect, names or {}, aliases or {}, pretty)


def _written(
    root: Operator,
    columns: Sequence[tuple[Attribute, str]],
    dialect: str,
    names: Mapping[Operator, str],
    aliases: Mapping[Operator, str],
    pretty: bool,
) -> str:
    def write() -> str:
        # The answer itself is no step of its own text.
        kept = {operator: name for operator, name in names.items() if operator is not root}
        graph = fitted(root, kept, aliases, dialect)
        gathering = Gathering(dialect, graph.names, graph.aliases)
        query = gather((graph.root,), gathering)[graph.root]
        node = _outermost(query, columns)
        with_ = steps_node(gathering.steps)
        if with_ is not None:
            node.set("with_", with_)
        return node.sql(dialect=dialect, pretty=pretty, normalize_functions="lower" if not pretty else "upper")

    operators = postorder(root)
    largest = max((sum(1 for _ in walk(*scalars(operator))) for operator in operators), default=0)
    return deep(write, max(12 * len(operators), largest))


def _outermost(query: Query, columns: Sequence[tuple[Attribute, str]]) -> exp.Query:
    asked = tuple(attribute for attribute, _ in columns)
    names = dict(columns)
    if len(names) < len(columns) or (isinstance(query, SetQuery) and asked != query.columns):
        query = _repeated(query, columns)
        return write_query_node(query, None, {a: name for a, (_, name) in zip(query.columns, columns, strict=True)})
    if isinstance(query, Block) and query.distinct and set(asked) != set(query.columns):
        query = derived(query)
    query.columns = asked
    return write_query_node(query, None, names)


def _repeated(query: Query, columns: Sequence[tuple[Attribute, str]]) -> Block:
    """A block in which an attribute that is asked for twice has two columns."""
    block = derived(query) if isinstance(query, SetQuery) or query.distinct else query
    shown: list[Attribute] = []
    for attribute, name in columns:
        again = attribute
        if attribute in shown:
            again = fresh_like(attribute, name)
            block.definitions[again] = Ref(attribute)
        shown.append(again)
    block.columns = tuple(shown)
    return block
