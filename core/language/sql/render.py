"""SELECT blocks printed: aliases chosen, columns named, clauses put in order."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from copy import copy
from dataclasses import dataclass, field
from typing import cast

from sqlglot import exp

from core.algebra.operators import JoinKind, Relation, SetKind, TableFunction, Unnest, Values
from core.algebra.scalars import (
    TRUE,
    Attribute,
    Comparison,
    ComparisonOperator,
    IsNull,
    IsTruth,
    Literal,
    Not,
    Ref,
    Scalar,
    conjuncts,
    refs,
)
from core.language.sql.blocks import (
    Block,
    Condition,
    Item,
    Nested,
    Query,
    SetQuery,
    Stage,
    StepDefinition,
    StepUse,
    SubqueryTerm,
    derived,
)
from core.language.sql.building import leaves, reads_aggregates, reads_terms, unique_names
from core.language.sql.prune import slimmed
from core.language.sql.write_dialect import WriteError
from core.language.sql.write_scalars import chained, within, write_scalar, written_terms

Names = Mapping[Attribute, str]


@dataclass(slots=True)
class View:
    """What attributes are called where a scalar is printed: inside one block, with the blocks around it."""

    block: Block | None = None
    outer: View | None = None
    places: dict[Attribute, tuple[str, str]] = field(default_factory=dict)
    fields: dict[Attribute, str] = field(default_factory=dict)
    lone: bool = False
    aliases: set[str] = field(default_factory=set)
    output: set[str] = field(default_factory=set)

    def around(self) -> set[str]:
        """The aliases in use here and further out."""
        found: set[str] = set()
        view: View | None = self
        while view is not None:
            found |= view.aliases
            view = view.outer
        return found

    def name(self, attribute: Attribute) -> exp.Expression:
        """The expression that stands for an attribute here."""
        return self._named(attribute, self.lone)

    def whole(self, attribute: Attribute) -> exp.Expression:
        """The same with every column qualified, for use inside another block."""
        return self._named(attribute, False)

    def _named(self, attribute: Attribute, bare: bool) -> exp.Expression:
        if attribute in self.places:
            alias, column = self.places[attribute]
            plain = not alias or (bare and column.lower() not in self.output)
            found = exp.column(_identifier(column), table=None if plain else _identifier(alias))
            if attribute in self.fields:
                return exp.Dot(this=found, expression=_identifier(self.fields[attribute]))
            return found
        if self.block is not None and attribute in self.block.definitions:
            definition = self.block.definitions[attribute]
            if isinstance(definition, SubqueryTerm):
                return write_term(definition, self)
            return write_scalar(definition, self.name if bare else self.whole)
        if self.outer is None:
            raise WriteError(f"nothing gives {attribute.name} here")
        return self.outer._named(attribute, False)


def _identifier(name: str) -> exp.Identifier:
    return exp.to_identifier(name, quoted=not _plain(name))


def _plain(name: str) -> bool:
    return name.isidentifier() and name.isascii() and name.lower() not in _RESERVED


_RESERVED_WORDS = """
    all analyse analyze and any array as asc asymmetric at between both by case cast check collate column
    constraint create cross current_date current_time current_timestamp default deferrable desc describe distinct
    do else end except exists false fetch filter following for foreign from full grant group grouping having if
    ilike in initially inner insert intersect interval into is join key lambda lateral leading left like limit
    natural not null of offset on only or order outer over overlaps partition pivot placing position preceding
    primary qualify range references returning right row rows sample select set similar some summarize symmetric
    table then to trailing true unbounded union unique unnest unpivot user using values variadic when where window
    with
