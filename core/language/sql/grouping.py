"""GROUP BY, aggregates and windows of one SELECT.

Aggregates are found first and computed by a Group; the rest of the SELECT then reads group keys and aggregates only.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator

from sqlglot import exp

from core.algebra.functions import AGGREGATES
from core.algebra.graph import attributes
from core.algebra.operators import AggregateColumn, Column, Group, Project, Window, WindowColumn
from core.algebra.scalars import (
    Aggregate,
    Attribute,
    Frame,
    Literal,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    fresh,
    refs,
)
from core.algebra.types import BIGINT, DOUBLE, HUGEINT, UNKNOWN, Family, Type
from core.algebra.typing import type_of
from core.language.sql import expressions
from core.language.sql.forms import form_of, hole
from core.language.sql.function_types import result_type
from core.language.sql.reading import Block

_PLAIN = {"count", "sum", "avg", "min", "max"}


def is_aggregate(node: exp.Expression) -> bool:
    if isinstance(node, (exp.Filter, exp.WithinGroup)):
        return True
    if isinstance(node, (exp.AggFunc, exp.Grouping)):
        return True
    return isinstance(node, exp.Anonymous) and node.name.lower() in AGGREGATES


def _inside(
    roots: Iterable[exp.Expression], stop: type[exp.Expression] | tuple[type[exp.Expression], ...]
) -> Iterator[exp.Expression]:
    """The nodes in and below the roots, not entering queries; nodes of type `stop` are given and not entered."""
    pending = list(roots)[::-1]
    while pending:
        node = pending.pop()
        yield node
        if isinstance(node, (exp.Query, exp.Values, *(stop if isinstance(stop, tuple) else (stop,)))):
            continue
        pending.extend(list(node.iter_expressions())[::-1])


def aggregates_in(roots: Iterable[exp.Expression]) -> list[exp.Expression]:
    """The outermost aggregate calls, those that are windows' own functions left out."""
    found = []
    pending = list(roots)[::-1]
    while pending:
        node = pending.pop()
        if isinstance(node, (exp.Query, exp.Values)):
            continue
        if isinstance(node, exp.Window):
            inner = node.this
            while isinstance(inner, (exp.IgnoreNulls, exp.RespectNulls, exp.Filter, exp.WithinGroup)):
                if isinstance(inner, exp.Filter):
                    pending.append(inner.args["expression"])
                inner = inner.this
            pending.extend(list(inner.iter_expressions())[::-1])
            pending.extend(part for key, part in _parts(node) if key != "this")
        elif is_aggregate(node):
            found.append(node)
        else:
            pending.extend(list(node.iter_expressions())[::-1])
    return found


def _parts(node: exp.Expression) -> Iterator[tuple[str, exp.Expression]]:
    for key, value in node.args.items():
        for part in value if isinstance(value, list) else [value]:
            if isinstance(part, exp.Expression):
                yield key, part


def windows_in(roots: Iterable[exp.Expression]) -> list[exp.Window]:
    return [node for node in _inside(roots, exp.Window) if isinstance(node, exp.Window)]


def read_aggregate(node: exp.Expression, block: Block) -> Aggregate:
    """An aggregate call, its wrappers (FILTER, WITHIN GROUP, DISTINCT, ORDER BY) taken apart."""
    condition: Scalar | None = None
    order: tuple[SortKey, ...] = ()
    within = False
    function = node
    while True:
        if isinstance(function, exp.Filter):
            condition = expressions.read_scalar(function.args["expression"].this, block)
            function = function.this
        elif isinstance(function, exp.WithinGroup):
            order = sort_keys(function.args["expression"], block)
            within = True
            function = function.this
        elif isinstance(function, (exp.IgnoreNulls, exp.RespectNulls)) and not isinstance(function.this, exp.Column):
            break
        else:
            break
    if _nested(function, block):
        raise block.reading.refuse("an aggregate inside an aggregate", node)
    bare = function.copy() if _has_wrapped_argument(function) else function
    distinct = False
    if bare is not function:
        distinct, inner_order = _unwrap(bare, function, block)
        order = order or inner_order
    return _assembled(bare, function, block, distinct, condition, order, within)


def _nested(function: exp.Expression, block: Block) -> bool:
    inner = [part for _, part in _parts(function)]
    return any(is_aggregate(part) and id(part) not in block.known for part in _inside(inner, exp.Window))


