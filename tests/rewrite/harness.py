"""What the rewrite tests share: applying a rule to a text, and running both sides on generated data."""

from __future__ import annotations

import random
from collections import Counter
from collections.abc import Collection
from functools import lru_cache

from core.algebra.formulation import Formulation
from core.catalog.ddl import catalog_from_ddl
from core.derive.facts import Facts
from core.engine.duckdb_engine import DuckEngine, EngineError
from core.engine.instance import create_instance
from core.language.sql.read import read_sql
from core.language.sql.write import write_sql
from core.rewrite import Offer, Refusal, attempts, rule_named
from core.rewrite.context import Context
from tests.generate.queries import SCHEMA, random_data

CATALOG = catalog_from_ddl(SCHEMA)
FACTS = Facts(CATALOG)


def answers(formulation: Formulation, rule: str, disabled: Collection[str] = ()) -> list[Offer | Refusal]:
    """What a rule says at every operator."""
    context = Context(formulation, FACTS)
    rules = [rule_named(rule)]
    return [a for op in formulation.operators() for a in attempts(context, op, rules, disabled)]


def read_after(sql: str, first: str = "") -> Formulation:
    """The formulation of a text, after a first rewrite where one is named."""
    formulation = read_sql(sql, CATALOG)
    if not first:
        return formulation
    return next(a.after for a in answers(formulation, first) if isinstance(a, Offer))


@lru_cache(maxsize=320)
def instance(seed: int) -> DuckEngine:
    """An engine over the random data of a seed; kept, since making one costs more than a query."""
    return create_instance(CATALOG, random_data(random.Random(seed)))


def bag(engine: DuckEngine, sql: str) -> Counter[str]:
    return Counter(map(repr, engine.run(sql).rows))


def difference(before: str, after: Formulation, instances: int, seed: int = 0, strict: bool = False) -> str | None:
    """How a text and a formulation differ on generated data: words, or None where they do not.

    `strict` also compares the order of rows where the text asks for one, and run-time errors.
    """
    ordered = strict and " order by " in before
    written = write_sql(after)
    for number in range(instances):
        engine = instance(seed * 100_003 + number)
        expected = _outcome(engine, before)
        found = _outcome(engine, written)
        if ordered and engine.run(before).rows != engine.run(written).rows:
            return f"instance {seed * 100_003 + number}: other order"
        if (strict or isinstance(expected, Counter)) and expected != found:
            return f"instance {seed * 100_003 + number}: {before}\n{written}\n{expected}\n{found}"
    return None


def _outcome(engine: DuckEngine, sql: str) -> Counter[str] | str:
    """The bag, or the engine's refusal (a scalar subquery with two rows stops a query on some data)."""
    try:
        return bag(engine, sql)
    except EngineError as error:
        return str(error).split("\n")[0]