"""
_RESERVED = frozenset(_RESERVED_WORDS.split())


# --- queries -------------------------------------------------------------------------------------------------------


def write_query_node(query: Query, outer: View | None, names: Names | None = None) -> exp.Query:
    """A query as a sqlglot node. `names` are the output names by attribute (default: unique ones)."""
    if isinstance(query, SetQuery):
        return _set_query(query, outer, names)
    return _select(query, outer, names)


def _set_query(query: SetQuery, outer: View | None, names: Names | None) -> exp.Query:
    shown = dict(names or unique_names(query.columns))
    classes: dict[SetKind, type[exp.SetOperation]] = {
        SetKind.UNION: exp.Union,
        SetKind.INTERSECT: exp.Intersect,
        SetKind.EXCEPT: exp.Except,
    }
    result: exp.Expression | None = None
    for part in query.inputs:
        own = {a: shown[mine] for a, mine in zip(part.columns, query.columns, strict=True)} if result is None else None
        node = cast(exp.Expression, write_query_node(part, outer, own))
        if isinstance(part, SetQuery) or (isinstance(part, Block) and (part.order or part.count or part.offset)):
            node = exp.Subquery(this=node)
        if result is not None:
            node = cast(exp.Expression, _unalias(cast(exp.Query, node)))
        result = node if result is None else classes[query.kind](this=result, expression=node, distinct=query.distinct)
    assert isinstance(result, exp.Query)
    view = View(places={a: ("", name) for a, name in shown.items()}, lone=True)
    _tail(result, query, view, outer)
    return result


def _select(block: Block, outer: View | None, names: Names | None) -> exp.Query:
    view = _view(block, outer)
    select = exp.Select()
    _from(select, block, view)
    _where(select, "where", exp.Where, block.where, view)
    shown = dict(names or unique_names(block.columns))
    if block.keys is not None:
        _group(select, block, view)
    _where(select, "having", exp.Having, block.having, view)
    if block.keys == () and block.sets is None and not block.having and not reads_aggregates(block):
        # HAVING makes a single group of all rows where no aggregate in sight does (ISO/IEC 9075-2).
        always = exp.GTE(this=exp.Count(this=exp.Star(), big_int=True), expression=exp.Literal.number(0))
        select.set("having", exp.Having(this=always))
    _where(select, "qualify", exp.Qualify, block.qualify, view)
    columns = [_column(attribute, shown[attribute], view) for attribute in block.columns]
    select.set("expressions", columns or [exp.Literal.number(1)])
    if block.distinct:
        select.set("distinct", exp.Distinct())
    ordering = View(
        block, outer, view.places, view.fields, view.lone, view.aliases, {n.lower() for n in shown.values()}
    )
    told = {
        attribute: column.copy() if isinstance(column, exp.Column) else exp.column(_identifier(shown[attribute]))
        for attribute, column in zip(block.columns, columns, strict=True)
    }
    _tail(select, block, ordering, outer, told)
    return select


def _unalias(query: exp.Query) -> exp.Query:
    """The query without names for its columns, where nobody reads them."""
    if isinstance(query, exp.Select) and not query.args.get("order"):
        query.set("expressions", [e.this if isinstance(e, exp.Alias) else e for e in query.expressions])
    return query


def _view(block: Block, outer: View | None) -> View:
    """Chooses the aliases of the block's items, apart from each other and from those of the blocks around."""
    slimmed(block)
    view = View(block, outer)
    taken = set() if outer is None else outer.around()
    _place(block.items, view, taken)
    view.lone = sum(1 for item in block.items for _ in _leaves(item)) == 1 and not _reads_outer(block)
    return view


def _reads_outer(block: Block) -> bool:
    """Whether the block itself reads a row around it; then it says of each column whose it is."""
    conditions = [c for c in (*block.where, *block.having, *block.qualify) if not isinstance(c, SubqueryTerm)]
    scalars = [*conditions, *(Ref(a) for a in block.columns), *block.order, *(item.on for item in block.items)]
    return not leaves(block, scalars) <= block.hidden()


def _leaves(item: Item) -> Iterable[Item]:
    if isinstance(item.body, Nested):
        for inner in item.body.items:
            yield from _leaves(inner)
    else:
        yield item


