"""A virtual X11 screen for tests that need a real one."""

from __future__ import annotations

import os
import shutil
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager

import pytest

from app.setup_check import WINDOW_LIBRARIES, loads


@contextmanager
def virtual_screen(size: str = "1400x900x24") -> Iterator[dict[str, str]]:
    """The environment of a process that shows its windows on a screen of its own. Skips where there can be none."""
    program = shutil.which("Xvfb")
    if program is None:
        pytest.skip("Xvfb is not installed and could not be installed: no virtual screen to run on")
    missing = [library for library in WINDOW_LIBRARIES if not loads(library)]
    if missing:
        pytest.skip(f"libraries that Qt needs for an X11 window are missing: {', '.join(missing)}")
    reads, writes = os.pipe()
    server = subprocess.Popen(
        [program, "-displayfd", str(writes), "-screen", "0", size, "-nolisten", "tcp"],
        pass_fds=[writes],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    os.close(writes)
    try:
        with os.fdopen(reads) as answer:
            number = answer.readline().strip()  # empty when the server ended without a screen
        assert number, f"Xvfb is installed but did not start (exit code {server.wait(10)})"
        environment = {**os.environ, "DISPLAY": f":{number}", "QT_QPA_PLATFORM": "xcb"}
        environment.pop("WAYLAND_DISPLAY", None)
        yield environment
    finally:
        server.terminate()
        server.wait(10)
