"""Catalogs from CREATE TABLE statements, and back."""

from __future__ import annotations

from dataclasses import replace

import sqlglot
from sqlglot import exp
from sqlglot.errors import SqlglotError

from core.algebra.types import type_named
from core.catalog.model import AttributeFacts, Catalog, ForeignKey, RelationFacts, catalog_of


class CatalogError(ValueError):
    """A description of relations that cannot be read; the message says where and why."""


def catalog_from_ddl(text: str, dialect: str = "duckdb") -> Catalog:
    """The catalog that DDL declares: CREATE TABLE, ALTER TABLE ... ADD constraint, CREATE UNIQUE INDEX.

    Raises `CatalogError` for text that does not parse, for statements that declare no relation, and for constraints over
    attributes that are not there.
    """
    try:
        statements = sqlglot.parse(text, read=dialect)
    except SqlglotError as error:
        raise CatalogError(str(error)) from error
    relations: dict[str, RelationFacts] = {}
    for statement in statements:
        if statement is None or isinstance(statement, (exp.Semicolon, exp.Comment, exp.Grant)):
            continue
        if isinstance(statement, exp.Create) and statement.kind == "TABLE":
            facts = _relation(statement, text)
            if facts.name.lower() in relations:
                raise CatalogError(f"relation {facts.name} is declared twice")
            relations[facts.name.lower()] = facts
        elif isinstance(statement, exp.Create) and statement.kind == "INDEX":
            _index(statement, relations)
        elif isinstance(statement, exp.Alter):
            _alter(statement, relations)
        else:
            what = statement.key if not isinstance(statement, exp.Command) else str(statement.this).lower()
            raise CatalogError(f"a {what} statement declares no relation: {statement.sql(dialect)[:60]}")
    found = catalog_of(relations.values())
    return catalog_of(_resolved(facts, found) for facts in found)


def _relation(statement: exp.Create, text: str) -> RelationFacts:
    schema = statement.this
    if not isinstance(schema, exp.Schema):
        raise CatalogError(f"{statement.this.sql()} is declared without its attributes")
    name = ".".join(part.name for part in schema.this.parts)
    facts = RelationFacts(name, tuple(_attribute(d) for d in schema.expressions if isinstance(d, exp.ColumnDef)))
    for definition in schema.expressions:
        if isinstance(definition, exp.ColumnDef):
            for constraint in definition.args.get("constraints") or []:
                facts = _column_constraint(facts, definition.name, constraint.kind)
        else:
            facts = _constraint(facts, definition)
    return _checked(facts)


def _attribute(definition: exp.ColumnDef) -> AttributeFacts:
    kind = definition.args.get("kind")
    type_ = type_named(kind.sql("duckdb")) if kind is not None else type_named("UNKNOWN")
    return AttributeFacts(definition.name, type_)


def _column_constraint(facts: RelationFacts, name: str, kind: exp.Expression) -> RelationFacts:
    if isinstance(kind, exp.NotNullColumnConstraint):
        return facts if kind.args.get("allow_null") else _not_null(facts, (name,))
    if isinstance(kind, exp.PrimaryKeyColumnConstraint):
        return _not_null(replace(facts, primary=(name,)), (name,))
    if isinstance(kind, exp.UniqueColumnConstraint):
        return replace(facts, unique=(*facts.unique, (name,)))
    if isinstance(kind, exp.Reference):
        return _foreign(facts, (name,), kind)
    if isinstance(kind, exp.CheckColumnConstraint):
        return replace(facts, checks=(*facts.checks, kind.this.sql("duckdb")))
    return facts


def _constraint(facts: RelationFacts, node: exp.Expression) -> RelationFacts:
    if isinstance(node, exp.Constraint):
        for inner in node.expressions:
            facts = _constraint(facts, inner)
        return facts
    if isinstance(node, exp.PrimaryKey):
        names = tuple(_bare_name(part) for part in node.expressions)
        return _not_null(replace(facts, primary=names), names)
    if isinstance(node, exp.UniqueColumnConstraint):
        parts = node.this.expressions if isinstance(node.this, exp.Schema) else node.expressions
        return replace(facts, unique=(*facts.unique, tuple(_bare_name(part) for part in parts)))
    if isinstance(node, exp.ForeignKey):
        return _foreign(facts, tuple(_bare_name(part) for part in node.expressions), node.args["reference"])
    if isinstance(node, exp.CheckColumnConstraint):
        return replace(facts, checks=(*facts.checks, node.this.sql("duckdb")))
    raise CatalogError(f"relation {facts.name}: {node.sql()[:60]} is no constraint that is understood")


def _bare_name(node: exp.Expression) -> str:
    while isinstance(node, (exp.Ordered, exp.Column)) and isinstance(node.this, exp.Expression):
        node = node.this
    return node.name


def _foreign(facts: RelationFacts, names: tuple[str, ...], reference: exp.Expression) -> RelationFacts:
    target = reference.this
    table = target.this if isinstance(target, exp.Schema) else target
    columns = tuple(part.name for part in target.expressions) if isinstance(target, exp.Schema) else ()
    name = ".".join(part.name for part in table.parts)
    return replace(facts, foreign_keys=(*facts.foreign_keys, ForeignKey(names, name, columns)))


