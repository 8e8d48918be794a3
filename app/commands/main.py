"""`planimeter`: the window, and commands for scripts and review pipelines.

Exit status: 0 fine, 1 different or findings above the asked level, 2 usage, 3 input that cannot be read or resolved,
4 undecided, 5 our own fault, 130 interrupted.
"""

from __future__ import annotations

import argparse
import io
import math
import os
import sys
import traceback
from difflib import get_close_matches
from pathlib import Path

from app.commands.inputs import Ground, InputError, counts_of, ground_of, query_of, write_text

FINE, DIFFERENT, USAGE, UNREADABLE, UNDECIDED, FAULT, INTERRUPTED = 0, 1, 2, 3, 4, 5, 130
COMMANDS = ("read", "draw", "compare", "findings", "improve", "write", "profile")
_QUERY = "a file of SQL, a sheet (plans.planimeter, plans.planimeter:B), or - for standard input"


def _amount(text: str) -> float:
    """A number that is not negative."""
    number = float(text)
    if not math.isfinite(number) or number < 0:
        raise argparse.ArgumentTypeError(f"a number that is not negative is wanted, not {text}")
    return number


def _common() -> argparse.ArgumentParser:
    common = argparse.ArgumentParser(add_help=False)
    common.add_argument("--catalog", metavar="FILE", default="", help="a catalog file (.toml), or DDL (.sql)")
    common.add_argument(
        "--data", metavar="SOURCE", default="", help="a folder, a DuckDB file or a data file; read only"
    )
    common.add_argument("--dialect", default="duckdb", help="the SQL dialect of the queries (default: duckdb)")
    common.add_argument("--json", action="store_true", help="print JSON for machines")
    return common


def parser() -> argparse.ArgumentParser:
    """The command line. Documentation and tests read it."""
    top = argparse.ArgumentParser(
        prog="planimeter",
        description="Looks at queries: their algebra, the size of every operator and its evidence, legal rewrites, equality.",
        epilog="With files (a sheet, SQL, an exported drawing, data) or nothing, the window opens. '-' is standard input.",
    )
    commands = top.add_subparsers(dest="command", metavar="COMMAND")
    common = [_common()]
    made = commands.add_parser("read", parents=common, help="the tree as text, with sizes")
    made.add_argument("query", help=_QUERY)
    made.add_argument("--measure", action="store_true", help="count the rows of every operator in the data")
    made = commands.add_parser("draw", parents=common, help="the sheet as SVG, PDF or PNG")
    made.add_argument("query", help=_QUERY)
    made.add_argument("other", nargs="?", help="a second query, drawn beside the first")
    made.add_argument("-o", "--out", required=True, metavar="FILE", help="a name ending in .svg, .pdf or .png")
    made.add_argument("--measure", action="store_true", help="count the rows of every operator in the data")
    made.add_argument("--title", default="", help="the name of the sheet")
    made.add_argument("--palette", choices=("print", "light", "dark"), default="print", help="colours (default: print)")
    made = commands.add_parser(
        "compare", parents=common, help="whether two queries are equal: a proof, or data on which they differ"
    )
    made.add_argument("a", help=_QUERY)
    made.add_argument("b", help="the other query")
    made.add_argument("--seconds", type=_amount, default=10.0, help="how long to look for a difference (default: 10)")
    made.add_argument("--witness", metavar="FILE", default="", help="write the data on which they differ as SQL")
    made = commands.add_parser("findings", parents=common, help="defects and dangers, the most work first")
    made.add_argument("query", help=_QUERY)
    made.add_argument("--measure", action="store_true", help="count the rows of every operator in the data")
    made.add_argument(
        "--above",
        type=_amount,
        default=None,
        metavar="ROWS",
        help="exit with 1 if a finding causes more rows than this",
    )
    made = commands.add_parser("improve", parents=common, help="a better formulation, and why")
    made.add_argument("query", help=_QUERY)
    made.add_argument("--seconds", type=_amount, default=5.0, help="how long to search (default: 5)")
    made.add_argument("--to", default="", metavar="DIALECT", help="the dialect of the SQL printed")
    made = commands.add_parser("write", parents=common, help="the query's SQL in another dialect")
    made.add_argument("query", help=_QUERY)
    made.add_argument("--to", required=True, metavar="DIALECT", help="any dialect of sqlglot")
    made = commands.add_parser("profile", parents=common, help="a catalog file from data")
    made.add_argument("source", help="a folder, a DuckDB file or a data file; read only")
    made.add_argument("-o", "--out", required=True, metavar="FILE", help="the catalog file (.toml)")
    return top


