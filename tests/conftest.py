"""What every test can rely on: no screen is needed, generated cases are reproducible, nothing is left running."""

from __future__ import annotations

import os
import threading
from collections.abc import Iterator

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

import pytest
from hypothesis import settings

settings.register_profile("default", deadline=None, max_examples=60, derandomize=bool(os.environ.get("CI")))
settings.register_profile("soak", deadline=None, max_examples=2000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "default"))


@pytest.fixture(autouse=True)
def nothing_left_running() -> Iterator[None]:
    """A test that leaves a thread behind (daemons of libraries aside) fails."""
    before = set(threading.enumerate())
    yield
    left = [t for t in threading.enumerate() if t not in before and not t.daemon and t.is_alive()]
    for thread in left:
        thread.join(2.0)
    assert not [t for t in left if t.is_alive()], f"left running: {left}"
