"""From an operator graph to SELECT blocks and common table expressions."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from copy import deepcopy
from dataclasses import dataclass, field, replace

from core.algebra.functions import volatile
from core.algebra.graph import attributes, copied, dependent, inputs, parents, postorder
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
    SetOperation,
    Sort,
    TableFunction,
    Unnest,
    Values,
    Window,
)
from core.algebra.scalars import (
    FALSE,
    TRUE,
    Aggregate,
    Arithmetic,
    ArithmeticOperator,
    Attribute,
    Cast,
    Comparison,
    ComparisonOperator,
    Literal,
    Node,
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    conjunction,
    conjuncts,
    fresh,
    fresh_like,
    refs,
    renamed,
    walk,
)
from core.algebra.types import BIGINT
from core.language.sql.blocks import (
    Block,
    Condition,
    Definition,
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
from core.language.sql.sharing import Sharing
from core.language.sql.write_dialect import WriteError
from core.language.sql.write_scalars import list_of_rows

_HEAVY = 60
"""An inlined expression of more nodes than this is computed in a derived table instead."""

TIES_DIALECTS = frozenset({"postgres", "trino", "oracle"})
"""Engines with FETCH FIRST ... WITH TIES."""

NESTING_DIALECTS = frozenset({"duckdb"})
"""Engines for which lists of rows are written and opened."""

LATERAL_DIALECTS = frozenset({"duckdb", "postgres", "snowflake", "spark", "databricks", "trino", "mysql", "oracle"})
"""Engines with LEFT JOIN LATERAL."""

QUALIFY_DIALECTS = frozenset({"duckdb", "snowflake", "bigquery", "databricks", "teradata", "clickhouse", "redshift"})


@dataclass(slots=True)
class Gathering:
    """What is known while a graph is turned into blocks."""

    dialect: str
    names: Mapping[Operator, str]
    aliases: Mapping[Operator, str]
    steps: list[StepDefinition] = field(default_factory=list)
    taken: set[str] = field(default_factory=set)
    recurring: dict[int, tuple[str, tuple[Attribute, ...]]] = field(default_factory=dict)
    fields: dict[Attribute, tuple[str, ...]] = field(default_factory=dict)
    """What the attributes of a nested relation are called, by the attribute that holds it."""


def gather(roots: Sequence[Operator], gathering: Gathering) -> dict[Operator, Query]:
    """The query of each root; shared and named operators become steps of the gathering, in order of definition."""
    roots = tuple(roots)
    readers = parents(*roots)
    order = postorder(*roots)
    gathering.taken.update(operator.name.lower() for operator in order if isinstance(operator, Relation))
    for operator in order:
        if isinstance(operator, Fixpoint):
            name = _free_name(operator.name or "reach", gathering)
            gathering.recurring[operator.key] = (name, operator.attributes)
    known = Sharing.of(roots, order, readers, gathering.names)
    ready: dict[Operator, Query | StepUse] = {}
    for operator in order:
        _note_fields(operator, gathering)
        below = [_take(ready, part, len(readers[part])) for part in inputs(operator)]
        query = _absorb(operator, below, gathering)
        if operator in gathering.aliases:
            query.alias = gathering.aliases[operator]
            if isinstance(query, Block) and len(query.items) == 1 and query.stage is Stage.FROM:
                query.items[0].alias = query.items[0].alias or query.alias
        step = known.is_step(operator)
        ready[operator] = _as_step(operator, query, known, gathering) if step else query
    return {root: _take(ready, root, 1 + len(readers[root])) for root in roots}


def _take(ready: dict[Operator, Query | StepUse], operator: Operator, readers: int) -> Query:
    found = ready[operator]
    if isinstance(found, StepUse):
        columns = tuple(found.columns)
        return Block([Item(StepUse(found.name, dict(found.columns)), columns, found.alias)], columns)
    # Blocks grow by absorption, so a second reader of a leaf or a correlated part needs one of its own.
    return deepcopy(found) if readers > 1 else found


def _as_step(operator: Operator, query: Query, known: Sharing, gathering: Gathering) -> StepUse:
    if isinstance(operator, Fixpoint):
        name = gathering.recurring[operator.key][0]
    else:
        name = _free_name(known.names.get(operator) or _readable_name(operator), gathering)
    columns = unique_names(attributes(operator))
    if isinstance(query, Block) and query.columns != attributes(operator):
        query = _with_columns(query, attributes(operator))
    gathering.steps.append(StepDefinition(name, query, columns, isinstance(operator, Fixpoint)))
    return StepUse(name, columns, gathering.aliases.get(operator, "") if known.uses[operator] == 1 else "")


def _free_name(name: str, gathering: Gathering) -> str:
    candidate, number = name, 1
    while candidate.lower() in gathering.taken:
        number += 1
        candidate = f"{name}_{number}"
    gathering.taken.add(candidate.lower())
    return candidate


def _readable_name(operator: Operator) -> str:
    """A name for a shared part that nobody named: after the relation it reads first."""
    for below in postorder(operator):
        if isinstance(below, Relation):
            return f"{below.name.rpartition('.')[2]}_part"
    return "part"


def unique_names(columns: Sequence[Attribute]) -> dict[Attribute, str]:
    """Column names for attributes: their own, numbered where two are the same."""
    found: dict[Attribute, str] = {}
    taken: set[str] = set()
    for attribute in columns:
        name, number = attribute.name or "value", 1
        while name.lower() in taken:
            number += 1
            name = f"{attribute.name}_{number}"
        taken.add(name.lower())
        found[attribute] = name
    return found


# --- absorbing operators -------------------------------------------------------------------------------------------


def _absorb(operator: Operator, below: list[Query], gathering: Gathering) -> Query:
    match operator:
        case Relation(attributes=own, alias=alias):
            return Block([Item(operator, own, alias)], own)
        case Recurrence(key=key, attributes=own):
            name, outer = gathering.recurring[key]
            shown = unique_names(outer)
            columns = {mine: shown[theirs] for mine, theirs in zip(own, outer, strict=True)}
            return Block([Item(StepUse(name, columns), own)], own)
        case Values(attributes=own, rows=rows):
            if not own and len(rows) == 1:
                return Block()
            if not rows:
                return _empty(own)
            return Block([Item(operator, own)], own)
        case TableFunction(attributes=own, alias=alias):
            return Block([Item(operator, own, alias)], own)
        case Select():
            return _select(operator, below[0], gathering)
        case Project():
            return _project(operator, below[0])
        case Join():
            return _join(operator, below[0], below[1], gathering)
        case SetOperation():
            parts = [_with_columns(_open(part), source) for part, source in zip(below, operator.sources, strict=True)]
            return SetQuery(operator.kind, operator.distinct, parts, operator.attributes)
        case Fixpoint():
            parts = [_with_columns(_open(part), source) for part, source in zip(below, operator.sources, strict=True)]
            from core.algebra.operators import SetKind

            return SetQuery(SetKind.UNION, operator.distinct, parts, operator.attributes)
        case Distinct():
            return _distinct(below[0])
        case Group():
            return _group(operator, below[0])
        case Window():
            return _window(operator, below[0])
        case Sort():
            return _sort(operator, below[0])
        case Limit():
            return _limit(operator, below[0], gathering)
        case Unnest():
            return _unnest(operator, below[0], gathering)
        case Divide():
            return _divide(operator, gathering)
        case Nest():
            return _nest(operator, below[0], gathering)


def _empty(own: tuple[Attribute, ...]) -> Block:
    """No rows, with the types of the attributes: a condition that is never true."""
    block = Block(columns=own, where=[FALSE], stage=Stage.WHERE)
    for attribute in own:
        block.definitions[attribute] = Cast(Literal(None, attribute.type), attribute.type)
    return block


def _open(query: Query) -> Query:
    """A query that may stand in a set operation: one without its own order or limit keeps its shape."""
    return derived(query) if query.stage >= Stage.ORDER else query


def _block(query: Query, highest: Stage) -> Block:
    """The query as a block that has not come further than `highest`; else a new block over it."""
    if isinstance(query, Block) and query.stage <= highest:
        return query
    return derived(query)


def _with_columns(query: Query, columns: tuple[Attribute, ...]) -> Query:
    """The query with these columns; one that is asked for twice becomes two of the same value."""
    if query.columns == columns:
        return query
    if isinstance(query, SetQuery) or query.distinct:
        query = derived(query)
    shown: list[Attribute] = []
    for attribute in columns:
        again = attribute
        if attribute in shown:
            again = fresh_like(attribute)
            query.definitions[again] = Ref(attribute)
        shown.append(again)
    query.columns = tuple(shown)
    return query


def _select(operator: Select, below: Query, gathering: Gathering) -> Block:
    highest = Stage.QUALIFY if gathering.dialect in QUALIFY_DIALECTS else Stage.HAVING
    block = _block(below, highest)
    if _too_heavy(block, [operator.condition]):
        block = derived(block)
    if block.stage >= Stage.WINDOW and not _reads_terms(block, [operator.condition], (WindowCall,)):
        # QUALIFY is for conditions on windows; another condition would read as one.
        block = derived(block)
    _add_condition(block, list(conjuncts(operator.condition)) or [TRUE])
    return block


def _add_condition(block: Block, terms: Sequence[Condition]) -> None:
    if block.stage >= Stage.WINDOW:
        block.qualify.extend(terms)
        block.stage = Stage.QUALIFY
    elif block.stage >= Stage.GROUP:
        block.having.extend(terms)
        block.stage = Stage.HAVING
    else:
        block.where.extend(terms)
        block.stage = Stage.WHERE


def _too_heavy(block: Block, scalars: Sequence[Node]) -> bool:
    """Whether writing these over the block would repeat much text, or call a volatile function again."""
    used = [a for scalar in scalars for a in (node.attribute for node in walk(scalar) if isinstance(node, Ref))]
    for attribute in set(used):
        definition = block.definitions.get(attribute)
        if definition is None:
            continue
        if isinstance(definition, Node) and volatile(definition):
            return True
        if block.weights.get(attribute, 1) > _HEAVY and used.count(attribute) > 1:
            return True
    return False


def _weight(block: Block, scalar: Node) -> int:
    total = 0
    for node in walk(scalar):
        total += block.weights.get(node.attribute, 1) if isinstance(node, Ref) else 1
    return total


def _define(block: Block, attribute: Attribute, value: Scalar | Aggregate | WindowCall) -> None:
    if value == Ref(attribute):
        return
    block.weights[attribute] = _weight(block, value)
    block.definitions[attribute] = value


def _project(operator: Project, below: Query) -> Block:
    block = _block(below, Stage.LIMIT)
    renaming = _step_renaming(operator, block)
    if renaming is not None:
        return renaming
    values = [column.value for column in operator.columns]
    own = {column.attribute for column in operator.columns if column.value != Ref(column.attribute)}
    if block.distinct or _too_heavy(block, values) or own.intersection(block.hidden()):
        block = derived(block)
    if block.stage >= Stage.ORDER and any(volatile(value) for value in values):
        block = derived(block)
    if block.stage in (Stage.FROM, Stage.WHERE) and any(isinstance(v, Aggregate) for v in values):
        block = derived(block)
    for column in operator.columns:
        _define(block, column.attribute, column.value)
    block.columns = tuple(column.attribute for column in operator.columns)
    return block


def _step_renaming(operator: Project, block: Block) -> Block | None:
    """A renaming right over a step or a base relation is just another use of it."""
    if block.stage is not Stage.FROM or len(block.items) != 1 or block.definitions:
        return None
    body = block.items[0].body
    alias = ""
    if isinstance(body, Relation):
        alias = block.items[0].alias
        body = StepUse(body.name, {a: a.name for a in body.attributes}, base=True)
    if not isinstance(body, StepUse):
        return None
    columns: dict[Attribute, str] = {}
    for column in operator.columns:
        if not isinstance(column.value, Ref) or column.value == Ref(column.attribute):
            return None
        if column.value.attribute not in body.columns:
            return None
        columns[column.attribute] = body.columns[column.value.attribute]
    own = tuple(columns)
    return Block([Item(StepUse(body.name, columns, base=body.base), own, alias)], own)


def _distinct(below: Query) -> Query:
    if isinstance(below, SetQuery) and below.stage is Stage.DISTINCT and not below.distinct:
        from core.algebra.operators import SetKind

        if below.kind is SetKind.UNION:
            below.distinct = True
            return below
    block = _block(below, Stage.QUALIFY)
    block.distinct = True
    block.stage = Stage.DISTINCT
    return block


def _group(operator: Group, below: Query) -> Block:
    block = _block(below, Stage.WHERE)
    used = [column.aggregate for column in operator.aggregates]
    terms = any(isinstance(_meaning(block, key), SubqueryTerm) for key in operator.keys)
    constant = any(key in block.definitions and not leaves(block, [Ref(key)]) for key in operator.keys)
    if (
        terms
        or constant
        or _entangled(block, operator)
        or _too_heavy(block, [*used, *(Ref(key) for key in operator.keys)])
        or _reads_terms(block, used)
    ):
        block = derived(block)
    block, used = _with_own_arguments(block, used, operator.keys)
    for column, aggregate in zip(operator.aggregates, used, strict=True):
        _define(block, column.attribute, aggregate)
    kept = set(operator.keys if operator.sets is None else itertools.chain.from_iterable(operator.sets))
    block.keys = tuple(key for key in operator.keys if key in kept)
    block.sets = operator.sets
    block.columns = tuple(a for a in attributes(operator) if a not in operator.keys or a in kept)
    block.stage = Stage.GROUP
    if len(kept) < len(operator.keys):
        # A key that is in no grouping set is NULL in every row.
        block = derived(block)
        for key in operator.keys:
            if key not in kept:
                block.definitions[key] = Cast(Literal(None, key.type), key.type)
        block.columns = attributes(operator)
    return block


def _entangled(block: Block, operator: Group) -> bool:
    """Whether keys of grouping sets are computed from the same columns: engines tell them apart by their text."""
    if operator.sets is None or not any(key in block.definitions for key in operator.keys):
        return False
    read = [leaves(block, [Ref(key)]) for key in operator.keys]
    return sum(map(len, read)) > len(set[Attribute]().union(*read))


def _with_own_arguments(
    block: Block, used: list[Aggregate], keys: tuple[Attribute, ...]
) -> tuple[Block, list[Aggregate]]:
    """A block whose aggregates and keys read no row around it.

    SQL takes an aggregate over outer columns alone as one of the outer query (ISO/IEC 9075-2), so such values are
    computed in a derived table first.
    """
    own = {a for item in block.items for a in Block([item]).hidden()}
    outer = leaves(block, [*used, *(Ref(key) for key in keys)]).difference(own)
    if not outer:
        return block, used
    direct = sorted(refs(*used).difference(own, block.definitions))
    inside = {attribute: fresh_like(attribute) for attribute in direct}
    block.definitions.update({new: Ref(old) for old, new in inside.items()})
    block.columns = (*block.columns, *inside.values())
    return derived(block), [renamed(aggregate, inside) for aggregate in used]


def leaves(block: Block, scalars: Sequence[Node]) -> set[Attribute]:
    """The attributes that scalars read when the block's definitions are put in their place."""
    pending, seen, found = list(refs(*scalars)), set[Attribute](), set[Attribute]()
    while pending:
        attribute = pending.pop()
        if attribute in seen:
            continue
        seen.add(attribute)
        definition = block.definitions.get(attribute)
        if definition is None or isinstance(definition, (Aggregate, WindowCall, SubqueryTerm)):
            found.add(attribute)
        else:
            pending.extend(refs(definition))
    return found