def read(asked: argparse.Namespace) -> int:
    from app.commands.output import print_caution, print_json, size_text, tree_document
    from core.algebra.notation import tree_text
    from core.drawing.page import CAUTION
    from core.size import size

    ground = ground_of(asked)
    formulation = query_of(asked.query, asked, ground)
    sizes = size(formulation, ground.catalog, counts_of(formulation, asked, ground))
    if asked.json:
        print_json({"operators": tree_document(formulation, sizes), "caution": CAUTION})
        return FINE
    print(tree_text(formulation.root, facts=lambda operator: size_text(sizes[operator])))
    print_caution()
    return FINE


def draw(asked: argparse.Namespace) -> int:
    if not _has_screen():
        os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
    from app.commands.drawing import draw_sheet

    draw_sheet(asked)
    print(asked.out)
    return FINE


def _has_screen() -> bool:
    from app.demo import has_screen

    return has_screen()


def compare(asked: argparse.Namespace) -> int:
    from app.commands.output import print_json, print_verdict, verdict_document
    from core.compare import Kind
    from core.compare import compare as judge

    ground = ground_of(asked)
    a, b = (query_of(name, asked, ground) for name in (asked.a, asked.b))
    verdict = judge(a, b, ground.catalog, asked.seconds)
    if asked.json:
        print_json(verdict_document(verdict))
    else:
        print_verdict(verdict)
    if asked.witness and verdict.witness is not None:
        write_text(asked.witness, verdict.witness.sql())
    elif asked.witness:
        print(f"note: there is no witness; {asked.witness} is not written", file=sys.stderr)
    return {Kind.EQUAL: FINE, Kind.DIFFERENT: DIFFERENT}.get(verdict.kind, UNDECIDED)


def findings(asked: argparse.Namespace) -> int:
    from app.commands.output import print_caution, print_json
    from core.drawing.page import CAUTION
    from core.finding import findings as find
    from core.size import size
    from core.size.numbers import rows_text

    ground = ground_of(asked)
    formulation = query_of(asked.query, asked, ground)
    sizes = size(formulation, ground.catalog, counts_of(formulation, asked, ground))
    found = find(formulation, ground.catalog, sizes)
    if asked.json:
        operators = formulation.operators()
        listed = [
            {
                "finding": f.kind,
                "operator": operators.index(f.operator),
                "sentence": f.sentence,
                "rows": f.work,
                "evidence": f.evidence.word,
                "rewrite": None if f.offer is None else f.offer.rule.name,
                "why_not": f.why_not,
            }
            for f in found
        ]
        print_json({"findings": listed, "caution": CAUTION})
    else:
        for f in found:
            cure = (
                f"mended by: {f.offer.rule.title}"
                if f.offer is not None
                else f"no rewrite mends it: {f.why_not}"
                if f.why_not
                else ""
            )
            print(
                f"{f.kind}  ({rows_text(f.work)} rows, {f.evidence.word})\n  {f.sentence}"
                + (f"\n  {cure}" if cure else "")
            )
        if not found:
            print("nothing found")
        print_caution()
    above = asked.above is not None and any(f.work > asked.above for f in found)
    return DIFFERENT if above else FINE


