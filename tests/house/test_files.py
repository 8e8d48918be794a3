"""What lies in the repository: the top level stays small, and no file speaks of one machine."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    "app",
    "core",
    "tests",
    "assets",
    "Makefile",
    "LICENSE",
    ".gitignore",
    ".ci",
}
# A path from a root that differs from machine to machine, where one begins: the middle of "a/home/b" is none.
MACHINE_PATH = re.compile(rb"(?:(?<=://)|(?<![\w.~$})*/-]))/(?:work|root|home|tmp|Users)/")


def tracked() -> list[Path]:
    """The files of the repository; a copy of the sources without its history cannot tell them from built ones."""
    if not (ROOT / ".git").exists() or shutil.which("git") is None:
        pytest.skip("not in a clone, or git is not installed: which files belong to the repository is not known")
    listing = ["git", "-c", f"safe.directory={ROOT}", "ls-files", "-z"]
    names = subprocess.run(listing, cwd=ROOT, capture_output=True, check=True).stdout
    return [ROOT / name.decode() for name in names.split(b"\0") if name and (ROOT / name.decode()).is_file()]


def test_the_top_level_holds_only_what_belongs_there() -> None:
    assert {file.relative_to(ROOT).parts[0] for file in tracked()} <= TOP


def test_no_file_names_a_place_on_one_machine() -> None:
    found = []
    for file in tracked():
        content = file.read_bytes()
        if b"\0" not in content[:8000]:
            for number, line in enumerate(content.splitlines(), 1):
                if MACHINE_PATH.search(line):
                    found.append(f"{file.relative_to(ROOT)}:{number}: {line.decode(errors='replace').strip()}")
    assert not found, "\n".join(found)


@pytest.mark.parametrize("prefix", [b"", b"'", b'"', b" ", b"=", b"file://"])
@pytest.mark.parametrize("root", [b"work", b"root", b"home", b"tmp"])
def test_a_machine_path_is_seen(prefix: bytes, root: bytes) -> None:
    assert MACHINE_PATH.search(prefix + b"/" + root + b"/x")


def test_the_middle_of_a_path_is_none() -> None:
    assert not any(
        MACHINE_PATH.search(before + b"/" + b"tmp/x") for before in (b"build", b"..", b"$FOLDER", b"{folder}")
    )