def _nest(operator: Nest, below: Query, gathering: Gathering) -> Block:
    """A list of rows for each group."""
    if gathering.dialect not in NESTING_DIALECTS:
        raise WriteError(f"a nested relation has no form in {gathering.dialect}")
    names = gathering.fields[operator.into]
    gathered = Aggregate(
        "array_agg", tuple(Ref(a) for a in operator.nested), operator.into.type, form=list_of_rows(names)
    )
    block = _group(Group(operator.input, operator.keys, (AggregateColumn(operator.into, gathered),)), below)
    if not operator.keys:
        # Without keys SQL makes a group of no rows; nesting makes none.
        rows = fresh("rows", BIGINT)
        block.definitions[rows] = Aggregate("count", (), BIGINT)
        _add_condition(block, [Comparison(ComparisonOperator.GREATER, Ref(rows), Literal("0", BIGINT))])
    return block


def _note_fields(operator: Operator, gathering: Gathering) -> None:
    """Remembers what a nested relation's attributes are called, wherever it is handed on."""
    fields = gathering.fields
    match operator:
        case Nest(nested=nested, into=into):
            fields[into] = tuple(unique_names(nested).values())
        case Project(columns=columns):
            for column in columns:
                if isinstance(column.value, Ref) and column.value.attribute in fields:
                    fields[column.attribute] = fields[column.value.attribute]
        case SetOperation(sources=(first, *_), attributes=own) | Fixpoint(sources=(first, *_), attributes=own):
            fields.update({new: fields[old] for old, new in zip(first, own, strict=True) if old in fields})
        case _:
            pass


