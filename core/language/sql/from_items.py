"""FROM: relations, derived tables, joins of every kind, lateral items."""

from __future__ import annotations

from dataclasses import dataclass

from sqlglot import exp

from core.algebra.graph import free
from core.algebra.operators import (
    Column,
    Join,
    JoinKind,
    Operator,
    Project,
    Relation,
    Select,
    TableFunction,
    Unnest,
    Values,
)
from core.algebra.scalars import (
    TRUE,
    Attribute,
    Call,
    ComparisonOperator,
    Ref,
    Scalar,
    conjunction,
    fresh,
    fresh_like,
)
from core.algebra.types import BIGINT, UNKNOWN, common_type
from core.algebra.typing import type_of
from core.language.diagnostic import nearest
from core.language.sql import expressions, subqueries
from core.language.sql.reading import NOTHING, Block, source_of
from core.language.sql.scope import Result, Scope, Shown, Source, Step, scope_of


@dataclass(slots=True)
class Item:
    """A part of FROM: its plan, and what it shows."""

    plan: Operator
    scope: Scope


def read_from(select: exp.Select, block: Block) -> None:
    """Reads FROM and its joins into the block's plan and scope.

    The comma binds less tightly than JOIN: `a, b LEFT JOIN c` is the product of a with (b LEFT JOIN c).
    """
    first = select.args.get("from_")
    joins = list(select.args.get("joins") or [])
    if first is None:
        if joins:
            raise block.reading.refuse("a join without FROM", select)
        return
    total: Item | None = None
    current: Item | None = _item(first.this, block, None)
    for join in joins:
        if _is_comma(join):
            total = _product(total, current, block)
            current = _comma_item(join.this, block, total)
            if isinstance(join.this, exp.Unnest):
                total = None
            continue
        assert current is not None
        current = _join(join, current, block, None if total is None else total.scope)
    total = _product(total, current, block)
    for lateral in select.args.get("laterals") or []:
        total = _lateral_onto(lateral, total, block, JoinKind.INNER)
    block.plan, block.scope = total.plan, total.scope
    _check_aliases(block, first)


def _is_comma(join: exp.Expression) -> bool:
    decided = ("on", "side", "kind", "using", "method", "match_condition")
    return not any(join.args.get(key) for key in decided)


def _product(left: Item | None, right: Item | None, block: Block) -> Item:
    if left is None or right is None:
        found = right if left is None else left
        assert found is not None
        return found
    return Item(Join(JoinKind.INNER, left.plan, right.plan, TRUE), left.scope.beside(right.scope))


def _comma_item(node: exp.Expression, block: Block, left: Item) -> Item:
    """An item of a comma list: it may read the items before it where it is lateral, or an UNNEST."""
    if isinstance(node, exp.Unnest):
        return _unnest(node, left, block, keep_empty=False)
    return _item(node, block, left)


def _check_aliases(block: Block, node: exp.Expression) -> None:
    seen: set[str] = set()
    for source in block.scope.sources:
        folded = source.alias.lower()
        if folded and folded in seen:
            block.reading.error(
                "repeated-alias", f"two items of FROM are called {source.alias}", node, help="give one an alias"
            )
        seen.add(folded)


def _item(node: exp.Expression, block: Block, left: Item | None) -> Item:
    """One item of FROM, with the joins that stand in its own parentheses."""
    if node.args.get("pivots"):
        raise block.reading.refuse("PIVOT and UNPIVOT", node)
    if node.args.get("sample"):
        raise block.reading.refuse("TABLESAMPLE", node)
    if isinstance(node, exp.Table):
        item = _table(node, block, left)
    elif isinstance(node, exp.Subquery):
        item = _subquery(node, block, left)
    elif isinstance(node, exp.Lateral):
        item = _lateral_item(node, block, left)
    elif isinstance(node, exp.Unnest):
        item = _unnest(node, Item(NOTHING, Scope()), block, keep_empty=False)
    elif isinstance(node, exp.Values):
        item = _derived(node, _read(node, block, None), _alias(node), block)
    elif isinstance(node, exp.Query):
        item = _derived(node, _read(node, block, left), _alias(node), block)
    else:
        raise block.reading.refuse(f"{node.key} in FROM", node)
    for join in node.args.get("joins") or []:
        item = _join(join, item, block, None if left is None else left.scope)
    return item


