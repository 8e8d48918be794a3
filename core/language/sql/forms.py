"""How a function that the algebra carries whole is kept and printed: its form.

A form is sqlglot's own node, serialised, with its scalar arguments cut out and numbered. It is independent of the text
it came from, so the call comes out in any dialect as sqlglot would write it.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from functools import lru_cache
from typing import cast

from sqlglot import exp, serde

_HOLE = "argument_"


def hole(number: int) -> exp.Placeholder:
    """What stands in a form for argument `number`."""
    return exp.Placeholder(this=f"{_HOLE}{number}")


def form_of(node: exp.Expression) -> str:
    """The form of a call whose scalar arguments have been replaced by holes."""
    # "m" holds positions in the text: two calls written in different places are the same call.
    kept = [{key: value for key, value in part.items() if key != "m"} for part in serde.dump(node)]
    return json.dumps(kept, separators=(",", ":"), sort_keys=True)


@lru_cache(maxsize=4096)
def _template(form: str) -> exp.Expression:
    return cast(exp.Expression, serde.load(json.loads(form)))


def filled(form: str, arguments: Sequence[exp.Expression]) -> exp.Expression:
    """The call with its holes filled: ready to print in any dialect."""
    node = _template(form).copy()
    for found in list(node.find_all(exp.Placeholder)):
        name = found.name
        if name.startswith(_HOLE):
            found.replace(arguments[int(name[len(_HOLE) :])])
    return node


@lru_cache(maxsize=4096)
def bound_arguments(form: str) -> frozenset[int]:
    """The numbers of the arguments that stand beside an operator sign, where a weaker operator needs parentheses."""
    return frozenset(
        int(found.name[len(_HOLE) :])
        for found in _template(form).find_all(exp.Placeholder)
        if found.name.startswith(_HOLE)
        and not (isinstance(found.parent, exp.Func) and not isinstance(found.parent, exp.Binary))
    )