def _meaning(block: Block, attribute: Attribute) -> Definition | None:
    """What an attribute stands for in a block, mere names seen through."""
    definition = block.definitions.get(attribute)
    while isinstance(definition, Ref):
        definition = block.definitions.get(definition.attribute)
    return definition


def reads_aggregates(block: Block) -> bool:
    """Whether a column of the block is computed from an aggregate."""
    return _reads_terms(block, [Ref(a) for a in block.columns], (Aggregate,))


def reads_terms(block: Block | None, condition: Node) -> bool:
    """Whether a condition reads a subquery's value through the block's definitions."""
    return block is not None and _reads_terms(block, [condition])


def _reads_terms(block: Block, scalars: Sequence[Node], kinds: tuple[type, ...] = (SubqueryTerm,)) -> bool:
    """Whether a scalar reads a subquery's value (or another kind) through the block's definitions."""
    pending = list(refs(*scalars))
    seen: set[Attribute] = set()
    while pending:
        attribute = pending.pop()
        if attribute in seen:
            continue
        seen.add(attribute)
        definition = block.definitions.get(attribute)
        if isinstance(definition, kinds):
            return True
        if definition is not None and not isinstance(definition, SubqueryTerm):
            pending.extend(refs(definition))
    return False


def _window(operator: Window, below: Query) -> Block:
    block = _block(below, Stage.HAVING)
    calls = [column.call for column in operator.columns]
    if _too_heavy(block, calls) or _reads_terms(block, calls):
        block = derived(block)
    for column in operator.columns:
        _define(block, column.attribute, replace(column.call, order=_telling(block, column.call.order)))
    block.columns = attributes(operator)
    block.stage = Stage.WINDOW
    return block