def _has_wrapped_argument(function: exp.Expression) -> bool:
    return any(isinstance(part, (exp.Distinct, exp.Order)) for _, part in _parts(function))


def _unwrap(bare: exp.Expression, original: exp.Expression, block: Block) -> tuple[bool, tuple[SortKey, ...]]:
    """Takes DISTINCT and ORDER BY off the first argument of a copied call."""
    distinct = False
    order: tuple[SortKey, ...] = ()
    for key, part in list(_parts(bare)):
        source = next(p for k, p in _parts(original) if k == key)
        if isinstance(part, exp.Order):
            order = sort_keys(source, block)
            part.replace(part.this)
            part = part.this
        if isinstance(part, exp.Distinct):
            distinct = True
            terms = part.expressions
            if len(terms) == 1:
                part.replace(terms[0])
            else:
                bare.set("this", terms[0])
                bare.set("expressions", terms[1:])
    return distinct, order


def _assembled(
    bare: exp.Expression,
    function: exp.Expression,
    block: Block,
    distinct: bool,
    condition: Scalar | None,
    order: tuple[SortKey, ...],
    within: bool,
) -> Aggregate:
    name = _aggregate_name(bare)
    if isinstance(bare, exp.Count) and isinstance(bare.this, exp.Star):
        return Aggregate("count", (), BIGINT, distinct, condition, order)
    form, arguments = expressions.cut(bare, block)
    # The quantile and its ordering stand inside WITHIN GROUP when the call is printed.
    text = (
        form_of(exp.WithinGroup(this=form, expression=exp.Order(expressions=[hole(len(arguments))])))
        if within
        else form_of(form)
    )
    if within:
        return Aggregate(name, arguments, UNKNOWN, distinct, condition, order, text)
    if name in _PLAIN and len(arguments) == 1 and not isinstance(bare, exp.Anonymous):
        return Aggregate(name, arguments, _plain_type(name, type_of(arguments[0])), distinct, condition, order)
    return Aggregate(
        name, arguments, result_type(text, arguments, block.reading.dialect), distinct, condition, order, text
    )


_NAMES = {"group_concat": "string_agg", "array_agg": "list", "logical_and": "bool_and", "logical_or": "bool_or"}


def _aggregate_name(node: exp.Expression) -> str:
    name = expressions.function_name(node)
    return _NAMES.get(name, name)


def _plain_type(name: str, argument: Type) -> Type:
    """DuckDB's result types of the standard aggregates."""
    if name == "count":
        return BIGINT
    if name == "avg":
        return DOUBLE if argument.family is not Family.INTERVAL else argument
    if name == "sum":
        if argument.family is Family.INTEGER:
            return HUGEINT
        if argument.family is Family.DECIMAL:
            scale = argument.name.partition(",")[2].strip(" )") or "0"
            return Type(Family.DECIMAL, f"DECIMAL(38, {scale})")
        if argument.family is Family.FLOAT:
            return DOUBLE
    return argument


def sort_keys(order: exp.Expression, block: Block) -> tuple[SortKey, ...]:
    """The keys of an ORDER BY that stands inside a call or a window."""
    return tuple(sort_key(ordered, expressions.read_scalar(ordered.this, block)) for ordered in order.expressions)


def sort_key(ordered: exp.Expression, term: Scalar) -> SortKey:
    return SortKey(term, bool(ordered.args.get("desc")), bool(ordered.args.get("nulls_first")))


def group_block(select: exp.Select, block: Block, used: list[exp.Expression], items: list[exp.Expression]) -> None:
    """Turns a block whose SELECT groups into one that reads groups. `used` are the parts evaluated after grouping."""
    calls = aggregates_in(used)
    group = select.args.get("group")
    if group is None and not calls and select.args.get("having") is None:
        return
    before = Block(block.reading, block.environment, block.scope, block.plan, block.outer)
    before.select_aliases = block.select_aliases
    key_nodes, sets = _key_nodes(group, items, block)
    scalars = [expressions.read_scalar(node, before) for node in key_nodes]
    keys = _computed_keys(scalars, key_nodes, before)
    columns: dict[Aggregate, Attribute] = {}
    found: list[tuple[exp.Expression, Aggregate]] = []
    for call in calls:
        if isinstance(call, exp.Grouping):
            found.append((call, _grouping_call(call, before, keys)))
        else:
            found.append((call, read_aggregate(call, before)))
    for call, aggregate in found:
        if aggregate not in columns:
            columns[aggregate] = fresh(_name_of_call(aggregate), aggregate.type)
        block.known[id(call)] = Ref(columns[aggregate])
    _check_outer(found, before)
    key_attributes = tuple(dict.fromkeys(keys[scalar] for scalar in scalars))
    chosen = None
    if sets is not None:
        chosen = tuple(tuple(dict.fromkeys(keys[scalars[i]] for i in part)) for part in sets)
    plan = Group(before.plan, key_attributes, tuple(AggregateColumn(a, call) for call, a in columns.items()), chosen)
    block.reading.mark(plan, *key_nodes, *(call for call, _ in found))
    block.plan = plan
    block.keys = keys
    block.before = before