def _place(items: list[Item], view: View, taken: set[str]) -> None:
    for item in items:
        if isinstance(item.body, Nested):
            _place(item.body.items, view, taken)
            continue
        name = item.alias or _natural_alias(item)
        candidate, number = name, 1
        while candidate.lower() in taken or candidate.lower() in view.aliases:
            number += 1
            candidate = f"{name}_{number}"
        item.alias = candidate
        view.aliases.add(candidate.lower())
        for attribute, column in _item_columns(item).items():
            view.places[attribute] = (candidate, column)
        view.fields.update(zip(item.attributes, item.fields, strict=False))


def _natural_alias(item: Item) -> str:
    match item.body:
        case Relation(name=name) | StepUse(name=name, base=True):
            return name.rpartition(".")[2]
        case StepUse(name=name):
            return name
        case Values():
            return "listed"
        case TableFunction(call=call):
            return call.name
        case Unnest():
            return "element"
        case Block(items=items) if items:
            first = next(iter(_leaves(items[0])))
            return first.alias or _natural_alias(first)
        case _:
            return "part"


def _item_columns(item: Item) -> dict[Attribute, str]:
    match item.body:
        case StepUse(columns=columns):
            return columns
        case Relation(attributes=own):
            return {a: a.name for a in own}
        case Block() | SetQuery():
            return unique_names(item.body.columns)
        case Unnest():
            return _element_columns(item)
        case _:
            return unique_names(item.attributes)


def _element_columns(item: Item) -> dict[Attribute, str]:
    """The columns of an unnested list; elements that are records stand in one column."""
    if not item.fields:
        return unique_names(item.attributes)
    columns = dict.fromkeys(item.attributes[: len(item.fields)], "item")
    return {**columns, **dict.fromkeys(item.attributes[len(item.fields) :], "place")}


def _column(attribute: Attribute, name: str, view: View) -> exp.Expression:
    node = view.name(attribute)
    while isinstance(node, exp.Paren):
        node = node.this
    if isinstance(node, exp.Column) and node.name == name:
        return node
    return exp.Alias(this=node, alias=_identifier(name))


# --- clauses -------------------------------------------------------------------------------------------------------


def _from(select: exp.Select, block: Block, view: View) -> None:
    if not block.items:
        return
    first, *others = block.items
    select.set("from_", exp.From(this=_item(first, view)))
    select.set("joins", [_join(item, view) for item in others])


def _join(item: Item, view: View) -> exp.Join:
    body = item.body
    node = _item(item, view)
    side = {JoinKind.LEFT: "LEFT", JoinKind.RIGHT: "RIGHT", JoinKind.FULL: "FULL"}.get(item.kind)
    if isinstance(body, Unnest):
        if item.kind is JoinKind.LEFT:
            return exp.Join(this=node, side="LEFT", on=exp.true())
        return exp.Join(this=node, kind="CROSS")
    if item.kind is JoinKind.INNER and item.on == TRUE:
        return exp.Join(this=node, kind="CROSS")
    return exp.Join(this=node, side=side, on=write_scalar(item.on, view.name))


def _item(item: Item, view: View) -> exp.Expression:
    alias = exp.TableAlias(this=_identifier(item.alias)) if item.alias else None
    match item.body:
        case Relation(name=name) | StepUse(name=name, base=True):
            table = exp.Table(this=_identifier(name)) if "." not in name else _dotted(name)
            if item.alias.lower() != name.rpartition(".")[2].lower():
                table.set("alias", alias)
            return table
        case StepUse(name=name):
            return exp.Table(this=_identifier(name), alias=alias if item.alias.lower() != name.lower() else None)
        case Nested(items=items):
            return _parenthesised(items, view)
        case Values(attributes=own, rows=rows):
            tuples = [exp.Tuple(expressions=[write_scalar(v, view.name) for v in row]) for row in rows]
            return exp.Values(expressions=tuples, alias=_full_alias(item, unique_names(own)))
        case TableFunction(call=call, attributes=own):
            node = write_scalar(call, view.name)
            return exp.Table(this=node, alias=_full_alias(item, unique_names(own)))
        case Unnest(term=term):
            offset = item.body.position is not None
            node = write_scalar(term, view.name)
            return exp.Unnest(
                expressions=[node], alias=_full_alias(item, _element_columns(item)), offset=offset or None
            )
        case Block() | SetQuery() as query:
            around = view if item.lateral else view.outer
            inner = exp.Subquery(this=write_query_node(query, around), alias=alias)
            return exp.Lateral(this=exp.Subquery(this=inner.this), alias=alias) if item.lateral else inner


