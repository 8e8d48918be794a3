"""What every test can rely on: no screen is needed, generated cases are reproducible, nothing is left running."""

from __future__ import annotations

import gc
import os
import sys
import threading
import time
from collections.abc import Iterator

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

import pytest
from hypothesis import settings

settings.register_profile("default", deadline=None, max_examples=60, derandomize=bool(os.environ.get("CI")))
settings.register_profile("soak", deadline=None, max_examples=2000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "default"))

PATIENCE = 5.0  # seconds for what has been told to end


def python_threads() -> set[threading.Thread]:
    """The threads that Python code started. Those that a library made and Python only met are not ours to end."""
    return {each for each in threading.enumerate() if not isinstance(each, threading._DummyThread)}


def top_level_widgets() -> list[object]:
    """Windows that belong to no other; none where Qt has not been loaded, so that no test loads it for this."""
    widgets = sys.modules.get("PySide6.QtWidgets")
    if widgets is None or widgets.QApplication.instance() is None:
        return []
    return [each for each in widgets.QApplication.topLevelWidgets() if each.parent() is None]


def delete_what_was_released() -> None:
    """Carries out the deletions that Qt puts off until its event loop runs, and those that wait for the collector."""
    from PySide6.QtCore import QCoreApplication, QEvent

    gc.collect()
    QCoreApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete)


@pytest.fixture(autouse=True)
def nothing_left_running() -> Iterator[None]:
    """A test that leaves a thread or a window behind fails: the next one would have to live with it."""
    threads, widgets = python_threads(), top_level_widgets()
    yield
    until = time.monotonic() + PATIENCE
    for thread in python_threads() - threads:
        thread.join(max(0.0, until - time.monotonic()))
    left = sorted(thread.name for thread in python_threads() - threads if thread.is_alive())
    assert not left, f"left running: {', '.join(left)}"
    if any(widget not in widgets for widget in top_level_widgets()):
        delete_what_was_released()
        windows = [repr(widget) for widget in top_level_widgets() if widget not in widgets]
        assert not windows, f"left open: {', '.join(windows)}"