def _check_outer(found: list[tuple[exp.Expression, Aggregate]], before: Block) -> None:
    for call, aggregate in found:
        read = refs(aggregate)
        if read and read.isdisjoint(attributes(before.plan)):
            raise before.reading.refuse("an aggregate over columns of an outer query", call)


def _grouping_call(call: exp.Expression, before: Block, keys: dict[Scalar, Attribute]) -> Aggregate:
    arguments = []
    for node in call.expressions:
        value = expressions.read_scalar(node, before)
        if value not in keys:
            raise before.reading.refuse("GROUPING of something that is not a group key", node)
        arguments.append(Ref(keys[value]))
    return Aggregate("grouping", tuple(arguments), BIGINT)


def _computed_keys(scalars: list[Scalar], nodes: list[exp.Expression], before: Block) -> dict[Scalar, Attribute]:
    """The attribute of each key; keys that are expressions are computed by a projection below the group."""
    keys: dict[Scalar, Attribute] = {}
    computed: list[Column] = []
    own = set(attributes(before.plan))
    for scalar, node in zip(scalars, nodes, strict=True):
        if scalar in keys:
            continue
        if isinstance(scalar, Ref) and scalar.attribute in own:
            keys[scalar] = scalar.attribute
        else:
            keys[scalar] = fresh(column_name(node), type_of(scalar))
            computed.append(Column(keys[scalar], scalar))
    if computed:
        kept = tuple(Column(a, Ref(a)) for a in attributes(before.plan))
        before.plan = Project(before.plan, kept + tuple(computed))
        before.reading.mark(before.plan, *nodes)
    return keys


def _key_nodes(
    group: exp.Expression | None, items: list[exp.Expression], block: Block
) -> tuple[list[exp.Expression], list[tuple[int, ...]] | None]:
    """The key expressions, and the grouping sets as positions among them (None for a plain GROUP BY)."""
    if group is None:
        return [], None
    if group.args.get("totals"):
        raise block.reading.refuse("GROUP BY ... WITH TOTALS", group)
    if group.args.get("all"):
        plain = [item for item in items if not aggregates_in([item]) and not windows_in([item])]
        return [_bare(item) for item in plain], None
    nodes: list[exp.Expression] = []
    factors: list[list[tuple[int, ...]]] = []
    with_sets = False

    def place(node: exp.Expression) -> int:
        nodes.append(_positional(node, items, block))
        return len(nodes) - 1

    pieces = list(group.expressions)
    for key in ("grouping_sets", "cube", "rollup"):
        pieces.extend(part for part in group.args.get(key) or [] if isinstance(part, exp.Expression))
    for piece in pieces:
        if isinstance(piece, (exp.GroupingSets, exp.Cube, exp.Rollup)):
            with_sets = True
            factors.append(_sets(piece, place))
        elif isinstance(piece, exp.Tuple):
            factors.append([tuple(place(part) for part in piece.expressions)])
        else:
            factors.append([(place(piece),)])
    if not with_sets:
        return nodes, None
    return nodes, [tuple(itertools.chain(*choice)) for choice in itertools.product(*factors)]