def _dotted(name: str) -> exp.Table:
    parts = [_identifier(part) for part in name.split(".")]
    keys = ("this", "db", "catalog")
    return exp.Table(**dict(zip(keys, reversed(parts), strict=False)))


def _full_alias(item: Item, names: Names) -> exp.TableAlias:
    return exp.TableAlias(
        this=_identifier(item.alias), columns=[_identifier(name) for name in dict.fromkeys(names.values())]
    )


def _parenthesised(items: list[Item], view: View) -> exp.Expression:
    first, *others = items
    node = _item(first, view)
    if isinstance(node, exp.Values):
        # Joins of a VALUES node would be printed before its alias.
        alias = node.args["alias"].pop()
        node = exp.Subquery(this=node, alias=alias)
    node.set("joins", [_join(item, view) for item in others])
    return exp.Subquery(this=node)


Clause = Callable[..., exp.Expression]


def _where(select: exp.Select, key: str, clause: Clause, conditions: list[Condition], view: View) -> None:
    if not conditions:
        return
    # Conditions that no subquery is needed for come first; otherwise the order stays as it is.
    plain: list[Scalar] = []
    later: list[Condition] = []
    for condition in conditions:
        if isinstance(condition, SubqueryTerm) or reads_terms(view.block, condition):
            later.append(condition)
        else:
            plain.append(condition)
    terms = written_terms(tuple(plain), view.name) if plain else []
    for condition in later:
        written = isinstance(condition, SubqueryTerm)
        terms.append(write_term(condition, view) if written else write_scalar(condition, view.name))  # type: ignore[arg-type]
    select.set(key, clause(this=chained(exp.And, terms, 3)))


def _group(select: exp.Select, block: Block, view: View) -> None:
    assert block.keys is not None
    written = {key: view.name(key) for key in block.keys}
    for key, node in written.items():
        while isinstance(node, exp.Paren):
            node = node.this
        written[key] = node
    if block.sets is None:
        if block.keys:
            select.set("group", exp.Group(expressions=list(written.values())))
        return
    sets = [exp.Tuple(expressions=[written[key].copy() for key in part]) for part in block.sets]
    select.set("group", exp.Group(expressions=[exp.GroupingSets(expressions=sets)]))


def _tail(
    node: exp.Query,
    query: Query,
    view: View,
    outer: View | None,
    told: Mapping[Attribute, exp.Expression] | None = None,
) -> None:
    """ORDER BY, LIMIT and OFFSET. `told` is how a column of the SELECT list is named there."""
    keys = [key for key in query.order if not isinstance(key.term, Literal)]
    if keys:
        ordered: list[exp.Expression] = []
        for key in keys:
            if told is not None and isinstance(key.term, Ref) and key.term.attribute in told:
                name = told[key.term.attribute]
                ordered.append(exp.Ordered(this=name, desc=key.descending or None, nulls_first=key.nulls_first))
            else:
                ordered.append(write_scalar(key, view.name))
        node.set("order", exp.Order(expressions=ordered))
    free_view = View(outer=outer)
    if query.ties and query.count is not None:
        options = exp.LimitOptions(percent=False, rows=True, with_ties=True)
        count = write_scalar(query.count, free_view.name)
        node.set("limit", exp.Fetch(direction="FIRST", count=count, limit_options=options))
    elif query.count is not None:
        node.set("limit", exp.Limit(expression=write_scalar(query.count, free_view.name)))
    if query.offset is not None:
        node.set("offset", exp.Offset(expression=write_scalar(query.offset, free_view.name)))


