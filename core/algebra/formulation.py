"""A formulation: one way to write the query, as an operator graph with named outputs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from core.algebra.graph import attributes, faults, postorder, rebuilt
from core.algebra.operators import Operator
from core.algebra.scalars import Attribute


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of the text: offsets in characters, `end` exclusive."""

    start: int
    end: int


@dataclass(frozen=True, slots=True, eq=False)
class Output:
    """A result that is asked for: the operator, and its columns in order with the names they bear outside.

    Columns may be fewer than the operator's attributes (an ordering may need one that is not shown) and may repeat.
    """

    name: str
    operator: Operator
    columns: tuple[tuple[Attribute, str], ...]


class IllegalFormulation(ValueError):
    """An operator graph that means nothing; the message says what is wrong with it."""


@dataclass(frozen=True, slots=True, eq=False)
class Formulation:
    """Outputs over one shared operator graph, and what is remembered of the text they came from.

    `names` are the steps: operators that the text defines by name (common table expressions). `aliases` are what the
    text calls a derived table, or one use of a step (then the operator is the renaming over the step). `spans` say where in `text` an operator was written. Both are kept by operator identity; after a rewrite an operator
    that is only rebuilt over changed inputs keeps its name and span; `rewritten` says that `text` is no longer its text. `notes` are what
    had to be assumed in reading, in words.
    """

    outputs: tuple[Output, ...]
    names: Mapping[Operator, str] = field(default_factory=dict)
    aliases: Mapping[Operator, str] = field(default_factory=dict)
    spans: Mapping[Operator, Span] = field(default_factory=dict)
    text: str = ""
    dialect: str = "duckdb"
    rewritten: bool = False
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.outputs:
            raise IllegalFormulation("a formulation needs an output")
        for output in self.outputs:
            wrong = faults(output.operator)
            own = set(attributes(output.operator))
            wrong.extend(f"output {output.name} lacks {a.name}" for a, _ in output.columns if a not in own)
            if wrong:
                raise IllegalFormulation("; ".join(wrong))

    @property
    def root(self) -> Operator:
        """The operator of the last output: the answer, where there is only one."""
        return self.outputs[-1].operator

    def roots(self) -> tuple[Operator, ...]:
        return tuple(output.operator for output in self.outputs)

    def operators(self) -> list[Operator]:
        """Every operator once, inputs before the operators that read them."""
        return postorder(*self.roots())

    def replaced(self, changes: Mapping[Operator, Operator]) -> Formulation:
        """The formulation with operators replaced wherever they stand. Names and spans move to what stands in their place."""
        roots, became = rebuilt(self.roots(), changes)
        outputs = tuple(replace(output, operator=root) for output, root in zip(self.outputs, roots, strict=True))
        names, aliases, spans = (
            {became.get(old, old): value for old, value in known.items()}
            for known in (self.names, self.aliases, self.spans)
        )
        return replace(self, outputs=outputs, names=names, aliases=aliases, spans=spans, rewritten=True)  # type: ignore[arg-type]
