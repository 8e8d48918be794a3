"""The state of one reading: what has been found wrong, what was named, where each operator stands in the text."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

from sqlglot import exp

from core.algebra.formulation import Span
from core.algebra.operators import JoinKind, Operator, Values
from core.algebra.scalars import Attribute, Scalar, fresh
from core.algebra.types import BOOLEAN
from core.catalog.model import Catalog
from core.language.diagnostic import Diagnostic, ReadError, nearest
from core.language.sql.scope import Environment, Result, Scope, Source

ReadQuery = Callable[[exp.Expression, Environment, "Block | None"], Result]


@dataclass(slots=True)
class Reading:
    """Shared by all parts of the reader while one text is read."""

    text: str
    catalog: Catalog
    dialect: str
    read_query: ReadQuery
    inferred: dict[str, dict[str, str]] = field(default_factory=dict)
    step_uses: dict[str, int] = field(default_factory=dict)
    diagnostics: list[Diagnostic] = field(default_factory=list)
    names: dict[Operator, str] = field(default_factory=dict)
    aliases: dict[Operator, str] = field(default_factory=dict)
    spans: dict[Operator, Span] = field(default_factory=dict)

    def mark(self, operator: Operator, *nodes: exp.Expression | None) -> Operator:
        """Remembers which text an operator came from; the first to mark it is right."""
        span = hull(*nodes)
        if span is not None:
            self.spans.setdefault(operator, span)
        return operator

    def note(self, code: str, message: str, node: exp.Expression | None, *notes: str, help: str = "") -> None:
        found = Diagnostic(code, message, hull(node), "note", notes, help)
        if found not in self.diagnostics:
            self.diagnostics.append(found)

    def error(self, code: str, message: str, node: exp.Expression | None, *notes: str, help: str = "") -> None:
        """Records an error that does not stop the reading: others may be found in the same run."""
        found = Diagnostic(code, message, hull(node), "error", notes, help)
        if found not in self.diagnostics:
            self.diagnostics.append(found)

    def refuse(self, message: str, node: exp.Expression | None, help: str = "") -> ReadError:
        """The error for text that the algebra cannot hold. It stops the reading: nothing may mean something else."""
        refusal = Diagnostic("not-represented", message, hull(node), "error", (), help)
        return ReadError([*(d for d in self.diagnostics if d.severity == "error"), refusal], self.text)


@dataclass(slots=True)
class Block:
    """One SELECT while it is read: the plan so far, and what names mean.

    Reading a scalar that holds a subquery joins the subquery to `plan`. `known` maps parts of the text that have been
    computed below (aggregates, windows, group keys) to their value. `keys` are the attributes a grouped block may read.
    """

    reading: Reading
    environment: Environment
    scope: Scope
    plan: Operator
    outer: Block | None = None
    known: dict[int, Scalar] = field(default_factory=dict)
    select_aliases: dict[str, exp.Expression] = field(default_factory=dict)
    resolving: set[str] = field(default_factory=set)
    keys: dict[Scalar, Attribute] | None = None
    before: Block | None = None

    def aside(self, scope: Scope) -> Block:
        """A block with other names in view, over a plan of its own."""
        return Block(self.reading, self.environment, scope, NOTHING, self.outer)

    def resolve(self, node: exp.Column) -> Scalar:
        """What a column name means here, or further out. Unknown and ambiguous names are recorded as errors."""
        name, alias = node.name, node.table
        block: Block | None = self
        while block is not None:
            found = block._here(node, name, alias)
            if found is not None:
                return block._grouped(found, node)
            block = block.outer
        inferred = self._inferred(node, name, alias)
        if inferred is not None:
            return inferred
        self._unknown(node, name, alias)
        return _stand_in(name)

    def _here(self, node: exp.Column, name: str, alias: str) -> Scalar | None:
        if alias:
            source = self.scope.source(alias)
            if source is None:
                return None
            found = source.find(name)
            if found is None:
                self._unknown(node, name, alias)
                return _stand_in(name)
            return found
        candidates = self.scope.named(name)
        if len({column.value for column in candidates}) > 1:
            owners = ", ".join(dict.fromkeys(column.alias for column in candidates))
            self.reading.error(
                "ambiguous-name", f"{name} is ambiguous", node, f"it is a column of {owners}", help="write which one"
            )
        return candidates[0].value if candidates else None

    def _inferred(self, node: exp.Column, name: str, alias: str) -> Scalar | None:
        """A bare name that no described relation has: a column of a relation that is not in the catalog."""
        block: Block | None = self
        while block is not None and not alias:
            sources = block.scope.open_sources()
            if sources:
                if len(sources) > 1:
                    owners = " or ".join(source.alias for source in sources)
                    self.reading.note(
                        "inferred-name",
                        f"{name} may be a column of {owners}; it is read as one of {sources[0].alias}",
                        node,
                    )
                found = sources[0].find(name)
                return None if found is None else block._grouped(found, node)
            block = block.outer
        return None

    def _grouped(self, value: Scalar, node: exp.Expression) -> Scalar:
        from core.language.sql.grouping import grouped_value

        return value if self.keys is None else grouped_value(self, value, node)

    def _unknown(self, node: exp.Column, name: str, alias: str) -> None:
        blocks: list[Block] = []
        block: Block | None = self
        while block is not None:
            blocks.append(block)
            block = block.outer
        sources = [source for b in blocks for source in b.scope.sources]
        if alias and not any(source.alias.lower() == alias.lower() for source in sources):
            meant = nearest(alias, (source.alias for source in sources))
            known = ", ".join(source.alias for source in sources)
            self.reading.error(
                "unknown-relation",
                f"no item of FROM is called {alias}",
                node.args.get("table"),
                *([f"in view: {known}"] if known else []),
                help=f"did you mean {meant}?" if meant else "",
            )
            return
        if alias:
            sources = [source for source in sources if source.alias.lower() == alias.lower()]
        columns = [column.name for source in sources for column in source.shown]
        meant = nearest(name, columns)
        where = f" in {alias}" if alias else ""
        self.reading.error(
            "unknown-attribute",
            f"no column {name}{where}",
            node.this,
            *([] if meant or not columns else [f"columns in view: {_some(columns)}"]),
            help=f"did you mean {meant}?" if meant else "",
        )


def _some(names: Iterable[str], most: int = 12) -> str:
    unique = list(dict.fromkeys(names))
    return ", ".join(unique[:most]) + (", ..." if len(unique) > most else "")


def _stand_in(name: str) -> Scalar:
    """Stands for a name that meant nothing, so that the reading can go on and find more; the text is refused at its end."""
    from core.algebra.scalars import Literal
    from core.algebra.types import UNKNOWN

    return Literal(None, UNKNOWN)


NOTHING = Values((), ((),))
"""The input of a SELECT without FROM: one row without attributes."""


def source_of(alias: str, result: Result) -> Source:
    """A query's result as an item of FROM."""
    from core.algebra.scalars import Ref
    from core.language.sql.scope import Shown

    return Source(alias, [Shown(name, Ref(attribute), alias) for attribute, name in result.columns])


def truth_mark(kind: JoinKind) -> Attribute | None:
    return fresh("holds", BOOLEAN) if kind is JoinKind.MARK else None


def hull(*nodes: exp.Expression | None) -> Span | None:
    """The smallest stretch of text that holds all of the nodes' positioned parts."""
    start, end = -1, -1
    pending = [node for node in nodes if node is not None]
    while pending:
        node = pending.pop()
        meta = node.meta if isinstance(node, (exp.Identifier, exp.Literal, exp.Func, exp.Star)) else None
        if meta and "start" in meta and not meta.get("made"):
            start = meta["start"] if start < 0 else min(start, meta["start"])
            end = max(end, meta["end"] + 1)
        pending.extend(node.iter_expressions())
    return None if start < 0 else Span(start, end)
