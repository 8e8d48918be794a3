"""Long work beside the window: one task at a time in a thread, with progress, cancelled at once, stale results dropped."""

from __future__ import annotations

import threading
import traceback
from collections.abc import Callable
from typing import Any

from PySide6.QtCore import QObject, Signal

Task = Callable[[threading.Event, Callable[[float, str], None]], Any]


class Worker(QObject):
    """Runs tasks in a thread of its own and reports in the window's thread."""

    started = Signal(str)
    progressed = Signal(float, str)
    finished = Signal()
    failed = Signal(str)
    _done = Signal(int, object)
    _broke = Signal(int, str)

    def __init__(self) -> None:
        super().__init__()
        self._number = 0
        self._cancel = threading.Event()
        self._thread: threading.Thread | None = None
        self._then: Callable[[Any], None] | None = None
        self._done.connect(self._deliver)
        self._broke.connect(self._report)

    @property
    def busy(self) -> bool:
        return self._then is not None

    def start(self, name: str, task: Task, then: Callable[[Any], None]) -> None:
        """Starts a task; one that is running is cancelled first."""
        self.cancel()
        self._number += 1
        number, cancel = self._number, threading.Event()
        self._cancel, self._then = cancel, then

        def run() -> None:
            try:
                result = task(cancel, lambda share, text: self.progressed.emit(share, text))
            except Exception as error:
                if not cancel.is_set():
                    self._broke.emit(number, f"{type(error).__name__}: {error}" if not str(error) else str(error))
                    if not isinstance(error, (ValueError, RuntimeError)):
                        traceback.print_exc()
                return
            self._done.emit(number, result)

        self._thread = threading.Thread(target=run, name=f"work-{number}", daemon=True)
        self.started.emit(name)
        self._thread.start()

    def cancel(self) -> None:
        """Stops waiting for the running task at once; the task itself ends at its next look at the flag."""
        if self._then is not None:
            self._cancel.set()
            self._then = None
            self._number += 1
            self.finished.emit()

    def wait(self, seconds: float = 10.0) -> None:
        """For tests and closing: waits until the thread has ended."""
        if self._thread is not None:
            self._thread.join(seconds)

    def _deliver(self, number: int, result: object) -> None:
        if number != self._number or self._then is None:
            return
        then, self._then = self._then, None
        self.finished.emit()
        then(result)

    def _report(self, number: int, message: str) -> None:
        if number == self._number:
            self._then = None
            self.finished.emit()
            self.failed.emit(message)