def _read(query: exp.Expression, block: Block, left: Item | None) -> Result:
    """A query in FROM. It sees the queries around; the items to its left only where they are given (lateral)."""
    if left is None:
        return block.reading.read_query(query, block.environment, block.outer)
    around = Block(block.reading, block.environment, left.scope, left.plan, block.outer)
    return block.reading.read_query(query, block.environment, around)


def _alias(node: exp.Expression) -> tuple[str, list[str]]:
    alias = node.args.get("alias")
    if not isinstance(alias, exp.TableAlias):
        return (alias.name if isinstance(alias, exp.Expression) else "", [])
    return alias.name, [column.name for column in alias.args.get("columns") or []]


def _derived(node: exp.Expression, result: Result, alias: tuple[str, list[str]], block: Block) -> Item:
    name, columns = alias
    if len(columns) > len(result.columns):
        raise block.reading.refuse(f"{len(columns)} column names for {len(result.columns)} columns", node)
    renamed = tuple(
        (attribute, columns[i] if i < len(columns) else old) for i, (attribute, old) in enumerate(result.columns)
    )
    if name:
        block.reading.aliases.setdefault(result.plan, name)
    return Item(result.plan, scope_of(source_of(name, Result(result.plan, renamed))))


def _subquery(node: exp.Subquery, block: Block, left: Item | None) -> Item:
    inner = node.this
    if (isinstance(inner, (exp.Table, exp.Subquery)) and not isinstance(inner, exp.Query)) or (
        isinstance(inner, exp.Subquery) and inner.args.get("joins")
    ):
        item = _item(inner, block, left)
        name, columns = _alias(node)
        if not name:
            return item
        flat = tuple((_as_attribute(shown.value, item), shown.name) for shown in item.scope.shown)
        return _derived(node, Result(item.plan, flat), (name, columns), block)
    # DuckDB lets a derived table read the items before it, with or without LATERAL.
    lateral = left if block.reading.dialect == "duckdb" else None
    result = _read(node, block, lateral)
    return _derived(node, result, _alias(node), block)


def _as_attribute(value: Scalar, item: Item) -> Attribute:
    """The attribute of a shown column; a merged one (COALESCE of a full join) is computed first."""
    if isinstance(value, Ref):
        return value.attribute
    merged = fresh("merged", type_of(value))
    own = item.plan.columns if isinstance(item.plan, Project) else ()
    for column in own:
        if column.value == value:
            return column.attribute
    from core.algebra.graph import attributes

    kept = tuple(Column(a, Ref(a)) for a in attributes(item.plan))
    item.plan = Project(item.plan, (*kept, Column(merged, value)))
    return merged


def _table(node: exp.Table, block: Block, left: Item | None) -> Item:
    if isinstance(node.this, exp.Func):
        return _table_function(node, block, left)
    name = ".".join(part.name for part in node.parts)
    alias, columns = _alias(node)
    if len(node.parts) == 1:
        step = block.environment.find(name)
        if step is not None:
            return _derived(node, _use_of(step, alias or name, block, node), (alias or name, columns), block)
    return _relation(node, name, alias, columns, block)


def _use_of(step: object, alias: str, block: Block, node: exp.Expression) -> Result:
    """One use of a step: the step itself where it is the only one, else a renaming over the shared operator."""
    if not isinstance(step, Step):
        assert callable(step)
        found = step()
        assert isinstance(found, Result)
        block.reading.mark(found.plan, node)
        return found
    if step.uses == 1:
        if alias.lower() != step.name.lower():
            block.reading.aliases.setdefault(step.result.plan, alias)
        return step.result
    columns = tuple((fresh_like(attribute, name), name) for attribute, name in step.result.columns)
    pairs = zip(columns, step.result.columns, strict=True)
    plan = Project(step.result.plan, tuple(Column(new, Ref(old)) for (new, _), (old, _) in pairs))
    block.reading.aliases[plan] = alias
    block.reading.mark(plan, node)
    return Result(plan, columns)


