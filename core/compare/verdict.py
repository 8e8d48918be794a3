"""Verdicts: equal, different, or no difference found; with the proof, the witness, and what the answer rests on."""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass
from enum import Enum

from core.algebra.formulation import Formulation
from core.algebra.functions import SESSION, VOLATILE, calls, volatile
from core.algebra.graph import scalars
from core.algebra.operators import Group, Limit, Sort
from core.algebra.types import Family
from core.catalog.model import Catalog
from core.compare.prove import Normal, ProofStep, normal_pair
from core.compare.witness import Search, Witness, search, statement


class Kind(Enum):
    EQUAL = "equal"
    DIFFERENT = "different"
    NO_DIFFERENCE = "no difference found"


@dataclass(frozen=True, slots=True)
class Verdict:
    """The answer to "do the two formulations give the same?".

    `reasons` say in sentences what was done. `proof` is the chain of rewrites on both sides (for EQUAL). `rests_on` names
    what the answer takes for granted. `asides` are differences that are not of rows: names of columns, order.
    """

    kind: Kind
    reasons: tuple[str, ...]
    proof: tuple[ProofStep, ...] = ()
    witness: Witness | None = None
    rests_on: tuple[str, ...] = ()
    asides: tuple[str, ...] = ()
    instances: int = 0
    seconds: float = 0.0
    dialect: str = "duckdb"
    names: tuple[str, str] = ("A", "B")

    @property
    def sentence(self) -> str:
        """The verdict in one line."""
        a, b = self.names
        if self.kind is Kind.EQUAL:
            return f"{a} ≡ {b}  proved (as bags, NULLs and duplicates counted)"
        if self.kind is Kind.DIFFERENT:
            if self.witness is None:
                return f"{a} ≢ {b}  {self.reasons[0]}"
            count = self.witness.rows
            return f"{a} ≢ {b}  shown by a witness of {count} row{'' if count == 1 else 's'}"
        return f"no difference found in {self.instances:,} instances ({self.seconds:.1f} s); not proved"


def compare(
    a: Formulation,
    b: Formulation,
    catalog: Catalog,
    seconds: float = 10.0,
    cancel: threading.Event | None = None,
    names: tuple[str, str] = ("A", "B"),
) -> Verdict:
    """Tries to prove the two equal, then to show them different, and says how far it got. Never a guess.

    `names` are what the verdict calls the two.
    """
    started = time.monotonic()
    asides = tuple(_asides(a, b, names))
    rests = tuple(_rests_on((a, b)))
    widths = [len(f.outputs[-1].columns) for f in (a, b)]
    if widths[0] != widths[1]:
        reason = f"{names[0]} has {widths[0]} columns, {names[1]} has {widths[1]}"
        return Verdict(Kind.DIFFERENT, (reason,), asides=asides, rests_on=rests, names=names)
    if any(volatile(*scalars(op)) for f in (a, b) for op in f.operators()):
        reason = "a function differs from call to call, so no two runs need agree: nothing is claimed"
        return Verdict(Kind.NO_DIFFERENCE, (reason,), asides=asides, rests_on=rests, names=names)
    if _literally_same(a, b):
        return _alike(asides, rests, names)
    first, second, met = normal_pair((a, b), catalog, names, seconds / 2, cancel)
    if met:
        # A proof speaks of meaning; both texts must also run.
        broken = search(a, b, catalog, 0.0, names=names).broken
        if not broken:
            return _equal(first, second, asides, rests, time.monotonic() - started, names)
        return Verdict(Kind.NO_DIFFERENCE, (broken,), asides=asides, rests_on=rests, names=names)
    left = max(1.0, seconds - (time.monotonic() - started))
    return _searched(search(a, b, catalog, left, cancel, names=names), first, second, asides, rests, names)


def _literally_same(a: Formulation, b: Formulation) -> bool:
    """Whether one and the same text is run for both: then it does not matter what the order of rows does."""
    return a.dialect == b.dialect and statement(a) == statement(b)