def _not_null(facts: RelationFacts, names: tuple[str, ...]) -> RelationFacts:
    folded = {name.lower() for name in names}
    return replace(
        facts,
        attributes=tuple(replace(a, nullable=False) if a.name.lower() in folded else a for a in facts.attributes),
    )


def _checked(facts: RelationFacts) -> RelationFacts:
    for names in (*facts.keys, *(key.attributes for key in facts.foreign_keys)):
        for name in names:
            if facts.attribute(name) is None:
                raise CatalogError(f"relation {facts.name} has no attribute {name} for its constraint")
    return facts


def _resolved(facts: RelationFacts, catalog: Catalog) -> RelationFacts:
    """Foreign keys without target attributes refer to the primary key."""
    keys = []
    for key in facts.foreign_keys:
        target = catalog.relation(key.relation)
        names = key.target
        if target is not None and not names:
            if target.primary is None:
                raise CatalogError(f"{facts.name} refers to {key.relation}, which has no primary key")
            names = target.primary
        if target is not None and any(target.attribute(name) is None for name in names):
            raise CatalogError(f"{facts.name} refers to an attribute that {key.relation} has not: {', '.join(names)}")
        keys.append(replace(key, target=names))
    return replace(facts, foreign_keys=tuple(keys))


def _declared(name: str, relations: dict[str, RelationFacts]) -> RelationFacts:
    facts = relations.get(name.lower()) or relations.get(name.lower().rpartition(".")[2])
    if facts is None:
        raise CatalogError(f"no relation {name} has been declared")
    return facts


def _index(statement: exp.Create, relations: dict[str, RelationFacts]) -> None:
    index = statement.this
    table = index.args.get("table")
    if not statement.args.get("unique") or table is None:
        return
    facts = _declared(table.name, relations)
    params = index.args.get("params")
    names = tuple(_bare_name(part) for part in (params.args.get("columns") or [] if params is not None else []))
    if names and all(facts.attribute(name) for name in names):
        relations[facts.name.lower()] = replace(facts, unique=(*facts.unique, names))


def _alter(statement: exp.Alter, relations: dict[str, RelationFacts]) -> None:
    facts = _declared(statement.this.name, relations)
    for action in statement.args.get("actions") or []:
        if not isinstance(action, exp.AddConstraint):
            raise CatalogError(f"ALTER TABLE {facts.name}: only ADD CONSTRAINT declares facts")
        for constraint in action.expressions:
            facts = _constraint(facts, constraint)
    relations[facts.name.lower()] = _checked(facts)


def ddl_of(catalog: Catalog, dialect: str = "duckdb") -> str:
    """CREATE TABLE statements with all constraints, referenced relations first."""
    return "\n".join(_create(facts, dialect) for facts in in_reference_order(catalog))


def in_reference_order(catalog: Catalog) -> list[RelationFacts]:
    """The relations so that each comes after those that its foreign keys refer to (cycles are cut at the name order)."""
    order: dict[str, RelationFacts] = {}
    pending = sorted(catalog, key=lambda facts: facts.name)
    while pending:
        ready = [f for f in pending if all(_placed(k.relation, f, order, pending) for k in f.foreign_keys)]
        for facts in ready or pending[:1]:
            order[facts.name.lower()] = facts
            pending.remove(facts)
    return list(order.values())


def _placed(target: str, facts: RelationFacts, order: dict[str, RelationFacts], pending: list[RelationFacts]) -> bool:
    folded = target.lower()
    return folded == facts.name.lower() or folded in order or all(p.name.lower() != folded for p in pending)


def _create(facts: RelationFacts, dialect: str) -> str:
    def quoted(name: str) -> str:
        return exp.to_identifier(name, quoted=not name.isidentifier()).sql(dialect)

    def listed(names: tuple[str, ...]) -> str:
        return ", ".join(quoted(name) for name in names)

    lines = []
    for attribute in facts.attributes:
        name = "VARCHAR" if attribute.type.name in ("UNKNOWN", "NULL") else attribute.type.name
        kind = exp.DataType.build(name, dialect="duckdb").sql(dialect)
        lines.append(f"{quoted(attribute.name)} {kind}{'' if attribute.nullable else ' NOT NULL'}")
    if facts.primary is not None:
        lines.append(f"PRIMARY KEY ({listed(facts.primary)})")
    lines.extend(f"UNIQUE ({listed(names)})" for names in facts.unique)
    for key in facts.foreign_keys:
        lines.append(f"FOREIGN KEY ({listed(key.attributes)}) REFERENCES {quoted(key.relation)} ({listed(key.target)})")
    lines.extend(f"CHECK ({sqlglot.transpile(check, read='duckdb', write=dialect)[0]})" for check in facts.checks)
    table = ".".join(quoted(part) for part in facts.name.split("."))
    return f"CREATE TABLE {table} (\n  " + ",\n  ".join(lines) + "\n);"
