"""Reading and writing the 22 TPC-H queries, beside the parser and the writer that they rest on."""

from __future__ import annotations

import sqlglot

import core
from tests.bench import Row, milliseconds
from tests.data import tpch


def run() -> list[Row]:
    catalog = core.Catalog.from_ddl(tpch.schema())
    texts = list(tpch.queries().values())
    trees = [sqlglot.parse_one(text, read="duckdb") for text in texts]
    formulations = [core.read_sql(text, catalog) for text in texts]
    read = milliseconds(lambda: [core.read_sql(text, catalog) for text in texts])
    parse = milliseconds(lambda: [sqlglot.parse_one(text, read="duckdb") for text in texts])
    write = milliseconds(lambda: [core.write_sql(formulation) for formulation in formulations])
    generate = milliseconds(lambda: [tree.sql(dialect="duckdb", pretty=True) for tree in trees])
    return [
        Row("read: 22 TPC-H queries to formulations, by parsing alone", read, parse),
        Row("write: 22 TPC-H formulations to SQL, by printing the parsed texts", write, generate),
    ]
