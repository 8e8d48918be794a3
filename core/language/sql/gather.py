"""From an operator graph to SELECT blocks and common table expressions."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from copy import deepcopy
from dataclasses import dataclass, field, replace

from core.algebra.functions import volatile
from core.algebra.graph import attributes, copied, dependent, free, inputs, parents, postorder
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
    Attribute,
    Cast,
    Comparison,
    ComparisonOperator,
    Literal,
    Node,
    Ref,
    Scalar,
    WindowCall,
    conjunction,
    conjuncts,
    refs,
    walk,
)
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

_HEAVY = 60
"""An inlined expression of more nodes than this is computed in a derived table instead."""

QUALIFY_DIALECTS = frozenset({"duckdb", "snowflake", "bigquery", "databricks", "teradata", "clickhouse", "redshift"})


class WriteError(ValueError):
    """An operator that the asked language cannot express."""


@dataclass(slots=True)
class Gathering:
    """What is known while a graph is turned into blocks."""

    dialect: str
    names: Mapping[Operator, str]
    aliases: Mapping[Operator, str]
    steps: list[StepDefinition] = field(default_factory=list)
    taken: set[str] = field(default_factory=set)
    recurring: dict[int, tuple[str, tuple[Attribute, ...]]] = field(default_factory=dict)


def gather(roots: Sequence[Operator], gathering: Gathering) -> dict[Operator, Query]:
    """The query of each root; shared and named operators become steps of the gathering, in order of definition."""
    roots = tuple(roots)
    readers = parents(*roots)
    for operator in postorder(*roots):
        if isinstance(operator, Fixpoint):
            name = _free_name(operator.name or "reach", gathering)
            gathering.recurring[operator.key] = (name, operator.attributes)
        if isinstance(operator, Relation):
            gathering.taken.add(operator.name.lower())
    ready: dict[Operator, Query | StepUse] = {}
    for operator in postorder(*roots):
        below = [_take(ready, part, len(readers[part])) for part in inputs(operator)]
        query = _absorb(operator, below, gathering)
        if operator in gathering.aliases:
            query.alias = gathering.aliases[operator]
            if isinstance(query, Block) and len(query.items) == 1 and query.stage is Stage.FROM:
                query.items[0].alias = query.items[0].alias or query.alias
        uses = len(readers[operator]) + (operator in roots)
        ready[operator] = _as_step(operator, query, uses, gathering) if _is_step(operator, uses, gathering) else query
    return {root: _take(ready, root, 1 + len(readers[root])) for root in roots}


def _take(ready: dict[Operator, Query | StepUse], operator: Operator, readers: int) -> Query:
    found = ready[operator]
    if isinstance(found, StepUse):
        columns = tuple(found.columns)
        return Block([Item(StepUse(found.name, dict(found.columns)), columns, found.alias)], columns)
    # Blocks grow by absorption, so a second reader of a leaf or a correlated part needs one of its own.
    return deepcopy(found) if readers > 1 else found


def _is_step(operator: Operator, uses: int, gathering: Gathering) -> bool:
    if isinstance(operator, Fixpoint):
        return True
    if isinstance(operator, (Relation, Recurrence)) or free(operator):
        return False
    if isinstance(operator, Values) and not operator.attributes:
        return False
    return uses > 1 or (operator in gathering.names and uses == 1)


def _as_step(operator: Operator, query: Query, uses: int, gathering: Gathering) -> StepUse:
    if isinstance(operator, Fixpoint):
        name = gathering.recurring[operator.key][0]
    else:
        name = _free_name(gathering.names.get(operator) or _readable_name(operator), gathering)
    columns = unique_names(attributes(operator))
    if isinstance(query, Block) and query.columns != attributes(operator):
        query = _with_columns(query, attributes(operator))
    gathering.steps.append(StepDefinition(name, query, columns, isinstance(operator, Fixpoint)))
    return StepUse(name, columns, gathering.aliases.get(operator, "") if uses == 1 else "")


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
            return _join(operator, below[0], below[1])
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
            return _limit(operator, below[0])
        case Unnest():
            return _unnest(operator, below[0])
        case Divide():
            return _divide(operator, gathering)
        case Nest():
            raise WriteError("a nested relation has no form in SQL yet")


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
    if query.columns == columns:
        return query
    if isinstance(query, SetQuery) or query.distinct:
        query = derived(query)
    query.columns = columns
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
    """A renaming right over a step is just another use of it."""
    if block.stage is not Stage.FROM or len(block.items) != 1 or block.definitions:
        return None
    body = block.items[0].body
    if not isinstance(body, StepUse):
        return None
    columns: dict[Attribute, str] = {}
    for column in operator.columns:
        if not isinstance(column.value, Ref) or column.value == Ref(column.attribute):
            return None
        columns[column.attribute] = body.columns[column.value.attribute]
    own = tuple(columns)
    return Block([Item(StepUse(body.name, columns), own)], own)


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
    constant = any(isinstance(_meaning(block, key), (Literal, SubqueryTerm)) for key in operator.keys)
    if constant or _too_heavy(block, [*used, *(Ref(key) for key in operator.keys)]) or _reads_terms(block, used):
        block = derived(block)
    for column in operator.aggregates:
        _define(block, column.attribute, column.aggregate)
    block.keys = operator.keys
    block.sets = operator.sets
    block.columns = attributes(operator)
    block.stage = Stage.GROUP
    return block


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
        _define(block, column.attribute, column.call)
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
    block.order = operator.keys
    block.stage = Stage.ORDER
    return block


def _limit(operator: Limit, below: Query) -> Query:
    query = below if below.stage < Stage.LIMIT else derived(below)
    query.count, query.offset, query.ties = operator.count, operator.offset, operator.with_ties
    query.stage = Stage.LIMIT
    return query


# --- joins -----------------------------------------------------------------------------------------------------------


def _join(operator: Join, left: Query, right: Query) -> Block:
    if operator.kind in (JoinKind.SEMI, JoinKind.ANTI, JoinKind.MARK, JoinKind.SINGLE):
        return _join_term(operator, left, right)
    lateral = bool(dependent(operator))
    block = _left_side(operator, left)
    item, where, definitions = _right_side(operator, right, lateral)
    if block.hidden().intersection(_hidden_of(item), definitions) or block.hidden().intersection(definitions):
        item, where, definitions = _wrapped_item(operator, right, lateral), [], {}
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
    else:
        if operator.condition != TRUE:
            right = _filtered(right, operator.condition)
        for attribute in attributes(operator.right):
            block.definitions[attribute] = SubqueryTerm(operator.kind, right, TRUE, attribute)
    block.columns = attributes(operator)
    return block


def _filtered(query: Query, condition: Scalar) -> Block:
    block = _block(query, Stage.WHERE)
    _add_condition(block, list(conjuncts(condition)))
    return block


def _unnest(operator: Unnest, below: Query) -> Block:
    block = _block(below, Stage.WHERE)
    if _reads_terms(block, [operator.term]):
        block = derived(block)
    own = (*operator.attributes, *(() if operator.position is None else (operator.position,)))
    kind = JoinKind.LEFT if operator.keep_empty else JoinKind.INNER
    block.items.append(Item(operator, own, "", kind, TRUE, True))
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
    inner = Gathering(gathering.dialect, gathering.names, gathering.aliases, gathering.steps, gathering.taken)
    return gather((plan,), inner)[plan]


def _same(left: Attribute, right: Attribute) -> Scalar:
    return Comparison(ComparisonOperator.NOT_DISTINCT, Ref(left), Ref(right))
