"""What a name can mean at a place in a query: the items of FROM, the columns they show, and the queries around."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

from core.algebra.operators import Operator
from core.algebra.scalars import Attribute, Scalar


@dataclass(frozen=True, slots=True)
class Shown:
    """A column that an item of FROM shows: its name, what it is, and the item's alias ("" for a column merged by USING)."""

    name: str
    value: Scalar
    alias: str


@dataclass(slots=True)
class Source:
    """One item of FROM. `infer` makes an attribute for a column of a relation that no catalog describes."""

    alias: str
    shown: list[Shown]
    infer: Callable[[str], Scalar] | None = None

    def find(self, name: str) -> Scalar | None:
        folded = name.lower()
        for column in self.shown:
            if column.name.lower() == folded:
                return column.value
        return self.infer(name) if self.infer is not None else None


@dataclass(slots=True)
class Scope:
    """The items in view, and the columns that a bare name or a star means, in order."""

    sources: list[Source] = field(default_factory=list)
    shown: list[Shown] = field(default_factory=list)
    _by_name: dict[str, list[Shown]] | None = None

    def named(self, name: str) -> list[Shown]:
        """The columns that a bare name may mean."""
        if self._by_name is None:
            self._by_name = {}
            for column in self.shown:
                self._by_name.setdefault(column.name.lower(), []).append(column)
        return self._by_name.get(name.lower(), [])

    def source(self, alias: str) -> Source | None:
        folded = alias.lower()
        return next((source for source in self.sources if source.alias.lower() == folded), None)

    def open_sources(self) -> list[Source]:
        return [source for source in self.sources if source.infer is not None]

    def beside(self, other: Scope) -> Scope:
        """Both scopes' items, as in a comma list."""
        return Scope(self.sources + other.sources, self.shown + other.shown)

    def names(self) -> Iterable[str]:
        return (column.name for column in self.shown)


def scope_of(source: Source) -> Scope:
    return Scope([source], list(source.shown))


@dataclass(frozen=True, slots=True)
class Result:
    """A query that has been read: its operator and its columns in order with their names (attributes are distinct)."""

    plan: Operator
    columns: tuple[tuple[Attribute, str], ...]


@dataclass(slots=True)
class Step:
    """A common table expression: its result once read, and how often the text uses it."""

    name: str
    result: Result
    uses: int


@dataclass(slots=True)
class Environment:
    """The steps in view; inner ones hide outer ones of the same name. `recurring` steps make their leaf at each use."""

    outer: Environment | None = None
    steps: dict[str, Step | Callable[[], Result]] = field(default_factory=dict)

    def find(self, name: str) -> Step | Callable[[], Result] | None:
        folded = name.lower()
        environment: Environment | None = self
        while environment is not None:
            found = environment.steps.get(folded)
            if found is not None:
                return found
            environment = environment.outer
        return None

    def names(self) -> list[str]:
        found: list[str] = []
        environment: Environment | None = self
        while environment is not None:
            found.extend(environment.steps)
            environment = environment.outer
        return found
