"""The check that runs before anything is installed: it finds what is missing, and says so where it may not install."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from app import setup_check

linux = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="Qt's system libraries are a matter of Linux")
ABSENT = "libplanimeter-test.so.9"


@pytest.fixture
def absent(monkeypatch: pytest.MonkeyPatch) -> None:
    """A system that lacks one library that Qt cannot do without, and one that only windows need."""
    monkeypatch.setattr(setup_check, "LIBRARIES", {ABSENT: ("absent1", "absent-libs", "absent", "absent-1")})
    monkeypatch.setattr(setup_check, "WINDOW_LIBRARIES", {})


@pytest.fixture
def system(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Path:
    """A PATH with nothing but a package manager that writes down what it is asked and installs nothing."""
    asked = tmp_path / "asked"
    manager = tmp_path / "bin" / "apt-get"
    manager.parent.mkdir()
    manager.write_text(f'#!/bin/sh\necho "$@" >> {asked}\n')
    manager.chmod(0o755)
    (manager.parent / "env").symlink_to("/usr/bin/env")
    monkeypatch.setenv("PATH", str(manager.parent))
    return asked


def test_a_library_is_found_only_where_it_is() -> None:
    assert setup_check.loads("libc.so.6") == sys.platform.startswith("linux")
    assert not setup_check.loads(ABSENT)


def test_every_library_has_a_package_with_every_manager() -> None:
    for packages in (*setup_check.LIBRARIES.values(), *setup_check.WINDOW_LIBRARIES.values(), setup_check.SCREEN):
        assert len(packages) == len(setup_check.MANAGERS)
        assert all(packages)


@linux
def test_root_installs_what_is_missing(
    absent: None, system: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("os.geteuid", lambda: 0)
    assert setup_check.main(["libraries"]) == 1  # this manager promises and does not keep
    update, install = system.read_text().splitlines()
    assert update.startswith("update")
    assert install.startswith("install -y") and install.endswith(" absent1")
    assert "sudo apt-get install --no-install-recommends absent1" in capfd.readouterr().err


@linux
def test_who_may_not_install_is_told_what_to_ask_for(
    absent: None, system: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("os.geteuid", lambda: 1000)
    assert setup_check.main(["libraries"]) == 1
    assert not system.exists()
    said = capfd.readouterr().err
    assert ABSENT in said and "absent1" in said and "could not be installed from here" in said


@linux
@pytest.mark.parametrize(("display", "code"), [(None, 0), (":0", 1)])
def test_what_only_windows_need_stops_nobody_without_a_screen(
    absent: None, system: Path, monkeypatch: pytest.MonkeyPatch, display: str | None, code: int
) -> None:
    monkeypatch.setattr("os.geteuid", lambda: 1000)
    monkeypatch.setattr(setup_check, "WINDOW_LIBRARIES", setup_check.LIBRARIES)
    monkeypatch.setattr(setup_check, "LIBRARIES", {})
    monkeypatch.setenv("DISPLAY", display) if display else monkeypatch.delenv("DISPLAY", raising=False)
    assert setup_check.main(["libraries"]) == code


@linux
def test_no_screen_is_no_error(
    system: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("os.geteuid", lambda: 1000)
    assert setup_check.main(["screen"]) == 0
    assert "xvfb" in capfd.readouterr().out


def test_a_whole_environment_is_kept_and_a_broken_one_made_anew(tmp_path: Path) -> None:
    folder = tmp_path / "environment"
    (folder / "bin").mkdir(parents=True)
    (folder / "bin" / "python").symlink_to(sys.executable + "-gone")  # as after the system's Python was replaced
    assert setup_check.main(["venv", str(folder)]) == 0
    assert setup_check.is_whole(folder)
    (folder / "mark").touch()
    assert setup_check.main(["venv", str(folder)]) == 0
    assert (folder / "mark").exists()


def test_it_needs_nothing_but_the_standard_library() -> None:
    """-S and -I: no site packages, no environment; an unknown request is an error that shows the usage."""
    done = subprocess.run(
        [sys.executable, "-I", "-S", setup_check.__file__, "something"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert "setup_check.py libraries" in done.stderr
