"""Joins and unnesting taken into SELECT blocks: items of FROM, conditions, values."""

from __future__ import annotations

from dataclasses import replace

from core.algebra.functions import volatile
from core.algebra.graph import attributes, dependent
from core.algebra.operators import (
    Group,
    Join,
    JoinKind,
    Limit,
    Operator,
    Project,
    Select,
    Sort,
    Unnest,
    Values,
)
from core.algebra.scalars import (
    TRUE,
    Aggregate,
    Attribute,
    Literal,
    Node,
    Ref,
    Scalar,
    WindowCall,
    conjuncts,
    refs,
)
from core.language.sql.blocks import (
    Block,
    Condition,
    Definition,
    Item,
    Nested,
    Query,
    Stage,
    SubqueryTerm,
    derived,
)
from core.language.sql.building import (
    HEAVY,
    LATERAL_DIALECTS,
    Gathering,
    add_condition,
    opened,
    reads_any,
    too_heavy,
    unique_names,
    with_columns,
)


def join(operator: Join, left: Query, right: Query, gathering: Gathering) -> Block:
    """Both sides in one block where SQL's clauses allow it; joins that ask or fetch become conditions and values."""
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
    block = opened(left, Stage.WHERE)
    padded = operator.kind in (JoinKind.RIGHT, JoinKind.FULL)
    if padded and (block.stage is not Stage.FROM or block.definitions):
        return derived(block)
    if any(volatile(d) for d in block.definitions.values() if isinstance(d, Node)):
        return derived(block)
    if reads_any(block, [operator.condition]):
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
        and not reads_any(right, [operator.condition])
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
        right = with_columns(right, attributes(operator.right))
    return Item(right, attributes(operator.right), right.alias)


def _join_term(operator: Join, left: Query, right: Query) -> Block:
    """Semi-, anti-, mark and single joins, which SQL writes as conditions and values."""
    outer = dependent(operator) | refs(operator.condition)
    single = operator.kind in (JoinKind.SEMI, JoinKind.ANTI)
    block = opened(left, Stage.HAVING)
    computed = reads_any(block, [Ref(a) for a in outer], (Aggregate, WindowCall, SubqueryTerm))
    if computed or too_heavy(block, [Ref(a) for a in outer if a in block.definitions] * 2):
        block = derived(block)
    inner_names = right.hidden() if isinstance(right, Block) else set(right.columns)
    if inner_names.intersection(outer.difference(right.columns)) or inner_names.intersection(block.hidden()):
        right = derived(with_columns(right, attributes(operator.right)))
        if set(right.columns).intersection(block.hidden()):
            block = derived(block)
    if single:
        add_condition(block, [SubqueryTerm(operator.kind, right, operator.condition)])
    elif operator.mark is not None:
        block.definitions[operator.mark] = SubqueryTerm(operator.kind, right, operator.condition)
        block.weights[operator.mark] = HEAVY + 1
    else:
        if operator.condition != TRUE:
            right = _filtered(right, operator.condition)
        for attribute in attributes(operator.right):
            block.definitions[attribute] = SubqueryTerm(operator.kind, right, TRUE, attribute)
            block.weights[attribute] = HEAVY + 1
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
    block = opened(query, Stage.WHERE)
    add_condition(block, list(conjuncts(condition)))
    return block


def unnest(operator: Unnest, below: Query, gathering: Gathering) -> Block:
    """The block with the list beside its items, for each row's list its elements."""
    block = opened(below, Stage.WHERE)
    # A row without FROM is no item that a left join could keep.
    if reads_any(block, [operator.term]) or (operator.keep_empty and not block.items):
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