def _sort(operator: Sort, below: Query) -> Query:
    if isinstance(below, SetQuery):
        simple = all(isinstance(key.term, Ref) for key in operator.keys)
        if below.stage < Stage.ORDER and simple:
            below.order, below.stage = operator.keys, Stage.ORDER
            return below
    block = _block(below, Stage.DISTINCT)
    if block.distinct and not refs(*operator.keys) <= set(block.columns):
        block = derived(block)
    if block.distinct and not all(isinstance(key.term, Ref) for key in operator.keys):
        block = derived(block)
    block.order = _telling(block, operator.keys)
    block.stage = Stage.ORDER
    return block


def _telling(block: Block, keys: tuple[SortKey, ...]) -> tuple[SortKey, ...]:
    """Less the constants, which order nothing and which SQL would take for column numbers."""
    return tuple(key for key in keys if leaves(block, [key]) or volatile(key))


def _limit(operator: Limit, below: Query, gathering: Gathering) -> Query:
    if operator.with_ties and operator.count is not None and gathering.dialect not in TIES_DIALECTS:
        return _ranked(operator, below, gathering)
    query = below if below.stage < Stage.LIMIT else derived(below)
    query.count, query.offset, query.ties = operator.count, operator.offset, operator.with_ties
    query.stage = Stage.LIMIT
    return query


