"""Which operators of a graph become common table expressions, and under what names."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from core.algebra.graph import free, inputs
from core.algebra.operators import Fixpoint, Operator, Project, Recurrence, Relation, Select, Sort, Values


@dataclass(frozen=True, slots=True)
class Sharing:
    """`uses` counts how often an operator's rows are written as input of something; `names` are the steps' names.

    What hands on the order of a sort is never a step of its own, since a common table expression has no order: it is
    written at each of its uses, and the input of the sort is shared (and named) in its stead. What reads the rows that
    a recursion has found so far stays inside it.
    """

    uses: Mapping[Operator, int]
    names: Mapping[Operator, str]
    inline: frozenset[Operator]

    @staticmethod
    def of(
        roots: Sequence[Operator],
        order: Sequence[Operator],
        readers: Mapping[Operator, Sequence[Operator]],
        names: Mapping[Operator, str],
    ) -> Sharing:
        """From the operators in postorder and who reads each."""
        ordered: set[Operator] = set()
        recurring: dict[Operator, frozenset[int]] = {}
        for operator in order:
            if isinstance(operator, Sort) or (isinstance(operator, (Project, Select)) and operator.input in ordered):
                ordered.add(operator)
            own = frozenset[int]().union(*(recurring[below] for below in inputs(operator)))
            if isinstance(operator, Recurrence):
                own = frozenset((operator.key,))
            recurring[operator] = own - {operator.key} if isinstance(operator, Fixpoint) else own
        uses: dict[Operator, int] = {}
        own_names = dict(names)
        for operator in reversed(order):
            uses[operator] = (operator in roots) + sum(uses[r] if r in ordered else 1 for r in readers[operator])
            if operator in ordered and operator in own_names:
                own_names.setdefault(inputs(operator)[0], own_names.pop(operator))
        inside = {operator for operator, keys in recurring.items() if keys}
        return Sharing(uses, own_names, frozenset(ordered | inside))

    def is_step(self, operator: Operator) -> bool:
        """Whether the operator is written as a common table expression."""
        if isinstance(operator, Fixpoint):
            return True
        if isinstance(operator, (Relation, Recurrence)) or operator in self.inline or free(operator):
            return False
        if isinstance(operator, Values) and not operator.attributes:
            return False
        return self.uses[operator] > 1 or operator in self.names