def improve(asked: argparse.Namespace) -> int:
    from app.commands.output import print_caution, print_json, written_sql
    from core.drawing.page import CAUTION
    from core.rewrite.improve import improve as search
    from core.size.numbers import ratio_text, rows_text

    ground = ground_of(asked)
    formulation = query_of(asked.query, asked, ground)
    chain = search(formulation, ground.catalog, asked.seconds)
    best = chain[-1].formulation if chain else formulation
    sql = written_sql(best, asked.to or asked.dialect)
    if asked.json:
        steps = [
            {
                "rewrite": s.offer.rule.name,
                "title": s.offer.rule.title,
                "what": s.offer.what,
                "before": s.before,
                "after": s.after,
            }
            for s in chain
        ]
        print_json({"revisions": steps, "sql": sql, "caution": CAUTION})
        return FINE
    if not chain:
        print("-- no offered rewrite lowers the total of rows")
    for i, step in enumerate(chain, 1):
        effect = (
            f"{rows_text(step.before)} → {rows_text(step.after)} rows in all  ({ratio_text(step.before, step.after)})"
        )
        print(f"-- {i}  {step.offer.rule.title}: {step.offer.what}\n--    {effect}")
    print(sql)
    print_caution("-- ")
    return FINE


def write(asked: argparse.Namespace) -> int:
    from app.commands.output import print_json, written_sql

    ground = ground_of(asked)
    sql = written_sql(query_of(asked.query, asked, ground), asked.to)
    if asked.json:
        print_json({"dialect": asked.to, "sql": sql})
    else:
        print(sql)
    return FINE


def profile(asked: argparse.Namespace) -> int:
    from app.commands.output import print_json
    from core.catalog.files import save_catalog

    asked.data = asked.source
    ground = ground_of(asked, afresh=True)
    try:
        save_catalog(ground.catalog, asked.out)
    except OSError as error:
        raise InputError(f"{asked.out}: {error.strerror}") from error
    if asked.json:
        print_json({"relations": [{"name": f.name, "rows": f.rows} for f in ground.catalog]})
    else:
        for facts in ground.catalog:
            print(f"{facts.name}: {facts.rows} rows, {len(facts.attributes)} attributes")
        print(asked.out)
    return FINE


_RUN = {
    "read": read,
    "draw": draw,
    "compare": compare,
    "findings": findings,
    "improve": improve,
    "write": write,
    "profile": profile,
}


def main(arguments: list[str] | None = None) -> int:
    """Runs a command and gives its exit status."""
    given = sys.argv[1:] if arguments is None else arguments
    for stream in (sys.stdout, sys.stderr):  # the signs of the algebra go out whatever the locale
        if isinstance(stream, io.TextIOWrapper) and stream.encoding.lower().replace("-", "") != "utf8":
            stream.reconfigure(encoding="utf-8")
    try:
        if not given or (given[0] not in COMMANDS and not given[0].startswith("-")):
            return _window(given)
        asked = parser().parse_args(given)
        if asked.command is None:
            parser().print_help()
            return USAGE
        if [value for value in vars(asked).values() if isinstance(value, str)].count("-") > 1:
            print("planimeter: standard input can be read only once", file=sys.stderr)
            return USAGE
        status = _RUN[asked.command](asked)
        sys.stdout.flush()
        return status
    except SystemExit as leaving:
        return int(leaving.code or 0)
    except InputError as error:
        print(str(error), file=sys.stderr)
        return UNREADABLE
    except KeyboardInterrupt:
        return INTERRUPTED
    except BrokenPipeError:
        # Whoever read the output has had enough; what is left in the buffer goes nowhere.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FINE
    except Exception:
        return _fault()


def _window(files: list[str]) -> int:
    """Opens the window, unless a file is missing or there is no screen."""
    for name in files:
        if not Path(name).exists():
            guess = get_close_matches(name, COMMANDS, n=1)
            hint = f"; did you mean the command {guess[0]}?" if guess and name == files[0] else ""
            print(f"{name}: there is neither such a file nor such a command{hint}", file=sys.stderr)
            return USAGE if hint else UNREADABLE
    if not _has_screen():
        raise InputError("there is no screen for the window; planimeter --help lists the commands that need none")
    from app.window import run

    return run(files)


def _fault() -> int:
    """Our own fault: the trace goes to a file that can be attached to a report."""
    import tempfile

    with tempfile.NamedTemporaryFile(
        "w", prefix="planimeter-fault-", suffix=".txt", delete=False, encoding="utf-8"
    ) as file:
        traceback.print_exc(file=file)
    print(f"this is a fault of Planimeter; what happened is written down in {file.name}", file=sys.stderr)
    return FAULT


__all__ = ["COMMANDS", "Ground", "main", "parser"]

if __name__ == "__main__":
    sys.exit(main())