def _alike(asides: tuple[str, ...], rests: tuple[str, ...], names: tuple[str, str]) -> Verdict:
    reason = "the two texts are the same"
    step = ProofStep(f"{names[0]} = {names[1]}", "same text", "", reason)
    return Verdict(Kind.EQUAL, (reason,), (step,), rests_on=rests, asides=asides, names=names)


def _equal(
    first: Normal,
    second: Normal,
    asides: tuple[str, ...],
    rests: tuple[str, ...],
    seconds: float,
    names: tuple[str, str],
) -> Verdict:
    a, b = names
    steps = (*first.steps, *second.steps)
    reason = (
        f"{len(first.steps)} rewrites of {a} and {len(second.steps)} of {b} lead to the same normal form"
        if steps
        else "the two have the same normal form: they differ in names and order of writing only"
    )
    last = ProofStep(f"{a} = {b}", "same normal form", "", "equal up to names and the order of inputs and conditions")
    return Verdict(Kind.EQUAL, (reason,), (*steps, last), rests_on=rests, asides=asides, seconds=seconds, names=names)


def _searched(
    found: Search,
    first: Normal,
    second: Normal,
    asides: tuple[str, ...],
    rests: tuple[str, ...],
    names: tuple[str, str],
) -> Verdict:
    a, b = names
    rests = (*rests, *found.notes)
    if found.witness is not None:
        w = found.witness
        reason = (
            f"on these {w.rows} rows {a} gives {len(w.result_a)} rows and {b} {len(w.result_b)}: "
            f"{len(w.only_a)} only in {a}, {len(w.only_b)} only in {b}"
        )
        return Verdict(Kind.DIFFERENT, (reason,), (), w, rests, asides, found.instances, found.seconds, names=names)
    reasons = [found.broken] if found.broken else []
    for side, normal in ((a, first), (b, second)):
        if normal.text is None:
            reasons.append(f"{side} has no normal form: {normal.why}")
    if not reasons:
        reasons.append("the normal forms differ, which proves nothing")
    reasons.append(f"{found.instances:,} instances of up to {found.most_rows} rows a relation gave the same")
    return Verdict(
        Kind.NO_DIFFERENCE, tuple(reasons), (), None, rests, asides, found.instances, found.seconds, names=names
    )


def _asides(a: Formulation, b: Formulation, letters: tuple[str, str]) -> list[str]:
    """Differences that are not of rows."""
    found = []
    names = [[name for _, name in f.outputs[-1].columns] for f in (a, b)]
    if len(names[0]) == len(names[1]):
        other = [f"{x} / {y}" for x, y in zip(*names, strict=True) if x.lower() != y.lower()]
        if other:
            found.append(f"other column names: {', '.join(other)}")
    ordered = [isinstance(_below_limit(f), Sort) for f in (a, b)]
    if ordered[0] != ordered[1]:
        found.append(f"only {letters[0] if ordered[0] else letters[1]} orders its answer")
    elif all(ordered):
        found.append("both order their answer; rows are compared as bags, the order is not")
    return found


def _below_limit(formulation: Formulation) -> object:
    root = formulation.root
    while isinstance(root, Limit):
        root = root.input
    return root


def _rests_on(formulations: tuple[Formulation, ...]) -> list[str]:
    found: dict[str, None] = {}
    for formulation in formulations:
        for operator in formulation.operators():
            if isinstance(operator, Limit):
                found["which rows a limit keeps where its order leaves ties"] = None
            if isinstance(operator, Group):
                for column in operator.aggregates:
                    if column.aggregate.name in ("sum", "avg") and column.aggregate.type.family is Family.FLOAT:
                        found["floating-point sums not depending on the order of rows"] = None
            for call in calls(*scalars(operator)):
                if call.name in SESSION:
                    found[f"both run in one session ({call.name})"] = None
                if call.name in VOLATILE:
                    found[f"{call.name}(), which differs from call to call"] = None
    return list(found)