def _relation(node: exp.Table, name: str, alias: str, columns: list[str], block: Block) -> Item:
    reading = block.reading
    facts = reading.catalog.relation(name)
    label = alias or node.name
    if facts is not None:
        attributes = tuple(fresh(a.name, a.type) for a in facts.attributes)
        plan = Relation(facts.name, attributes, label)
        reading.mark(plan, node)
        result = Result(plan, tuple((a, a.name) for a in attributes))
        item = _derived(node, result, (label, columns), block)
        reading.aliases.pop(plan, None)
        return item
    if len(reading.catalog):
        meant = nearest(name, (known.name for known in reading.catalog))
        reading.note(
            "unknown-relation",
            f"the catalog has no relation {name}; its columns are inferred from use",
            node.this,
            help=f"did you mean {meant}?" if meant else "",
        )
    return _inferred_relation(node, name, label, columns, block)


def _inferred_relation(node: exp.Expression, name: str, label: str, columns: list[str], block: Block) -> Item:
    """A relation that no catalog describes: its columns are those that the text uses, found by earlier passes."""
    known = block.reading.inferred.setdefault(name.lower(), {})
    for column in columns:
        known.setdefault(column.lower(), column)
    attributes = tuple(fresh(column, UNKNOWN) for column in known.values())
    plan = Relation(name, attributes, label)
    block.reading.mark(plan, node)
    source = Source(label, [Shown(a.name, Ref(a), label) for a in attributes])

    def infer(column: str) -> Scalar:
        # The next pass has it among the relation's attributes; this pass only has to go on.
        known.setdefault(column.lower(), column)
        return Ref(fresh(column, UNKNOWN))

    source.infer = infer
    return Item(plan, scope_of(source))


def _table_function(node: exp.Table, block: Block, left: Item | None) -> Item:
    around = Block(block.reading, block.environment, Scope() if left is None else left.scope, NOTHING, block.outer)
    call = expressions.read_scalar(node.this, around)
    if not isinstance(call, Call):
        raise block.reading.refuse("this is no table function", node)
    if node.args.get("ordinality"):
        raise block.reading.refuse("WITH ORDINALITY of a table function", node)
    alias, columns = _alias(node)
    label = alias or call.name
    if call.name in ("generate_series", "range"):
        shown = tuple(fresh(columns[0] if columns else call.name, BIGINT) for _ in (0,))
        plan = TableFunction(call, shown, label)
        block.reading.mark(plan, node)
        return Item(plan, scope_of(Source(label, [Shown(a.name, Ref(a), label) for a in shown])))
    known = block.reading.inferred.setdefault(f"{call.name}:{hash(call)}", {})
    for column in columns:
        known.setdefault(column.lower(), column)
    attributes = tuple(fresh(column, UNKNOWN) for column in known.values())
    plan = TableFunction(call, attributes, label)
    block.reading.mark(plan, node)

    def infer(column: str) -> Scalar:
        known.setdefault(column.lower(), column)
        return Ref(fresh(column, UNKNOWN))

    return Item(plan, scope_of(Source(label, [Shown(a.name, Ref(a), label) for a in attributes], infer)))


def _unnest(node: exp.Unnest, left: Item, block: Block, keep_empty: bool) -> Item:
    """UNNEST beside the items before it."""
    if len(node.expressions) != 1:
        raise block.reading.refuse("UNNEST of several lists at once", node)
    around = Block(block.reading, block.environment, left.scope, left.plan, block.outer)
    term = expressions.read_scalar(node.expressions[0], around)
    alias, columns = _alias(node)
    names = columns or [alias or "unnest"]
    attributes = (fresh(names[0], UNKNOWN),)
    offset = node.args.get("offset")
    position = fresh(names[1] if len(names) > 1 else "ordinality", BIGINT) if offset else None
    if len(names) > (2 if offset else 1):
        raise block.reading.refuse("UNNEST into several columns", node)
    plan = Unnest(around.plan, term, attributes, position, keep_empty)
    block.reading.mark(plan, node)
    label = alias or "unnest"
    shown = [Shown(a.name, Ref(a), label) for a in (*attributes, *(() if position is None else (position,)))]
    return Item(plan, left.scope.beside(scope_of(Source(label, shown))))