def _ranked(operator: Limit, below: Query, gathering: Gathering) -> Query:
    """A limit with ties where the engine has none: by the rank of each row."""
    assert operator.count is not None
    keys = below.order if below.stage is Stage.ORDER else ()
    if below.stage is Stage.ORDER:
        below.order = ()
        below.stage = Stage.QUALIFY if isinstance(below, Block) and below.qualify else Stage.HAVING
    lost = refs(*keys).difference(below.columns)
    if lost and not (isinstance(below, Block) and below.distinct):
        below.columns = (*below.columns, *sorted(lost))
    shown = tuple(a for a in below.columns if a not in lost)
    block = derived(below)
    rank = fresh("place", BIGINT)
    block.definitions[rank] = WindowCall(Aggregate("rank", (), BIGINT), (), keys)
    last = operator.count
    conditions: list[Condition] = []
    if operator.offset is not None:
        number = fresh("number", BIGINT)
        block.definitions[number] = WindowCall(Aggregate("row_number", (), BIGINT), (), keys)
        block.columns = (*block.columns, number)
        conditions.append(Comparison(ComparisonOperator.GREATER, Ref(number), operator.offset))
        last = Arithmetic(ArithmeticOperator.ADD, operator.offset, operator.count, BIGINT)
    conditions.append(Comparison(ComparisonOperator.AT_MOST, Ref(rank), last))
    conditions.append(Comparison(ComparisonOperator.GREATER, operator.count, Literal("0", BIGINT)))
    if isinstance(operator.count, Literal) and operator.count.text != "0":
        conditions.pop()
    block.stage = Stage.WINDOW
    if gathering.dialect not in QUALIFY_DIALECTS:
        block.columns = (*block.columns, rank)
        block = derived(block)
    _add_condition(block, conditions)
    block.columns = shown
    block.order, block.stage = keys, Stage.ORDER
    return block


