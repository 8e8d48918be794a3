"""Where attributes come from."""

from __future__ import annotations

from core.algebra.graph import inputs, postorder
from core.algebra.notation import scalar_text
from core.algebra.operators import (
    Fixpoint,
    Group,
    Join,
    Nest,
    Operator,
    Project,
    Relation,
    SetOperation,
    Unnest,
    Values,
    Window,
)
from core.algebra.scalars import Attribute, Ref, refs

Origin = tuple[Relation, Attribute]


def origins(root: Operator) -> dict[Attribute, frozenset[Origin]]:
    """The base attributes that each attribute produced in the graph is computed from."""
    found: dict[Attribute, frozenset[Origin]] = {}

    def of(attributes: frozenset[Attribute]) -> frozenset[Origin]:
        return frozenset(origin for a in attributes for origin in found.get(a, ()))

    for operator in postorder(root):
        match operator:
            case Relation(attributes=own):
                found.update({a: frozenset({(operator, a)}) for a in own})
            case Project(columns=columns):
                found.update({c.attribute: of(refs(c.value)) for c in columns})
            case Group(aggregates=aggregates):
                found.update({c.attribute: of(refs(c.aggregate)) for c in aggregates})
            case Window(columns=window_columns):
                found.update({c.attribute: of(refs(c.call)) for c in window_columns})
            case SetOperation(attributes=own, sources=sources) | Fixpoint(attributes=own, sources=sources):
                for i, attribute in enumerate(own):
                    found[attribute] = of(frozenset(source[i] for source in sources))
            case Join(mark=mark, condition=condition) if mark is not None:
                found[mark] = of(refs(condition))
            case Unnest(term=term, attributes=own):
                found.update({a: of(refs(term)) for a in own})
            case Nest(nested=nested, into=into):
                found[into] = of(frozenset(nested))
            case Values(attributes=own):
                found.update({a: frozenset() for a in own})
            case _:
                pass
    return found


def base_of(root: Operator) -> dict[Attribute, Origin]:
    """The base attribute whose very value an attribute holds (or NULL, above an outer join), where there is one."""
    found: dict[Attribute, Origin] = {}
    for operator in postorder(root):
        if isinstance(operator, Relation):
            found.update({a: (operator, a) for a in operator.attributes})
        elif isinstance(operator, Project):
            for column in operator.columns:
                if isinstance(column.value, Ref) and column.value.attribute in found:
                    found[column.attribute] = found[column.value.attribute]
    return found


def lineage_text(attribute: Attribute, operator: Operator) -> str:
    """Where an attribute of an operator's schema comes from, in words."""
    for below in reversed(postorder(operator)):
        match below:
            case Relation(name=name, attributes=own) if attribute in own:
                return f"{name}.{attribute.name}"
            case Project(columns=columns):
                for column in columns:
                    if column.attribute == attribute and column.value != Ref(attribute):
                        if isinstance(column.value, Ref):
                            return lineage_text(column.value.attribute, below.input)
                        return scalar_text(column.value)
            case Group(aggregates=aggregates):
                for aggregate in aggregates:
                    if aggregate.attribute == attribute:
                        return scalar_text(aggregate.aggregate)
            case Window(columns=window_columns):
                for window_column in window_columns:
                    if window_column.attribute == attribute:
                        return scalar_text(window_column.call)
            case SetOperation(attributes=own, sources=sources) if attribute in own:
                place = own.index(attribute)
                parts = zip(sources, inputs(below), strict=True)
                return " or ".join(dict.fromkeys(lineage_text(source[place], part) for source, part in parts))
            case Join(mark=mark) if mark == attribute:
                return "whether a partner exists"
            case _:
                pass
    return attribute.name
