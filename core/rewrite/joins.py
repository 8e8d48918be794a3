"""Rewrites of joins."""

from __future__ import annotations

from core.algebra.functions import volatile
from core.algebra.graph import attributes, dependent, postorder, scalars
from core.algebra.notation import scalar_text
from core.algebra.operators import Distinct, Join, JoinKind, Limit, Nest, Operator, Relation, Select, Sort, Window
from core.algebra.scalars import (
    Attribute,
    IsNull,
    Ref,
    Scalar,
    conjunction,
    conjuncts,
    refs,
)
from core.derive.reject import rejects_null, rejects_null_each
from core.rewrite.context import Context
from core.rewrite.rule import Attempt, Check, Rule, check
from core.size.guarantee import always_matched, equalities

OUTER = "Galindo-Legaria, Rosenthal, TODS 22(1) 1997"
MOERKOTTE = "Moerkotte, Fender, Eich, SIGMOD 2013"


def independent(join: Join) -> Check:
    """The right side must not read the left row."""
    outer = sorted(a.name for a in dependent(join))
    return check(
        "sides-apart",
        not outer,
        "neither side reads the other",
        f"the right side is evaluated for each left row: it reads {', '.join(outer)}",
    )


_TURNED = {
    JoinKind.INNER: JoinKind.INNER,
    JoinKind.FULL: JoinKind.FULL,
    JoinKind.LEFT: JoinKind.RIGHT,
    JoinKind.RIGHT: JoinKind.LEFT,
}


def _commute(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Join) or operator.kind not in _TURNED:
        return None
    kind = _TURNED[operator.kind]
    return Attempt(
        (independent(operator),),
        lambda: Join(kind, operator.right, operator.left, operator.condition),
        "the sides exchanged",
    )


def _associate(operator: Operator, context: Context) -> Attempt | None:
    """(A ⋈ B) ⋈ C = A ⋈ (B ⋈ C)."""
    if not isinstance(operator, Join) or operator.kind is not JoinKind.INNER:
        return None
    inner = operator.left
    if not isinstance(inner, Join) or inner.kind is not JoinKind.INNER:
        return None
    a, b, c = inner.left, inner.right, operator.right
    own = set(attributes(a))
    terms = (*conjuncts(inner.condition), *conjuncts(operator.condition))
    low = [t for t in terms if not refs(t) & own]
    high = [t for t in terms if refs(t) & own]
    joined = any(refs(t) & set(attributes(b)) and refs(t) & set(attributes(c)) for t in low)
    useful = check(
        "no-product-made",
        joined,
        "a condition joins the two right inputs",
        "no condition joins the two right inputs: they would become a product",
    )
    return Attempt(
        (useful,),
        lambda: Join(JoinKind.INNER, a, Join(JoinKind.INNER, b, c, conjunction(low)), conjunction(high)),
        "the two right inputs joined first",
    )


def _simplify_outer(operator: Operator, context: Context) -> Attempt | None:
    """An outer join below a condition that its padded rows cannot pass."""
    condition: Scalar
    if isinstance(operator, Select) and isinstance(operator.input, Join):
        join, condition = operator.input, operator.condition
    elif (
        isinstance(operator, Join)
        and operator.kind in (JoinKind.INNER, JoinKind.SEMI)
        and isinstance(operator.left, Join)
    ):
        join, condition = operator.left, operator.condition
    else:
        return None
    if join.kind not in (JoinKind.LEFT, JoinKind.RIGHT, JoinKind.FULL):
        return None
    pads_right = join.kind in (JoinKind.LEFT, JoinKind.FULL)
    pads_left = join.kind in (JoinKind.RIGHT, JoinKind.FULL)
    drops_right = pads_right and _drops_padded(condition, attributes(join.right))
    drops_left = pads_left and _drops_padded(condition, attributes(join.left))
    still_right, still_left = pads_right and not drops_right, pads_left and not drops_left
    kind = {
        (True, True): JoinKind.FULL,
        (True, False): JoinKind.LEFT,
        (False, True): JoinKind.RIGHT,
        (False, False): JoinKind.INNER,
    }[still_right, still_left]
    names = ", ".join(a.name for a in attributes(join.right if pads_right else join.left))
    legal = check(
        "condition-rejects-nulls",
        kind is not join.kind,
        f"{scalar_text(condition)} is never true for a padded row",
        f"{scalar_text(condition)} can be true for rows padded with NULLs ({names})",
    )

    made = kind if kind is not join.kind else JoinKind.INNER

    def build() -> Operator:
        simpler = Join(made, join.left, join.right, join.condition)
        if isinstance(operator, Select):
            return Select(simpler, operator.condition)
        return Join(operator.kind, simpler, operator.right, operator.condition, operator.mark)

    return Attempt((legal,), build, f"{_article(made)} {made.value} join: the padded rows are dropped right above")


