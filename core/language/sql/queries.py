"""Queries read into operator graphs: SELECT, set operations, common table expressions, ordering and limits."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from sqlglot import exp

from core.algebra.graph import attributes
from core.algebra.operators import (
    Column,
    Distinct,
    Fixpoint,
    Limit,
    Operator,
    Project,
    Recurrence,
    Select,
    SetKind,
    SetOperation,
    Sort,
    Window,
    WindowColumn,
)
from core.algebra.scalars import (
    Aggregate,
    Attribute,
    ComparisonOperator,
    Literal,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    fresh,
    fresh_key,
    fresh_like,
    substitute,
)
from core.algebra.types import BIGINT, INTEGER, Type, common_type
from core.algebra.typing import type_of
from core.language.sql import expressions, grouping
from core.language.sql.from_items import filter_plan, read_from, values_result
from core.language.sql.reading import NOTHING, Block, Reading
from core.language.sql.scope import Environment, Result, Scope, Step

_SELECT_PARTS = frozenset(
    "with_ expressions distinct from_ joins laterals where group having qualify windows order limit offset kind".split()
)
_SET_PARTS = frozenset("with_ this expression distinct by_name order limit offset".split())
_SUBQUERY_PARTS = frozenset("with_ this alias order limit offset joins".split())
_SET_KINDS: dict[type[exp.Expression], SetKind] = {
    exp.Union: SetKind.UNION,
    exp.Intersect: SetKind.INTERSECT,
    exp.Except: SetKind.EXCEPT,
}


def read_query(node: exp.Expression, environment: Environment, outer: Block | None, reading: Reading) -> Result:
    """The result of any query. `outer` is the block around a subquery, whose columns it may read."""
    if isinstance(node, exp.Paren):
        return read_query(node.this, environment, outer, reading)
    with_ = node.args.get("with_")
    if with_ is not None:
        environment = _with_steps(with_, environment, outer, reading)
    if isinstance(node, exp.Select):
        _only(node, _SELECT_PARTS, reading)
        return _select(node, environment, outer, reading)
    if isinstance(node, exp.SetOperation):
        _only(node, _SET_PARTS, reading)
        return _ordered(node, _set_operation(node, environment, outer, reading), environment, outer, reading)
    if isinstance(node, exp.Subquery):
        _only(node, _SUBQUERY_PARTS, reading)
        if isinstance(node.this, exp.Table):
            star = exp.select("*").from_(node.this)
            return read_query(star, environment, outer, reading)
        return _ordered(node, read_query(node.this, environment, outer, reading), environment, outer, reading)
    if isinstance(node, exp.Values):
        return values_result(node, Block(reading, environment, Scope(), NOTHING, outer))
    if isinstance(node, exp.Table):
        star = exp.select("*").from_(node)
        return read_query(star, environment, outer, reading)
    raise reading.refuse(f"a {node.key} is no query", node)


def _only(node: exp.Expression, handled: frozenset[str], reading: Reading) -> None:
    """Refuses a query with a clause that would otherwise be lost."""
    for key, value in node.args.items():
        if value and key not in handled:
            found = value[0] if isinstance(value, list) else value
            where = found if isinstance(found, exp.Expression) else node
            raise reading.refuse(f"the clause {key.rstrip('_').upper()} is not represented", where)


# --- common table expressions -------------------------------------------------------------------------------------


def _with_steps(with_: exp.Expression, outer_env: Environment, outer: Block | None, reading: Reading) -> Environment:
    environment = Environment(outer_env)
    for part in ("search", "cycle", "udfs"):
        if with_.args.get(part):
            raise reading.refuse(f"WITH ... {part.upper()}", with_)
    for cte in with_.expressions:
        name = cte.alias
        columns = [column.name for column in cte.args["alias"].args.get("columns") or []]
        if with_.args.get("recursive") and _refers_to(cte.this, name):
            result = _fixpoint(cte.this, name, columns, environment, outer, reading)
        else:
            result = _named(read_query(cte.this, environment, outer, reading), columns, cte, reading)
        reading.names.setdefault(result.plan, name)
        uses = reading.step_uses.get(name.lower(), 0) - _references(cte.this, name)
        environment.steps[name.lower()] = Step(name, result, uses)
    return environment


def _named(result: Result, columns: list[str], node: exp.Expression, reading: Reading) -> Result:
    """The result with the column names of `WITH name (a, b)`."""
    if len(columns) > len(result.columns):
        raise reading.refuse(f"{len(columns)} column names for {len(result.columns)} columns", node)
    renamed = [(a, columns[i] if i < len(columns) else name) for i, (a, name) in enumerate(result.columns)]
    return Result(result.plan, tuple(renamed))


def _references(node: exp.Expression, name: str) -> int:
    """How often a query reads a relation of this name."""
    return sum(1 for t in node.find_all(exp.Table) if t.name.lower() == name.lower() and not t.args.get("db"))


def _refers_to(node: exp.Expression, name: str) -> bool:
    return _references(node, name) > 0


def _fixpoint(
    node: exp.Expression,
    name: str,
    columns: list[str],
    environment: Environment,
    outer: Block | None,
    reading: Reading,
) -> Result:
    """WITH RECURSIVE: the left side of the UNION is the base, the right side the step."""
    if not isinstance(node, exp.Union) or _refers_to(node.this, name):
        raise reading.refuse(f"{name} is recursive, but not as base UNION step", node)
    if any(node.args.get(key) for key in ("order", "limit", "offset", "with_")):
        raise reading.refuse("ORDER BY, LIMIT or WITH on a recursive union", node)
    base = _named(read_query(node.this, environment, outer, reading), columns, node, reading)
    key = fresh_key()
    own = tuple((fresh_like(a, column), column) for a, column in base.columns)

    def so_far() -> Result:
        again = tuple((fresh_like(a, column), column) for a, column in own)
        return Result(Recurrence(name, tuple(a for a, _ in again), key), again)

    inner = Environment(environment, {name.lower(): so_far})
    step = read_query(node.expression, inner, outer, reading)
    if len(step.columns) != len(own):
        raise reading.refuse(f"the step of {name} has {len(step.columns)} columns, its base {len(own)}", node)
    sources = (tuple(a for a, _ in base.columns), tuple(a for a, _ in step.columns))
    distinct = bool(node.args.get("distinct", True))
    plan = Fixpoint(base.plan, step.plan, sources, tuple(a for a, _ in own), key, distinct, name)
    reading.mark(plan, node)
    return Result(plan, own)


# --- set operations -----------------------------------------------------------------------------------------------


def _set_operation(node: exp.SetOperation, environment: Environment, outer: Block | None, reading: Reading) -> Result:
    """A chain of set operations, left to right; a run of unions of one kind is one operator."""
    chain: list[exp.SetOperation] = [node]
    left: exp.Expression = node.this
    while isinstance(left, exp.SetOperation) and not any(
        left.args.get(k) for k in ("order", "limit", "offset", "with_")
    ):
        _only(left, _SET_PARTS, reading)
        chain.append(left)
        left = left.this
    result = read_query(left, environment, outer, reading)
    pending: list[Result] = [result]
    kind: SetKind | None = None
    distinct = by_name = False
    for link in reversed(chain):
        key = (_SET_KINDS[type(link)], bool(link.args.get("distinct")), bool(link.args.get("by_name")))
        same = key[0] is kind is SetKind.UNION and key[1:] == (distinct, by_name)
        if len(pending) > 1 and not same:
            assert kind is not None
            pending = [_combined(kind, distinct, by_name, pending, link.this, reading)]
        kind, distinct, by_name = key
        pending.append(read_query(link.expression, environment, outer, reading))
    assert kind is not None
    return _combined(kind, distinct, by_name, pending, node, reading)


def _combined(
    kind: SetKind, distinct: bool, by_name: bool, parts: list[Result], node: exp.Expression, reading: Reading
) -> Result:
    if by_name:
        parts = _by_name(parts, node, reading)
    width = len(parts[0].columns)
    for part in parts:
        if len(part.columns) != width:
            raise reading.refuse(f"{kind.value} of {width} with {len(part.columns)} columns", node)
    columns = []
    for i, (first, name) in enumerate(parts[0].columns):
        type_ = first.type
        for part in parts[1:]:
            type_ = common_type(type_, part.columns[i][0].type)
        columns.append((fresh(name, type_), name))
    plan = SetOperation(
        kind,
        tuple(part.plan for part in parts),
        tuple(tuple(a for a, _ in part.columns) for part in parts),
        tuple(a for a, _ in columns),
        distinct,
    )
    reading.mark(plan, node)
    return Result(plan, tuple(columns))


def _by_name(parts: list[Result], node: exp.Expression, reading: Reading) -> list[Result]:
    """UNION BY NAME: columns matched by name; a side that lacks one gives NULL."""
    names = list(dict.fromkeys(name.lower() for part in parts for _, name in part.columns))
    shown = {name.lower(): name for part in reversed(parts) for _, name in part.columns}
    matched = []
    for part in parts:
        own = {name.lower(): a for a, name in part.columns}
        missing = {name: fresh(shown[name], next(_types(parts, name))) for name in names if name not in own}
        plan = part.plan
        if missing:
            kept = tuple(Column(a, Ref(a)) for a in attributes(plan))
            added = tuple(Column(a, Literal(None, a.type)) for a in missing.values())
            plan = Project(plan, kept + added)
            reading.mark(plan, node)
        matched.append(Result(plan, tuple(({**own, **missing}[name], shown[name]) for name in names)))
    return matched


def _types(parts: list[Result], name: str) -> Iterator[Type]:
    return (a.type for part in parts for a, other in part.columns if other.lower() == name)


# --- ordering and limits ------------------------------------------------------------------------------------------


def _ordered(
    node: exp.Expression, result: Result, environment: Environment, outer: Block | None, reading: Reading
) -> Result:
    """ORDER BY, OFFSET and LIMIT over a set operation or a parenthesised query: only output columns are in view."""
    order = node.args.get("order")
    plan = result.plan
    if order is not None:
        block = Block(reading, environment, _output_scope(result), plan, outer)
        keys = []
        for ordered in order.expressions:
            place = _output_place(ordered.this, [name for _, name in result.columns], reading)
            term = Ref(result.columns[place][0]) if place is not None else expressions.read_scalar(ordered.this, block)
            keys.append(grouping.sort_key(ordered, term))
        plan = Sort(block.plan, tuple(keys))
        reading.mark(plan, order)
    return Result(_limited(node, plan, environment, outer, reading), result.columns)


def _output_scope(result: Result) -> Scope:
    from core.language.sql.reading import source_of
    from core.language.sql.scope import scope_of

    return scope_of(source_of("", result))


def _output_place(node: exp.Expression, names: list[str], reading: Reading) -> int | None:
    """Which output column an ORDER BY term names, by number or by name; None for an expression."""
    if isinstance(node, exp.Literal) and not node.is_string and node.this.isdigit():
        place = int(node.this)
        if not 1 <= place <= len(names):
            raise reading.refuse(f"there is no column {place}: the list has {len(names)}", node)
        return place - 1
    if isinstance(node, exp.Column) and not node.table:
        folded = [name.lower() for name in names]
        if node.name.lower() in folded:
            return folded.index(node.name.lower())
    return None


def _limited(
    node: exp.Expression, plan: Operator, environment: Environment, outer: Block | None, reading: Reading
) -> Operator:
    limit, offset = node.args.get("limit"), node.args.get("offset")
    if limit is None and offset is None:
        return plan
    block = Block(reading, environment, Scope(), NOTHING, None)
    count: Scalar | None = None
    ties = False
    if limit is not None:
        options = limit.args.get("limit_options")
        if options is not None and options.args.get("percent"):
            raise reading.refuse("a limit in per cent", limit)
        if limit.args.get("expressions"):
            raise reading.refuse("LIMIT BY", limit)
        ties = options is not None and bool(options.args.get("with_ties"))
        amount = limit.args.get("count") if isinstance(limit, exp.Fetch) else limit.args.get("expression")
        count = Literal("1", INTEGER) if amount is None else expressions.read_scalar(amount, block)
        offset = offset or limit.args.get("offset")
    skipped = None
    if offset is not None:
        inner = offset.args["expression"] if isinstance(offset, exp.Offset) else offset
        skipped = expressions.read_scalar(inner, block)
    if block.plan is not NOTHING:
        raise reading.refuse("a subquery as LIMIT or OFFSET", limit or offset)
    return reading.mark(Limit(plan, count, skipped, ties), limit, offset)


# --- select -------------------------------------------------------------------------------------------------------


@dataclass(slots=True)
class _Item:
    """A column of the SELECT list: its name, its value, and the expression it was written as."""

    name: str
    value: Scalar
    node: exp.Expression | None


def _select(node: exp.Select, environment: Environment, outer: Block | None, reading: Reading) -> Result:
    if node.args.get("kind"):
        raise reading.refuse(f"SELECT AS {node.args['kind']}", node)
    if not node.expressions:
        raise reading.refuse("nothing is selected", node, help="name the columns after SELECT")
    block = Block(reading, environment, Scope(), NOTHING, outer)
    read_from(node, block)
    block.select_aliases = {item.alias.lower(): item.this for item in node.expressions if isinstance(item, exp.Alias)}
    nodes = _expand_aliases(node, block)
    where = node.args.get("where")
    if where is not None:
        filter_plan(nodes.get("where", where.this), block)
    items, order, having, qualify = _after_parts(node, nodes)
    used = [*items, *([having] if having is not None else []), *([qualify] if qualify is not None else []), *order]
    grouping.group_block(node, block, used, items)
    if having is not None:
        filter_plan(having, block)
    grouping.add_windows(node, block, used)
    if qualify is not None:
        filter_plan(qualify, block)
    columns = [column for item in items for column in _read_item(item, block)]
    return _finish(node, columns, order, block)


def _after_parts(
    node: exp.Select, nodes: dict[str, exp.Expression]
) -> tuple[list[exp.Expression], list[exp.Expression], exp.Expression | None, exp.Expression | None]:
    """SELECT list, ORDER BY terms, HAVING and QUALIFY, with select aliases already spelt out."""
    having, qualify, order = node.args.get("having"), node.args.get("qualify"), node.args.get("order")
    terms = [] if order is None else list(order.expressions)
    return (
        list(node.expressions),
        terms,
        None if having is None else nodes.get("having", having.this),
        None if qualify is None else nodes.get("qualify", qualify.this),
    )


def _expand_aliases(node: exp.Select, block: Block) -> dict[str, exp.Expression]:
    """Spells out select aliases used in WHERE, HAVING, QUALIFY, GROUP BY and later columns (a column goes first).

    The replacement is made in the tree, which belongs to this reading alone.
    """
    if not block.select_aliases:
        return {}
    found: dict[str, exp.Expression] = {}
    for key in ("where", "having", "qualify"):
        clause = node.args.get(key)
        if clause is not None:
            clause.set("this", _spelt_out(clause.this, block, set()))
            found[key] = clause.this
    group = node.args.get("group")
    if group is not None:
        group.set("expressions", [_spelt_out(part, block, set()) for part in group.expressions])
    for item in node.expressions:
        if isinstance(item, exp.Alias):
            item.set("this", _spelt_out(item.this, block, {item.alias.lower()}))
    order = node.args.get("order")
    if order is not None:
        for ordered in order.expressions:
            if not isinstance(ordered.this, exp.Column):
                ordered.set("this", _spelt_out(ordered.this, block, set()))
    return found


def _spelt_out(root: exp.Expression, block: Block, busy: set[str]) -> exp.Expression:
    def is_alias(column: exp.Expression) -> bool:
        return (
            isinstance(column, exp.Column)
            and not column.table
            and column.name.lower() in block.select_aliases
            and column.name.lower() not in busy
            and not block.scope.named(column.name)
        )

    def replacement(column: exp.Expression) -> exp.Expression:
        name = column.name.lower()
        inner = block.select_aliases[name].copy()
        return exp.Paren(this=_spelt_out(inner, block, busy | {name}))

    if is_alias(root):
        return replacement(root)
    pending = [root]
    while pending:
        node = pending.pop()
        for part in list(node.iter_expressions()):
            if isinstance(part, exp.Query):
                continue
            if is_alias(part):
                part.replace(replacement(part))
            else:
                pending.append(part)
    return root


def _read_item(item: exp.Expression, block: Block) -> list[_Item]:
    star = item.this if isinstance(item, exp.Column) and isinstance(item.this, exp.Star) else item
    if isinstance(star, exp.Star):
        return _star(item, star, block)
    value_node = item.this if isinstance(item, exp.Alias) else item
    if isinstance(item, exp.Aliases):
        raise block.reading.refuse("several aliases for one column", item)
    value = expressions.read_scalar(value_node, block)
    return [_Item(grouping.column_name(item), value, item)]


def _star(item: exp.Expression, star: exp.Star, block: Block) -> list[_Item]:
    """The columns of `*` or `t.*`, with EXCLUDE and REPLACE."""
    reading = block.reading
    if isinstance(item, exp.Column) and item.table:
        source = block.scope.source(item.table)
        if source is None:
            raise reading.refuse(f"no item of FROM is called {item.table}", item)
        sources, shown = [source], source.shown
    else:
        sources, shown = block.scope.sources, block.scope.shown
    for source in sources:
        if source.infer is not None:
            raise reading.refuse(
                f"the columns of {source.alias} are not known, so * cannot be spelt out",
                item,
                help=f"describe {source.alias} in the catalog, or name the columns",
            )
    if not shown:
        raise reading.refuse("a star without FROM", item)
    excluded = {column.name.lower() for column in star.args.get("except_") or []}
    replaced = {alias.alias.lower(): alias.this for alias in star.args.get("replace") or []}
    renamed = {alias.this.name.lower(): alias.alias for alias in star.args.get("rename") or []}
    names = {column.name.lower() for column in shown}
    for name in (*excluded, *replaced, *renamed):
        if name not in names:
            raise reading.refuse(f"the star has no column {name}", item)
    found = []
    for column in shown:
        folded = column.name.lower()
        if folded in excluded:
            continue
        if folded in replaced:
            found.append(_Item(column.name, expressions.read_scalar(replaced[folded], block), item))
            continue
        value = column.value if block.keys is None else grouping.grouped_value(block, column.value, item)
        found.append(_Item(renamed.get(folded, column.name), value, None))
    return found


def _finish(node: exp.Select, items: list[_Item], order: list[exp.Expression], block: Block) -> Result:
    """DISTINCT, the projection, ORDER BY (which may read what is not shown) and LIMIT."""
    reading = block.reading
    distinct = node.args.get("distinct")
    terms: list[tuple[exp.Expression, int | Scalar]] = []
    names = [item.name for item in items]
    if node.args.get("order") is not None and _orders_all(order):
        terms = [(order[0], i) for i in range(len(items))]
    else:
        for ordered in order:
            place = _output_place(ordered.this, names, reading)
            terms.append((ordered, place if place is not None else expressions.read_scalar(ordered.this, block)))
    columns = _columns(items)
    keys, hidden = _order_keys(terms, items, columns, distinct, reading)
    on = None if distinct is None else distinct.args.get("on")
    if on is not None:
        return _distinct_on(node, on, items, columns, hidden, keys, block)
    plan = _projected(block, [*columns, *hidden], node)
    if distinct is not None:
        plan = Distinct(plan)
        reading.mark(plan, *node.expressions)
    if keys:
        plan = Sort(plan, keys)
        reading.mark(plan, *order)
    plan = _limited(node, plan, block.environment, block.outer, reading)
    return Result(plan, tuple((c.attribute, item.name) for c, item in zip(columns, items, strict=True)))


def _orders_all(order: list[exp.Expression]) -> bool:
    """DuckDB's ORDER BY ALL."""
    if len(order) != 1 or not isinstance(order[0].this, (exp.Column, exp.Var)):
        return False
    inner = order[0].this
    return isinstance(inner, exp.Var) and inner.name.lower() == "all"


