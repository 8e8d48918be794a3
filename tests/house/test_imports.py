"""Who may import whom: the linter's contracts hold, cover every room, and the core starts light."""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
LINTER = Path(sys.executable).parent / "lint-imports"
LINT_HERE = "import sys; sys.path.insert(0, '.'); from importlinter.cli import lint_imports_command as lint; lint()"
HEAVY = ("PySide6", "shiboken6", "scipy", "networkx", "duckdb", "numpy", "pygraphviz")


def contracts() -> list[dict[str, object]]:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    return list(settings["tool"]["importlinter"]["contracts"])


def rooms() -> set[str]:
    return {f"core.{folder.parent.name}" for folder in (ROOT / "core").glob("*/__init__.py")}


def run(command: list[str], folder: Path = ROOT) -> subprocess.CompletedProcess[str]:
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)


def test_the_contracts_are_kept() -> None:
    done = run([str(LINTER), "--no-cache"])
    assert done.returncode == 0, done.stdout + done.stderr
    assert f"Contracts: {len(contracts())} kept, 0 broken." in done.stdout


def test_a_room_that_reaches_the_screen_or_upwards_is_caught(tmp_path: Path) -> None:
    """The contracts on a copy with three offences, so that a contract that can no longer fail is noticed."""
    for name in ("core", "app"):
        for source in (ROOT / name).rglob("*.py"):
            copy = tmp_path / source.relative_to(ROOT)
            copy.parent.mkdir(parents=True, exist_ok=True)
            copy.write_bytes(source.read_bytes())
    (tmp_path / "pyproject.toml").write_bytes((ROOT / "pyproject.toml").read_bytes())
    offences = {
        "core knows nothing of any screen": ("core/derive/offence.py", "def f() -> None:\n    import PySide6.QtCore\n"),
        "rooms import downwards only": ("core/algebra/offence.py", "import core.language\n"),
        "duckdb is touched by the engine alone": ("app/offence.py", "import duckdb\n"),
        "sqlglot is touched by the language and the DDL reader alone": ("core/size/offence.py", "import sqlglot\n"),
    }
    for path, text in offences.values():
        (tmp_path / path).write_text(text, encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "-c", LINT_HERE, "--no-cache"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1, done.stdout + done.stderr
    assert sorted(re.findall(r"^(.+) BROKEN$", done.stdout, re.MULTILINE)) == sorted(offences)


def test_every_room_has_its_layer() -> None:
    (layers,) = (c["layers"] for c in contracts() if c["type"] == "layers")
    assert isinstance(layers, list)
    listed = set(re.findall(r"core\.\w+", " ".join(layers)))
    assert rooms() <= listed, f"add to the layers in pyproject.toml: {sorted(rooms() - listed)}"


@pytest.mark.parametrize("package", ["duckdb", "sqlglot"])
def test_every_other_room_is_kept_from(package: str) -> None:
    """A new room is kept from the two packages that one room each may touch."""
    may = {"duckdb": {"core.engine"}, "sqlglot": {"core.language", "core.catalog"}}[package]
    (kept,) = (c["source_modules"] for c in contracts() if package in c.get("forbidden_modules", []))  # type: ignore[operator]
    assert isinstance(kept, list)
    assert (rooms() | {"app"}) - may <= set(kept)


def loaded(statements: str) -> set[str]:
    """The heavy packages that a fresh interpreter has loaded after these statements."""
    script = f"import sys\n{statements}\nprint(*sorted({{n.partition('.')[0] for n in sys.modules}}))"
    done = run([sys.executable, "-c", script])
    assert done.returncode == 0, done.stderr
    return set(done.stdout.split()) & set(HEAVY)


def test_importing_the_core_loads_nothing_heavy() -> None:
    assert loaded("import core") == set()


def test_no_module_of_the_core_loads_anything_heavy() -> None:
    walk = "for module in pkgutil.walk_packages(core.__path__, 'core.'): importlib.import_module(module.name)"
    assert loaded(f"import pkgutil, importlib, core\n{walk}") == set()
