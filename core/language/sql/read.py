"""`read_sql`: text in, formulation out."""

from __future__ import annotations

from collections import Counter
from typing import cast

import sqlglot
from sqlglot import exp
from sqlglot.errors import ParseError, SqlglotError, TokenError

from core.algebra.formulation import Formulation, IllegalFormulation, Output, Span
from core.catalog.model import Catalog
from core.language.diagnostic import Diagnostic, ReadError, position
from core.language.sql.depth import deep
from core.language.sql.queries import read_query
from core.language.sql.reading import Block, Reading
from core.language.sql.scope import Environment, Result

_PASSES = 5


def read_sql(text: str, catalog: Catalog | None = None, dialect: str = "duckdb") -> Formulation:
    """The formulation that a query means.

    `dialect` is any dialect of sqlglot. Relations that the catalog lacks get the attributes that the text uses.
    Raises `ReadError` with everything found wrong: text that does not parse, names that mean nothing, and what the
    algebra cannot hold (refused in words; a text never becomes a tree that means something else).
    """
    return deep(lambda: _read(text, catalog or Catalog(), dialect), _levels(text))


def _levels(text: str) -> int:
    """A bound on how deeply the parser will recurse, from the text alone: open parentheses and operator chains."""
    depth = deepest = 0
    for character in text:
        if character == "(":
            depth += 1
            deepest = max(deepest, depth)
        elif character == ")":
            depth -= 1
    return max(deepest * 20, len(text) // 8)


def _read(text: str, catalog: Catalog, dialect: str) -> Formulation:
    inferred: dict[str, dict[str, str]] = {}
    for _ in range(_PASSES):
        tree = _parsed(text, dialect)
        known = sum(len(columns) for columns in inferred.values())
        reading = _reading(text, catalog, dialect, inferred, tree)
        result = reading.read_query(tree, Environment(), None)
        errors = [found for found in reading.diagnostics if found.severity == "error"]
        if errors:
            raise ReadError(errors, text)
        if known == sum(len(columns) for columns in inferred.values()):
            return _formulation(result, reading)
    raise ReadError([Diagnostic("unsettled-columns", "the columns of unknown relations do not settle")], text)


def _reading(
    text: str, catalog: Catalog, dialect: str, inferred: dict[str, dict[str, str]], tree: exp.Expression
) -> Reading:
    uses = Counter(t.name.lower() for t in tree.find_all(exp.Table) if not t.args.get("db"))

    def reader(node: exp.Expression, environment: Environment, outer: Block | None) -> Result:
        return read_query(node, environment, outer, reading)

    reading = Reading(text, catalog, dialect, reader, inferred, dict(uses))
    return reading


def _formulation(result: Result, reading: Reading) -> Formulation:
    output = Output("answer", result.plan, result.columns)
    try:
        made = Formulation(
            (output,),
            reading.names,
            reading.aliases,
            reading.spans,
            reading.text,
            reading.dialect,
            notes=_notes(reading),
        )
    except IllegalFormulation as fault:
        raise ReadError([Diagnostic("not-represented", str(fault))], reading.text) from fault
    return made


def _notes(reading: Reading) -> tuple[str, ...]:
    """What was assumed, with the line it concerns."""
    found = []
    for note in reading.diagnostics:
        where = "" if note.span is None else f"line {position(reading.text, note.span.start)[0]}: "
        found.append(f"{where}{note.message}" + (f" ({note.help})" if note.help else ""))
    return tuple(found)


def _parsed(text: str, dialect: str) -> exp.Expression:
    try:
        statements = [node for node in sqlglot.parse(text, read=dialect) if node is not None]
    except ParseError as error:
        raise ReadError([_syntax(text, error)], text) from error
    except TokenError as error:
        raise ReadError([_unfinished(text, error)], text) from error
    except (SqlglotError, ValueError) as error:
        raise ReadError([Diagnostic("syntax", _sentence(str(error)))], text) from error
    statements = [node for node in statements if not isinstance(node, exp.Semicolon)]
    if not statements:
        raise ReadError([Diagnostic("empty", "there is no query in this text", Span(0, len(text)))], text)
    if len(statements) > 1:
        raise ReadError([Diagnostic("several-statements", "one query is read at a time")], text)
    node = statements[0]
    if not isinstance(node, (exp.Query, exp.Values)):
        kind = node.key if not isinstance(node, exp.Command) else str(node.this).lower()
        raise ReadError([Diagnostic("no-query", f"this is a {kind} statement, not a query", Span(0, len(text)))], text)
    return cast(exp.Expression, node)


def _syntax(text: str, error: ParseError) -> Diagnostic:
    found = error.errors[0] if error.errors else {}
    message = _sentence(str(found.get("description") or error))
    word = str(found.get("highlight") or "")
    line, column = found.get("line"), found.get("col")
    if line is None or column is None:
        return Diagnostic("syntax", message, None)
    start = sum(len(row) + 1 for row in text.split("\n")[: line - 1]) + column - max(1, len(word))
    start = max(0, min(start, len(text)))
    notes = (f"at {word}",) if word else ("at the end of the text",)
    return Diagnostic("syntax", message, Span(start, start + max(1, len(word))), notes=notes)


def _unfinished(text: str, error: TokenError) -> Diagnostic:
    return Diagnostic("syntax", _sentence(str(error)), Span(max(0, len(text) - 1), len(text)))


def _sentence(message: str) -> str:
    first = message.strip().split("\n")[0].split(". Line ")[0].rstrip(". ")
    return first[:1].lower() + first[1:]