def _columns(items: list[_Item]) -> list[Column]:
    """The projection's columns: one that only passes on an attribute under its own name keeps its identity."""
    used: set[Attribute] = set()
    columns = []
    for item in items:
        value = item.value
        if isinstance(value, Ref) and value.attribute.name == item.name and value.attribute not in used:
            attribute = value.attribute
        else:
            attribute = fresh(item.name, type_of(value))
        used.add(attribute)
        columns.append(Column(attribute, value))
    return columns


def _order_keys(
    terms: list[tuple[exp.Expression, int | Scalar]],
    items: list[_Item],
    columns: list[Column],
    distinct: exp.Expression | None,
    reading: Reading,
) -> tuple[tuple[SortKey, ...], list[Column]]:
    keys, hidden = [], []
    by_value = {item.value: column.attribute for item, column in reversed(list(zip(items, columns, strict=True)))}
    taken = {column.attribute for column in columns}
    for ordered, term in terms:
        if isinstance(term, int):
            keys.append(grouping.sort_key(ordered, Ref(columns[term].attribute)))
            continue
        if isinstance(term, Literal):
            continue
        attribute = by_value.get(term)
        if attribute is None:
            if distinct is not None and distinct.args.get("on") is None:
                raise reading.refuse("with DISTINCT, ORDER BY can only name columns that are selected", ordered)
            free_name = isinstance(term, Ref) and term.attribute not in taken
            attribute = term.attribute if free_name and isinstance(term, Ref) else fresh("sort_key", type_of(term))
            hidden.append(Column(attribute, term))
            by_value[term] = attribute
            taken.add(attribute)
        keys.append(grouping.sort_key(ordered, Ref(attribute)))
    return tuple(keys), hidden


