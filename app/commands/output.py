"""What the commands print: trees with sizes, tables, JSON; the same bytes for the same input."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping, Sequence
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any

from app.commands.inputs import InputError
from core.algebra.formulation import Formulation
from core.algebra.notation import condition_text, name_of, sign
from core.algebra.operators import Operator
from core.compare import Verdict
from core.drawing.page import CAUTION
from core.size import Size
from core.size.numbers import rows_text


def size_text(size: Size) -> str:
    high = "∞" if size.high is None else rows_text(size.high)
    measured = "" if size.measured is None else f", measured {size.measured}"
    return f"[{rows_text(size.rows)} rows {size.evidence.word}, {rows_text(size.low)}..{high}{measured}]"


def print_caution(lead: str = "") -> None:
    """The usual caution under sizes and rewrites; `lead` makes a comment of it."""
    print(f"\n{lead}{CAUTION}")


def print_json(document: object) -> None:
    print(json.dumps(_finite(document), ensure_ascii=False, indent=2, allow_nan=False, default=_plain))


def _finite(value: object) -> object:
    """The document with numbers that JSON does not have (infinities, not a number) as text."""
    if isinstance(value, float) and not math.isfinite(value):
        return str(value)
    if isinstance(value, Mapping):
        return {key if isinstance(key, str) else str(key): _finite(part) for key, part in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(part) for part in value]
    return value


def _plain(value: object) -> object:
    if isinstance(value, Decimal):
        return str(value)
    if isinstance(value, (date, datetime, time)):
        return value.isoformat()
    if isinstance(value, timedelta):
        return value.total_seconds()
    return repr(value)


def tree_document(formulation: Formulation, sizes: Mapping[Operator, Size]) -> list[dict[str, Any]]:
    """Every operator with its number, inputs by number, and size."""
    from core.algebra.graph import attributes, inputs

    operators = formulation.operators()
    numbers = {operator: i for i, operator in enumerate(operators)}
    return [
        {
            "number": numbers[operator],
            "kind": name_of(operator),
            "sign": sign(operator),
            "condition": condition_text(operator),
            "inputs": [numbers[below] for below in inputs(operator)],
            "attributes": [{"name": a.name, "type": str(a.type)} for a in attributes(operator)],
            "size": size_document(sizes[operator]),
        }
        for operator in operators
    ]


def size_document(size: Size) -> dict[str, Any]:
    return {
        "rows": size.rows,
        "low": size.low,
        "high": size.high,
        "measured": size.measured,
        "bytes": size.bytes,
        "evidence": size.best_evidence.word,
        "derivation": [
            {
                "text": line.text,
                "formula": line.formula,
                "value": line.value,
                "evidence": line.evidence.word,
                "source": line.source,
            }
            for line in size.derivation
        ],
    }


def table(title: str, names: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """A small table with aligned columns."""
    cells = [[("NULL" if value is None else str(value)) for value in row] for row in rows]
    widths = [max([len(name), *(len(row[i]) for row in cells)]) for i, name in enumerate(names)]
    lines = [title, "  " + "  ".join(name.ljust(w) for name, w in zip(names, widths, strict=True)).rstrip()]
    lines += ["  " + "  ".join(value.ljust(w) for value, w in zip(row, widths, strict=True)).rstrip() for row in cells]
    if not cells:
        lines.append("  (no rows)")
    return "\n".join(lines)


def print_verdict(verdict: Verdict) -> None:
    print(verdict.sentence)
    for reason in verdict.reasons:
        print(f"  {reason}")
    for i, step in enumerate(verdict.proof, 1):
        law = f"   {step.law}" if step.law else ""
        print(f"  {i:2}  {step.side}: {step.title}{law}\n      {step.what}")
    if verdict.witness is not None:
        witness = verdict.witness
        print()
        for name, rows in witness.data.items():
            facts = witness.catalog.relation(name)
            if facts is not None:
                print(table(facts.name, [a.name for a in facts.attributes], rows))
        print()
        print(table("A gives", witness.columns, witness.result_a))
        print(table("B gives", witness.columns, witness.result_b))
    for text in verdict.rests_on:
        print(f"  rests on: {text}")
    for text in verdict.asides:
        print(f"  {text}")
    print(f"  meaning: {verdict.dialect}")


def verdict_document(verdict: Verdict) -> dict[str, Any]:
    witness = verdict.witness
    return {
        "verdict": verdict.kind.value,
        "sentence": verdict.sentence,
        "reasons": list(verdict.reasons),
        "proof": [{"side": s.side, "title": s.title, "law": s.law, "what": s.what} for s in verdict.proof],
        "witness": None
        if witness is None
        else {
            "data": {name: [list(row) for row in rows] for name, rows in witness.data.items()},
            "columns": list(witness.columns),
            "a": [list(row) for row in witness.result_a],
            "b": [list(row) for row in witness.result_b],
            "only_a": [list(row) for row in witness.only_a],
            "only_b": [list(row) for row in witness.only_b],
        },
        "rests_on": list(verdict.rests_on),
        "asides": list(verdict.asides),
        "instances": verdict.instances,
        "dialect": verdict.dialect,
    }


def written_sql(formulation: Formulation, dialect: str) -> str:
    """The formulation as SQL of a dialect. Raises `InputError` where that dialect has no way to say it, or is unknown."""
    from core.language.sql.write import WriteError, write_sql

    try:
        return write_sql(formulation, dialect)
    except WriteError as error:
        raise InputError(str(error)) from error
    except ValueError as error:
        raise InputError(f"{dialect}: {error}") from error
