"""How long a script waits for the library, beside an interpreter that starts and does nothing."""

from __future__ import annotations

import subprocess
import sys

from tests.bench import Row, milliseconds


def start(statement: str) -> float:
    return milliseconds(lambda: subprocess.run([sys.executable, "-c", statement], check=True))


def run() -> list[Row]:
    bare = start("pass")
    read = "import core; core.read_sql('select 1 as one')"
    return [
        Row("start: import core, by a bare interpreter", start("import core"), bare),
        Row("start: read one query, by importing the parser alone", start(read), start("import sqlglot")),
    ]