def _projected(block: Block, columns: list[Column], node: exp.Select) -> Operator:
    """The plan with these columns; no projection where it would keep everything as it is."""
    own = attributes(block.plan)
    if tuple(c.attribute for c in columns) == own and all(c.value == Ref(c.attribute) for c in columns):
        return block.plan
    plan = Project(block.plan, tuple(columns))
    return block.reading.mark(plan, *node.expressions)


def _distinct_on(
    node: exp.Select,
    on: exp.Expression,
    items: list[_Item],
    columns: list[Column],
    hidden: list[Column],
    keys: tuple[SortKey, ...],
    block: Block,
) -> Result:
    """DISTINCT ON keeps the first row of each group under the ORDER BY: row_number() = 1."""
    reading = block.reading
    terms = on.expressions if isinstance(on, exp.Tuple) else [on]
    names = [item.name for item in items]
    values: list[Scalar] = []
    for term in terms:
        place = _output_place(term, names, reading) if not isinstance(term, exp.Column) else None
        values.append(items[place].value if place is not None else expressions.read_scalar(term, block))
    by_attribute = {column.attribute: column.value for column in (*columns, *hidden)}
    order = tuple(substitute(key, by_attribute) for key in keys)
    first = fresh("place", BIGINT)
    call = WindowCall(Aggregate("row_number", (), BIGINT), tuple(values), order)
    plan: Operator = Window(block.plan, (WindowColumn(first, call),))
    reading.mark(plan, *terms)
    plan = Select(plan, expressions.compare(ComparisonOperator.EQUAL, Ref(first), Literal("1", INTEGER)))
    reading.mark(plan, *terms)
    plan = Project(plan, (*columns, *hidden))
    reading.mark(plan, *node.expressions)
    if keys:
        plan = Sort(plan, keys)
        reading.mark(plan, node.args.get("order"))
    plan = _limited(node, plan, block.environment, block.outer, reading)
    return Result(plan, tuple((c.attribute, item.name) for c, item in zip(columns, items, strict=True)))