# --- joins -----------------------------------------------------------------------------------------------------------


def _join(operator: Join, left: Query, right: Query, gathering: Gathering) -> Block:
    lateral = bool(dependent(operator))
    if operator.kind is JoinKind.SINGLE and len(attributes(operator.right)) > 1 and _one_row(operator.right):
        # Several values of one row: better joined once than a subquery for each.
        if operator.condition == TRUE and (not lateral or gathering.dialect in LATERAL_DIALECTS):
            operator = replace(operator, kind=JoinKind.LEFT)
    if operator.kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK, JoinKind.SINGLE):
        return _join_term(operator, left, right)
    block = _left_side(operator, left)
    item, where, definitions = _right_side(operator, right, lateral)
    if block.hidden().intersection({*_hidden_of(item), *definitions}):
        # An operator that both sides reach: one of them keeps its attributes to itself.
        item, where, definitions = _wrapped_item(operator, right, lateral), [], {}
        if block.hidden().intersection(item.attributes):
            block = derived(block)
    item.kind, item.on, item.lateral = operator.kind, operator.condition, lateral
    if not block.items:
        block = derived(block)
    block.items.append(item)
    block.where.extend(where)
    block.definitions.update(definitions)
    if where:
        block.stage = max(block.stage, Stage.WHERE)
    block.columns = attributes(operator)
    return block


def _hidden_of(item: Item) -> set[Attribute]:
    return Block([item]).hidden()


def _left_side(operator: Join, left: Query) -> Block:
    block = _block(left, Stage.WHERE)
    padded = operator.kind in (JoinKind.RIGHT, JoinKind.FULL)
    if padded and (block.stage is not Stage.FROM or block.definitions):
        return derived(block)
    if any(volatile(d) for d in block.definitions.values() if isinstance(d, Node)):
        return derived(block)
    if _reads_terms(block, [operator.condition]):
        return derived(block)
    return block


def _right_side(
    operator: Join, right: Query, lateral: bool
) -> tuple[Item, list[Condition], dict[Attribute, Definition]]:
    plain = isinstance(right, Block) and right.items and not lateral
    if plain and isinstance(right, Block) and right.stage is Stage.FROM and not right.definitions:
        if right.columns == _shown(right) or set(right.columns) <= set(_shown(right)):
            return _merged_item(right), [], {}
    if (
        plain
        and isinstance(right, Block)
        and operator.kind is JoinKind.INNER
        and right.stage <= Stage.WHERE
        and not any(isinstance(d, SubqueryTerm) or volatile(d) for d in right.definitions.values())
        and not _reads_terms(right, [operator.condition])
    ):
        return _merged_item(right), list(right.where), dict(right.definitions)
    return _wrapped_item(operator, right, lateral), [], {}


def _shown(block: Block) -> tuple[Attribute, ...]:
    return tuple(a for item in block.items for a in item.attributes)