def _sets(piece: exp.Expression, place: object) -> list[tuple[int, ...]]:
    assert callable(place)

    def members(node: exp.Expression) -> tuple[int, ...]:
        while isinstance(node, exp.Paren):
            node = node.this
        return tuple(place(part) for part in node.expressions) if isinstance(node, exp.Tuple) else (place(node),)

    if isinstance(piece, exp.GroupingSets):
        found: list[tuple[int, ...]] = []
        for part in piece.expressions:
            nested = isinstance(part, (exp.GroupingSets, exp.Cube, exp.Rollup))
            found.extend(_sets(part, place) if nested else [members(part)])
        return found
    groups = [members(part) for part in piece.expressions]
    if isinstance(piece, exp.Rollup):
        return [tuple(itertools.chain(*groups[:n])) for n in range(len(groups), -1, -1)]
    sizes = range(len(groups), -1, -1)
    return [tuple(itertools.chain(*choice)) for n in sizes for choice in itertools.combinations(groups, n)]


def _bare(item: exp.Expression) -> exp.Expression:
    inner = item.this if isinstance(item, exp.Alias) else item
    return inner if isinstance(inner, exp.Expression) else item


def _positional(node: exp.Expression, items: list[exp.Expression], block: Block) -> exp.Expression:
    """`GROUP BY 1` means the first column of the SELECT list."""
    if isinstance(node, exp.Literal) and not node.is_string and node.this.isdigit():
        place = int(node.this)
        if not 1 <= place <= len(items):
            block.reading.error("no-such-column", f"there is no column {place}: the list has {len(items)}", node)
            return node
        return _bare(items[place - 1])
    return node


def key_for(node: exp.Expression, block: Block) -> Scalar | None:
    """The group key that an expression of the SELECT repeats, or None."""
    if block.before is None or isinstance(node, (exp.Column, exp.Literal)) or not block.keys:
        return None
    if all(isinstance(key, Ref) for key in block.keys):
        return None
    if any(
        isinstance(part, exp.Expression) and (is_aggregate(part) or isinstance(part, (exp.Query, exp.Window)))
        for part in node.walk()
    ):
        return None
    noted = len(block.reading.diagnostics)
    value = expressions.read_scalar(node, block.before)
    del block.reading.diagnostics[noted:]
    attribute = block.keys.get(value)
    return None if attribute is None or isinstance(value, Literal) else Ref(attribute)


def grouped_value(block: Block, value: Scalar, node: exp.Expression) -> Scalar:
    """A column read after grouping: a key, or an attribute that a key determines (ISO/IEC 9075-2, functional dependency)."""
    assert block.keys is not None
    if value in block.keys:
        return Ref(block.keys[value])
    read = refs(value)
    if (
        not read
        or read <= set(attributes(block.plan))
        or (block.before is not None and read.isdisjoint(attributes(block.before.plan)))
    ):
        return value
    if isinstance(value, Ref) and _determined(block, value.attribute):
        _add_key(block, value.attribute)
        return value
    name = ", ".join(sorted(attribute.name for attribute in read))
    block.reading.error(
        "not-grouped",
        f"{name} is neither grouped nor inside an aggregate",
        node,
        help=f"group by {name} too, or aggregate it",
    )
    return value


def _determined(block: Block, attribute: Attribute) -> bool:
    """Whether the attribute's relation has its primary key among the group keys."""
    from core.algebra.graph import postorder
    from core.algebra.operators import Relation

    assert block.keys is not None and block.before is not None
    grouped = set(block.keys.values())
    for operator in postorder(block.before.plan):
        if isinstance(operator, Relation) and attribute in operator.attributes:
            facts = block.reading.catalog.relation(operator.name)
            if facts is None or facts.primary is None:
                return False
            key = {name.lower() for name in facts.primary}
            return key <= {a.name.lower() for a in operator.attributes if a in grouped}
    return False


def _add_key(block: Block, attribute: Attribute) -> None:
    from dataclasses import replace

    from core.algebra.graph import rebuilt

    assert block.keys is not None and block.before is not None
    group = next(op for op in _spine(block) if isinstance(op, Group) and op.input is block.before.plan)
    wider = replace(group, keys=(*group.keys, attribute))
    block.reading.mark(wider, *())
    (block.plan,), became = rebuilt((block.plan,), {group: wider})
    for old, new in became.items():
        if old is not new and old in block.reading.spans:
            block.reading.spans.setdefault(new, block.reading.spans[old])
    block.keys[Ref(attribute)] = attribute


def _spine(block: Block) -> Iterator[object]:
    from core.algebra.graph import postorder

    return iter(reversed(postorder(block.plan)))