def _article(kind: JoinKind) -> str:
    return "an" if kind is JoinKind.INNER else "a"


def _drops_padded(condition: Scalar, padded: tuple[Attribute, ...]) -> bool:
    own = set(padded)
    return any(rejects_null(t, refs(t) & own) for t in conjuncts(condition) if refs(t) & own)


def at_most_one(join: Join, context: Context, side: str) -> bool:
    """Whether a row of the other side meets at most one row of this one."""
    here = join.right if side == "right" else join.left
    pairs = equalities(join.condition, set(attributes(join.left)), set(attributes(join.right)))
    mine = [pair[1] if side == "right" else pair[0] for pair in pairs]
    return context.facts.is_key(here, [*mine, *context.facts.of(here).constants])


def key_cure(join: Join, side: Operator) -> str:
    pairs = equalities(join.condition, set(attributes(join.left)), set(attributes(join.right)))
    own = set(attributes(side))
    names = sorted(a.name for pair in pairs for a in pair if a in own)
    return f"legal if ({', '.join(names)}) is declared a key there" if names else ""


def _once(join: Join, context: Context, side: str) -> Check:
    """Either duplicates do not matter above, or no row meets two partners."""
    matter = context.duplicates_matter[join]
    single = at_most_one(join, context, side)
    where = join.right if side == "right" else join.left
    if not matter:
        text = "duplicates do not matter above"
    else:
        text = "every row meets at most one partner"
    return check(
        "no-row-is-multiplied",
        single or not matter,
        text,
        "duplicates matter above, and a row may meet several partners",
        key_cure(join, where),
        proof=False,
    )


def _unread(join: Join, context: Context, side: Operator) -> Check:
    read = sorted(a.name for a in context.needed[join] & set(attributes(side)))
    return check(
        "side-is-not-read",
        not read,
        "nothing above reads its attributes",
        f"{', '.join(read)} is read above" if len(read) == 1 else f"{', '.join(read)} are read above",
    )


def _relations(operator: Operator) -> str:
    """The relations a side reads, by name, for a sentence."""
    names = [part.name.rpartition(".")[2] for part in postorder(operator) if isinstance(part, Relation)]
    shown = list(dict.fromkeys(names))
    return ", ".join(shown[:3]) + (", …" if len(shown) > 3 else "") if shown else "that side"


def _to_semi_join(operator: Operator, context: Context) -> list[Attempt] | None:
    if not isinstance(operator, Join) or operator.kind is not JoinKind.INNER:
        return None
    right = Attempt(
        (_unread(operator, context, operator.right), _once(operator, context, "right")),
        lambda: Join(JoinKind.SEMI, operator.left, operator.right, operator.condition),
        f"{_relations(operator.right)}: only whether a partner exists matters",
    )
    left = Attempt(
        (_unread(operator, context, operator.left), _once(operator, context, "left"), independent(operator)),
        lambda: Join(JoinKind.SEMI, operator.right, operator.left, operator.condition),
        f"{_relations(operator.left)}: only whether a partner exists matters",
    )
    return [right, left]


def _from_semi_join(operator: Operator, context: Context) -> Attempt | None:
    if not isinstance(operator, Join) or operator.kind is not JoinKind.SEMI:
        return None
    join = Join(JoinKind.INNER, operator.left, operator.right, operator.condition)
    single = at_most_one(join, context, "right")
    matter = context.duplicates_matter[operator]
    legal = check(
        "no-row-is-multiplied",
        single or not matter,
        "every row meets at most one partner" if single else "duplicates do not matter above",
        "a row may meet several partners, and would come out as often",
        key_cure(join, operator.right),
        proof=False,
    )
    schema = check(
        "schema-may-grow",
        not takes_whole_schema(operator, context),
        "what is above names the attributes it wants",
        "what is above takes every attribute there is",
    )
    return Attempt((legal, schema), lambda: join, "a join, which can be reordered with others")


def takes_whole_schema(operator: Operator, context: Context) -> bool:
    pending, seen = [operator], set()
    while pending:
        current = pending.pop()
        for reader in context.readers[current]:
            if isinstance(reader, Distinct):
                return True
            if isinstance(reader, (Select, Sort, Limit, Window, Join, Nest)) and reader not in seen:
                seen.add(reader)
                pending.append(reader)
    return False