def _merged_item(right: Block) -> Item:
    if len(right.items) == 1:
        return replace(right.items[0], alias=right.items[0].alias or right.alias)
    return Item(Nested(right.items), _shown(right))


def _wrapped_item(operator: Join, right: Query, lateral: bool) -> Item:
    if isinstance(right, Block) and right.columns != attributes(operator.right):
        right = _with_columns(right, attributes(operator.right))
    return Item(right, attributes(operator.right), right.alias)


def _join_term(operator: Join, left: Query, right: Query) -> Block:
    """Semi-, anti-, mark and single joins, which SQL writes as conditions and values."""
    outer = dependent(operator) | refs(operator.condition)
    single = operator.kind in (JoinKind.SEMI, JoinKind.ANTI)
    block = _block(left, Stage.HAVING)
    computed = _reads_terms(block, [Ref(a) for a in outer], (Aggregate, WindowCall, SubqueryTerm))
    if computed or _too_heavy(block, [Ref(a) for a in outer if a in block.definitions] * 2):
        block = derived(block)
    inner_names = right.hidden() if isinstance(right, Block) else set(right.columns)
    if inner_names.intersection(outer.difference(right.columns)) or inner_names.intersection(block.hidden()):
        right = derived(_with_columns(right, attributes(operator.right)))
        if set(right.columns).intersection(block.hidden()):
            block = derived(block)
    if single:
        _add_condition(block, [SubqueryTerm(operator.kind, right, operator.condition)])
    elif operator.mark is not None:
        block.definitions[operator.mark] = SubqueryTerm(operator.kind, right, operator.condition)
        block.weights[operator.mark] = _HEAVY + 1
    else:
        if operator.condition != TRUE:
            right = _filtered(right, operator.condition)
        for attribute in attributes(operator.right):
            block.definitions[attribute] = SubqueryTerm(operator.kind, right, TRUE, attribute)
            block.weights[attribute] = _HEAVY + 1
    block.columns = attributes(operator)
    return block


def _one_row(operator: Operator) -> bool:
    """Whether the operator gives at most one row, whatever the data."""
    while isinstance(operator, (Project, Select, Sort)):
        operator = operator.input
    match operator:
        case Group(keys=(), sets=None):
            return True
        case Limit(count=Literal(text="0" | "1"), with_ties=False):
            return True
        case Values(rows=rows):
            return len(rows) <= 1
        case _:
            return False


def _filtered(query: Query, condition: Scalar) -> Block:
    block = _block(query, Stage.WHERE)
    _add_condition(block, list(conjuncts(condition)))
    return block


def _unnest(operator: Unnest, below: Query, gathering: Gathering) -> Block:
    block = _block(below, Stage.WHERE)
    if _reads_terms(block, [operator.term]):
        block = derived(block)
    own = (*operator.attributes, *(() if operator.position is None else (operator.position,)))
    kind = JoinKind.LEFT if operator.keep_empty else JoinKind.INNER
    fields: tuple[str, ...] = ()
    if isinstance(operator.term, Ref) and operator.term.attribute in gathering.fields:
        fields = gathering.fields[operator.term.attribute]
    elif len(operator.attributes) > 1:
        fields = tuple(unique_names(operator.attributes).values())
    block.items.append(Item(operator, own, "", kind, TRUE, True, fields))
    block.columns = attributes(operator)
    return block


def _divide(operator: Divide, gathering: Gathering) -> Query:
    """The quotient without a division: distinct rows for which no divisor row lacks its partner in the dividend."""
    kept = attributes(operator)
    quotient = Distinct(Project(operator.dividend, tuple(Column(a, Ref(a)) for a in kept)))
    again, mapping = copied(operator.dividend)
    same = [_same(mapping[a], a) for a in kept]
    partner = [_same(mapping[a], b) for a, b in operator.by]
    lacking = Join(JoinKind.ANTI, operator.divisor, again, conjunction([*same, *partner]))
    plan = Join(JoinKind.ANTI, quotient, lacking, TRUE)
    inner = replace(gathering, recurring={})
    return gather((plan,), inner)[plan]


def _same(left: Attribute, right: Attribute) -> Scalar:
    return Comparison(ComparisonOperator.NOT_DISTINCT, Ref(left), Ref(right))