def add_windows(select: exp.Select, block: Block, used: list[exp.Expression]) -> None:
    """Computes the windows of the SELECT list, QUALIFY and ORDER BY by one Window operator."""
    calls = windows_in(used)
    if not calls:
        return
    named = {window.this.name.lower(): window for window in select.args.get("windows") or []}
    columns: dict[WindowCall, Attribute] = {}
    for node in calls:
        call = _read_window(node, named, block)
        if call not in columns:
            columns[call] = fresh(_name_of_call(call.function), call.function.type)
        block.known[id(node)] = Ref(columns[call])
    plan = Window(block.plan, tuple(WindowColumn(a, call) for call, a in columns.items()))
    block.reading.mark(plan, *calls)
    block.plan = plan
    if block.keys is not None:
        block.keys.update({Ref(a): a for a in columns.values()})


def _read_window(node: exp.Window, named: dict[str, exp.Expression], block: Block) -> WindowCall:
    function = _window_function(node.this, block)
    partition, order, spec = _window_parts(node, named, block, set())
    return WindowCall(
        function,
        tuple(expressions.read_scalar(term, block) for term in partition),
        () if order is None else sort_keys(order, block),
        None if spec is None else _frame(spec, block),
    )


def _window_parts(
    node: exp.Expression, named: dict[str, exp.Expression], block: Block, seen: set[str]
) -> tuple[list[exp.Expression], exp.Expression | None, exp.Expression | None]:
    """Partition, order and frame of a window, those of the named window it builds on included."""
    partition, order, spec = node.args.get("partition_by") or [], node.args.get("order"), node.args.get("spec")
    base = node.args.get("alias")
    if base is not None:
        name = base.name.lower()
        if name not in named or name in seen:
            raise block.reading.refuse(f"no window is called {base.name}", base)
        outer = _window_parts(named[name], named, block, seen | {name})
        partition = partition or outer[0]
        order = order or outer[1]
        spec = spec or outer[2]
    return partition, order, spec


def _window_function(node: exp.Expression, block: Block) -> Aggregate:
    if isinstance(node, (exp.IgnoreNulls, exp.RespectNulls)):
        inner = node.this
        form, arguments = expressions.cut(inner, block)
        text = form_of(type(node)(this=form))
        type_ = result_type(form_of(form), arguments, block.reading.dialect)
        return Aggregate(expressions.function_name(inner), arguments, type_, form=text)
    return read_aggregate(node, block)


_SIDES = {"PRECEDING": "preceding", "FOLLOWING": "following"}


def _frame(spec: exp.Expression, block: Block) -> Frame:
    start = _bound(spec.args.get("start"), spec.args.get("start_side"), block)
    end = _bound(spec.args.get("end") or "CURRENT ROW", spec.args.get("end_side"), block)
    exclude = spec.args.get("exclude")
    excluded = "" if exclude is None else (exclude if isinstance(exclude, str) else exclude.name).lower()
    return Frame(str(spec.args.get("kind") or "range").lower(), start, end, excluded)


def _bound(value: object, side: object, block: Block) -> tuple[Scalar | None, str]:
    text = value if isinstance(value, str) else ""
    if text.upper() == "CURRENT ROW":
        return None, "current"
    direction = _SIDES[str(side).upper()]
    if text.upper() == "UNBOUNDED":
        return None, direction
    assert isinstance(value, exp.Expression)
    return expressions.read_scalar(value, block), direction


def _name_of_call(call: Aggregate) -> str:
    """A readable name for an aggregate that the text gave none: `sum_weight`, `count`."""
    first = call.arguments[0] if call.arguments else None
    return f"{call.name}_{first.attribute.name}" if isinstance(first, Ref) else call.name


def column_name(node: exp.Expression) -> str:
    """The name of a column of a SELECT list: its alias, else the column's own, else a readable one."""
    while isinstance(node, (exp.Paren, exp.Cast)):
        node = node.this
    if isinstance(node, (exp.Alias, exp.Column)):
        return node.alias_or_name
    if isinstance(node, exp.Window):
        return column_name(node.this)
    if isinstance(node, exp.Subquery):
        inner = node.unnest()
        if isinstance(inner, exp.Select) and inner.expressions:
            return column_name(inner.expressions[0])
    if isinstance(node, exp.Func):
        name = expressions.function_name(node)
        name = _NAMES.get(name, name)
        columns = [part for part in node.iter_expressions() if isinstance(part, exp.Column)]
        return f"{name}_{columns[0].name}" if len(columns) == 1 else name
    return "value"