def _lateral_item(node: exp.Lateral, block: Block, left: Item | None) -> Item:
    inner = node.this
    if isinstance(inner, exp.Subquery):
        return _derived(node, _read(inner, block, left), _alias(node), block)
    raise block.reading.refuse("LATERAL over anything but a query", node)


def _lateral_onto(node: exp.Expression, left: Item, block: Block, kind: JoinKind) -> Item:
    right = _item(node, block, left)
    return Item(Join(kind, left.plan, right.plan, TRUE), left.scope.beside(right.scope))


_KINDS = {"": JoinKind.INNER, "LEFT": JoinKind.LEFT, "RIGHT": JoinKind.RIGHT, "FULL": JoinKind.FULL}


def _join_kind(join: exp.Expression, block: Block) -> JoinKind:
    side, kind, method = (str(join.args.get(key) or "").upper() for key in ("side", "kind", "method"))
    if method not in ("", "NATURAL"):
        raise block.reading.refuse(f"{method} JOIN", join)
    if kind in ("SEMI", "ANTI") and side in ("", "LEFT"):
        return JoinKind.SEMI if kind == "SEMI" else JoinKind.ANTI
    if kind not in ("", "INNER", "OUTER", "CROSS"):
        raise block.reading.refuse(f"{kind} JOIN", join)
    return _KINDS[side]


def _join(join: exp.Expression, left: Item, block: Block, before: Scope | None) -> Item:
    """`left` joined as the text says. `before` holds the comma items further left, which a lateral item may read."""
    kind = _join_kind(join, block)
    reach = left if before is None else Item(left.plan, before.beside(left.scope))
    if isinstance(join.this, exp.Unnest) and kind in (JoinKind.INNER, JoinKind.LEFT):
        if not _always_true(join.args.get("on")):
            raise block.reading.refuse("a join with UNNEST on a condition", join)
        return _unnest(join.this, left, block, keep_empty=kind is JoinKind.LEFT)
    lateral = reach if kind in (JoinKind.INNER, JoinKind.LEFT) else None
    right = _item(join.this, block, lateral)
    using = [column.name for column in join.args.get("using") or []]
    if str(join.args.get("method") or "").upper() == "NATURAL":
        mine = {shown.name.lower() for shown in right.scope.shown}
        using = list(dict.fromkeys(s.name for s in left.scope.shown if s.name.lower() in mine))
    if using:
        return _join_using(join, kind, left, right, using, block)
    return _join_on(join, kind, left, right, block)


def _always_true(on: exp.Expression | None) -> bool:
    return on is None or (isinstance(on, exp.Boolean) and bool(on.this))


def _join_on(join: exp.Expression, kind: JoinKind, left: Item, right: Item, block: Block) -> Item:
    on = join.args.get("on")
    both = left.scope.beside(right.scope)
    scope = left.scope if kind in (JoinKind.SEMI, JoinKind.ANTI) else both
    if on is None:
        return Item(block.reading.mark(Join(kind, left.plan, right.plan, TRUE), join.this), scope)
    if not subqueries.has_subquery(on):
        around = block.aside(both)
        condition = expressions.read_scalar(on, around)
        plan: Operator = Join(kind, left.plan, right.plan, condition)
        return Item(block.reading.mark(plan, on), scope)
    return _join_on_subquery(on, kind, left, right, scope, both, block)