# --- subqueries as conditions and values ---------------------------------------------------------------------------


def write_term(term: SubqueryTerm, view: View) -> exp.Expression:
    """EXISTS, IN, NOT IN, a three-valued mark or a scalar subquery."""
    if term.kind is JoinKind.SINGLE:
        assert term.attribute is not None
        return exp.Subquery(this=_unalias(write_query_node(_selecting(term.query, (term.attribute,)), view)))
    if term.kind is JoinKind.SEMI:
        return _membership(term.condition, term.query, view) or _exists(term.query, term.condition, view)
    if term.kind is JoinKind.ANTI:
        match term.condition:
            case Not(term=IsTruth(term=inner, value=False)):
                found = _membership(inner, term.query, view)
                if found is not None:
                    return exp.Not(this=found)
        return exp.Not(this=_exists(term.query, term.condition, view))
    if term.condition == TRUE:
        return _exists(term.query, TRUE, view)
    found = _membership(term.condition, term.query, view)
    if found is not None:
        return found
    holds = _exists(term.query, term.condition, view)
    unknown = _exists(term.query, IsNull(term.condition), view)
    arms = [exp.If(this=holds, true=exp.true()), exp.If(this=unknown, true=exp.Null())]
    return exp.Case(ifs=arms, default=exp.false())


def _membership(condition: Scalar, query: Query, view: View) -> exp.Expression | None:
    """`x IN (SELECT y ...)` for a single equality between something outside and something of the query."""
    match condition:
        case Comparison(operator=ComparisonOperator.EQUAL, left=left, right=right):
            own = set(query.columns)
            if refs(left) & own:
                left, right = right, left
            inner = refs(right)
            if refs(left) & own or not isinstance(right, Ref) or not inner <= own:
                return None
            node = _unalias(write_query_node(_selecting(query, (right.attribute,)), view))
            return exp.In(this=within(write_scalar(left, view.name), 5), query=exp.Subquery(this=node))
    return None


def _selecting(query: Query, columns: tuple[Attribute, ...]) -> Query:
    if query.columns == columns:
        return query
    if isinstance(query, SetQuery) or query.distinct:
        query = derived(query)
    return _copy(query, columns)


def _copy(block: Query, columns: tuple[Attribute, ...]) -> Block:
    assert isinstance(block, Block)
    made = copy(block)
    made.columns = columns
    made.items = [copy(item) for item in block.items]
    return made


def _exists(query: Query, condition: Scalar, view: View) -> exp.Expression:
    terms = list(conjuncts(condition))
    if isinstance(query, SetQuery) or query.stage > Stage.HAVING:
        if not terms:
            return exp.Exists(this=write_query_node(query, view))
        query = derived(query)
    block = _copy(query, ())
    if query.stage >= Stage.GROUP:
        block.having = [*query.having, *terms]
    else:
        block.where = [*query.where, *terms]
    return exp.Exists(this=_select(block, view, None))


def steps_node(steps: list[StepDefinition]) -> exp.With | None:
    """WITH, in order of definition."""
    if not steps:
        return None
    written = []
    for step in steps:
        names = list(step.columns.values())
        query = step.query
        columns = None
        if isinstance(query, SetQuery):
            shown = dict(zip(query.columns, names, strict=True))
            node = write_query_node(query, None, shown)
            columns = [_identifier(name) for name in names] if step.recursive else None
        else:
            node = write_query_node(query, None, step.columns)
        alias = exp.TableAlias(this=_identifier(step.name), columns=columns)
        written.append(exp.CTE(this=node, alias=alias))
    return exp.With(expressions=written, recursive=any(step.recursive for step in steps))