def _eliminate(operator: Operator, context: Context) -> Attempt | None:
    """A join that neither adds attributes that are read nor drops or multiplies rows."""
    if not isinstance(operator, Join) or operator.kind not in (
        JoinKind.INNER,
        JoinKind.LEFT,
        JoinKind.SINGLE,
        JoinKind.SEMI,
    ):
        return None
    checks = []
    if operator.kind is not JoinKind.SEMI:
        checks.append(_unread(operator, context, operator.right))
    if operator.kind in (JoinKind.INNER, JoinKind.LEFT):
        checks.append(_once(operator, context, "right"))
    if operator.kind in (JoinKind.INNER, JoinKind.SEMI):
        checks.append(
            check(
                "every-row-has-a-partner",
                always_matched(operator, context.facts),
                "a foreign key gives every row its partner",
                "would bring back rows: nothing says that every row has a partner",
                "legal if the left attributes are declared not null and a foreign key to the right relation",
                proof=False,
            )
        )
    loose = [s for s in scalars(operator) if volatile(s)]
    checks.append(
        check(
            "same-at-every-call",
            not loose,
            "no function differs from call to call",
            "a function differs from call to call",
        )
    )
    return Attempt(tuple(checks), lambda: operator.left, "without the join")


def _null_test(operator: Operator, context: Context) -> Attempt | None:
    """σ r.k is null (L ⟕ R) keeps the left rows without a partner."""
    if (
        not isinstance(operator, Select)
        or not isinstance(operator.input, Join)
        or operator.input.kind is not JoinKind.LEFT
    ):
        return None
    join = operator.input
    right = set(attributes(join.right))
    tests = [
        t
        for t in conjuncts(operator.condition)
        if isinstance(t, IsNull) and isinstance(t.term, Ref) and t.term.attribute in right
    ]
    if not tests:
        return None
    sure = context.facts.never_null(join.right) | _shown_present(join)
    good = [t for t in tests if refs(t) <= sure]
    names = ", ".join(sorted(a.name for t in tests for a in refs(t)))
    present = check(
        "null-means-no-partner",
        bool(good),
        f"{names} is never NULL in a partner",
        f"{names} may be NULL in a partner too",
        f"legal if {names} is declared not null",
        proof=False,
    )
    used = good or tests
    staying = [t for t in conjuncts(operator.condition) if t not in used]
    read = (context.needed[operator] | refs(*staying)) & right
    unread = check(
        "side-is-not-read",
        not read,
        "nothing above reads the right side's attributes",
        f"{', '.join(sorted(a.name for a in read))} is read above, where it is NULL",
    )

    def build() -> Operator:
        anti = Join(JoinKind.ANTI, join.left, join.right, join.condition)
        return Select(anti, conjunction(staying)) if staying else anti

    return Attempt((present, unread), build, "an anti-join: the left rows that have no partner")


def _shown_present(join: Join) -> frozenset[Attribute]:
    """Right attributes that the join condition shows to be not NULL in a partner."""
    return rejects_null_each(join.condition)


RULES = (
    Rule("commute-join", "exchange the sides of a join", "R ⋈ S = S ⋈ R, R ⟗ S = S ⟗ R, R ⟕ S = S ⟖ R", OUTER, "join", _commute),
    Rule("associate-join", "join the right inputs first", "(R ⋈ S) ⋈ T = R ⋈ (S ⋈ T)", MOERKOTTE, "join", _associate),
    Rule(
        "simplify-outer-join", "outer join to inner join",
        "σp(R ⟕ S) = σp(R ⋈ S) where p rejects NULLs of S; ⟗ to ⟕ likewise", OUTER, "join", _simplify_outer,
    ),
    Rule(
        "join-to-semi-join", "join to semi-join",
        "δ(πR(R ⋈ S)) = δ(πR(R ⋉ S)); πR(R ⋈ S) = R ⋉ S where S has at most one partner",
        "Bernstein, Chiu, JACM 28(1) 1981", "join", _to_semi_join,
    ),
    Rule(
        "semi-join-to-join", "semi-join to join",
        "R ⋉ S = πR(R ⋈ S) where S has at most one partner", "Galindo-Legaria, Joshi, SIGMOD 2001", "join", _from_semi_join,
    ),
    Rule(
        "eliminate-join", "drop a join that adds nothing",
        "πR(R ⋈ S) = R along a foreign key; πR(R ⟕ S) = R where S has at most one partner",
        "Chakravarthy, Grant, Minker, TODS 15(2) 1990", "join", _eliminate,
    ),
    Rule(
        "null-test-to-anti-join", "outer join with a NULL test to anti-join",
        "πR(σs.k is null(R ⟕ S)) = R ▷ S where k is never NULL in S", OUTER, "join", _null_test,
    ),
)  # fmt: skip