def _join_on_subquery(
    on: exp.Expression, kind: JoinKind, left: Item, right: Item, scope: Scope, both: Scope, block: Block
) -> Item:
    """A subquery in ON: for each left row, the right rows that pass the condition, evaluated beside them."""
    if kind is JoinKind.INNER:
        around = Block(block.reading, block.environment, both, Join(kind, left.plan, right.plan, TRUE), block.outer)
        filter_plan(on, around)
        return Item(around.plan, both)
    if kind not in (JoinKind.LEFT, JoinKind.SEMI, JoinKind.ANTI) or free(right.plan):
        raise block.reading.refuse(f"a subquery in the condition of a {kind.value} join", on)
    around = Block(block.reading, block.environment, both, right.plan, block.outer)
    filter_plan(on, around)
    return Item(block.reading.mark(Join(kind, left.plan, around.plan, TRUE), on), scope)


def filter_plan(condition: exp.Expression, block: Block) -> None:
    """Keeps the rows for which the condition is true: plain terms in one Select, subqueries as joins above it."""
    terms = expressions.flattened(condition, exp.And)
    plain = [term for term in terms if not subqueries.has_subquery(term)]
    if plain:
        value = conjunction([expressions.read_scalar(term, block) for term in plain])
        block.plan = Select(block.plan, value)
        block.reading.mark(block.plan, *plain)
    for term in terms:
        if not subqueries.has_subquery(term) or subqueries.filter_by(term, block):
            continue
        value = expressions.read_scalar(term, block)
        block.plan = Select(block.plan, value)
        block.reading.mark(block.plan, term)


def _join_using(join: exp.Expression, kind: JoinKind, left: Item, right: Item, using: list[str], block: Block) -> Item:
    """USING and NATURAL: equality of the named columns, which are shown once (ISO/IEC 9075-2)."""
    terms: list[Scalar] = []
    merged: dict[str, Scalar] = {}
    for name in using:
        mine, other = _only(name, left.scope, join, block), _only(name, right.scope, join, block)
        terms.append(expressions.compare(ComparisonOperator.EQUAL, mine, other))
        if kind is JoinKind.FULL:
            type_ = common_type(type_of(mine), type_of(other))
            merged[name.lower()] = Call("coalesce", (mine, other), type_)
        else:
            merged[name.lower()] = other if kind is JoinKind.RIGHT else mine
    plan = Join(kind, left.plan, right.plan, conjunction(terms))
    block.reading.mark(plan, join.this, *(join.args.get("using") or []))
    if kind in (JoinKind.SEMI, JoinKind.ANTI):
        return Item(plan, left.scope)
    shown = [Shown(s.name, merged[s.name.lower()], "") if s.name.lower() in merged else s for s in left.scope.shown]
    shown.extend(s for s in right.scope.shown if s.name.lower() not in merged)
    return Item(plan, Scope(left.scope.sources + right.scope.sources, shown))


def _only(name: str, scope: Scope, join: exp.Expression, block: Block) -> Scalar:
    found = scope.named(name)
    if len(found) == 1:
        return found[0].value
    open_sources = scope.open_sources()
    if not found and open_sources:
        value = open_sources[0].find(name)
        assert value is not None
        return value
    problem = "no" if not found else "more than one"
    raise block.reading.refuse(f"USING names {name}, of which one side has {problem} column", join)


def values_result(node: exp.Values, block: Block) -> Result:
    """VALUES: rows written out."""
    rows: list[tuple[Scalar, ...]] = []
    for row in node.expressions:
        terms = row.expressions if isinstance(row, exp.Tuple) else [row]
        rows.append(tuple(expressions.read_scalar(term, block) for term in terms))
    width = len(rows[0])
    for written, row in zip(node.expressions, rows, strict=True):
        if len(row) != width:
            raise block.reading.refuse(f"a row of {len(row)} values among rows of {width}", written)
    attributes = []
    for i in range(width):
        type_ = type_of(rows[0][i])
        for row in rows[1:]:
            type_ = common_type(type_, type_of(row[i]))
        attributes.append(fresh(f"col{i}", type_))
    plan = Values(tuple(attributes), tuple(rows))
    block.reading.mark(plan, node)
    return Result(plan, tuple((a, a.name) for a in attributes))
