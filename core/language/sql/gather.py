"""From an operator graph to SELECT blocks and common table expressions."""

from __future__ import annotations

from collections.abc import Sequence
from copy import deepcopy
from dataclasses import replace

from core.algebra.functions import volatile
from core.algebra.graph import attributes, copied, inputs, parents, postorder
from core.algebra.operators import (
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
    Ref,
    Scalar,
    SortKey,
    WindowCall,
    conjunction,
    conjuncts,
    fresh,
    refs,
)
from core.algebra.types import BIGINT
from core.language.sql.blocks import (
    Block,
    Condition,
    Item,
    Query,
    SetQuery,
    Stage,
    StepDefinition,
    StepUse,
    derived,
)
from core.language.sql.building import (
    QUALIFY_DIALECTS,
    TIES_DIALECTS,
    Gathering,
    add_condition,
    define,
    leaves,
    opened,
    reads_any,
    too_heavy,
    unique_names,
    with_columns,
)
from core.language.sql.gather_groups import group, nest, note_fields
from core.language.sql.gather_joins import join, unnest
from core.language.sql.sharing import Sharing


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
        note_fields(operator, gathering)
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
        query = with_columns(query, attributes(operator))
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
            return join(operator, below[0], below[1], gathering)
        case SetOperation():
            parts = [with_columns(_open(part), source) for part, source in zip(below, operator.sources, strict=True)]
            return SetQuery(operator.kind, operator.distinct, parts, operator.attributes)
        case Fixpoint():
            parts = [with_columns(_open(part), source) for part, source in zip(below, operator.sources, strict=True)]
            return SetQuery(SetKind.UNION, operator.distinct, parts, operator.attributes)
        case Distinct():
            return _distinct(below[0])
        case Group():
            return group(operator, below[0])
        case Window():
            return _window(operator, below[0])
        case Sort():
            return _sort(operator, below[0])
        case Limit():
            return _limit(operator, below[0], gathering)
        case Unnest():
            return unnest(operator, below[0], gathering)
        case Divide():
            return _divide(operator, gathering)
        case Nest():
            return nest(operator, below[0], gathering)


def _empty(own: tuple[Attribute, ...]) -> Block:
    """No rows, with the types of the attributes: a condition that is never true."""
    block = Block(columns=own, where=[FALSE], stage=Stage.WHERE)
    for attribute in own:
        block.definitions[attribute] = Cast(Literal(None, attribute.type), attribute.type)
    return block


def _open(query: Query) -> Query:
    """A query that may stand in a set operation: one without its own order or limit keeps its shape."""
    return derived(query) if query.stage >= Stage.ORDER else query


def _select(operator: Select, below: Query, gathering: Gathering) -> Block:
    highest = Stage.QUALIFY if gathering.dialect in QUALIFY_DIALECTS else Stage.HAVING
    block = opened(below, highest)
    if too_heavy(block, [operator.condition]):
        block = derived(block)
    if block.stage >= Stage.WINDOW and not reads_any(block, [operator.condition], (WindowCall,)):
        # QUALIFY is for conditions on windows; another condition would read as one.
        block = derived(block)
    add_condition(block, list(conjuncts(operator.condition)) or [TRUE])
    return block


def _project(operator: Project, below: Query) -> Block:
    block = opened(below, Stage.LIMIT)
    renaming = _step_renaming(operator, block)
    if renaming is not None:
        return renaming
    values = [column.value for column in operator.columns]
    own = {column.attribute for column in operator.columns if column.value != Ref(column.attribute)}
    if block.distinct or too_heavy(block, values) or own.intersection(block.hidden()):
        block = derived(block)
    if block.stage >= Stage.ORDER and any(volatile(value) for value in values):
        block = derived(block)
    if block.stage in (Stage.FROM, Stage.WHERE) and any(isinstance(v, Aggregate) for v in values):
        block = derived(block)
    for column in operator.columns:
        define(block, column.attribute, column.value)
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
        if below.kind is SetKind.UNION:
            below.distinct = True
            return below
    block = opened(below, Stage.QUALIFY)
    block.distinct = True
    block.stage = Stage.DISTINCT
    return block


def _window(operator: Window, below: Query) -> Block:
    block = opened(below, Stage.HAVING)
    calls = [column.call for column in operator.columns]
    if too_heavy(block, calls) or reads_any(block, calls):
        block = derived(block)
    for column in operator.columns:
        define(block, column.attribute, replace(column.call, order=_telling(block, column.call.order)))
    block.columns = attributes(operator)
    block.stage = Stage.WINDOW
    return block


def _sort(operator: Sort, below: Query) -> Query:
    if isinstance(below, SetQuery):
        simple = all(isinstance(key.term, Ref) for key in operator.keys)
        if below.stage < Stage.ORDER and simple:
            below.order, below.stage = operator.keys, Stage.ORDER
            return below
    block = opened(below, Stage.DISTINCT)
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
    add_condition(block, conditions)
    block.columns = shown
    block.order, block.stage = keys, Stage.ORDER
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
