"""Room for deep texts: sqlglot's parser and printer recurse, and Python's default limits end at 50 nested parentheses."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable
from typing import TypeVar

T = TypeVar("T")

_SHALLOW = 150
_STACK = 512 * 1024 * 1024
_lock = threading.Lock()


def deep(function: Callable[[], T], levels: int) -> T:
    """Runs the function with room for about `levels` levels of recursion: here if they are few, else in a thread of its own.

    An exception passes through as if the function had been called directly.
    """
    if levels <= _SHALLOW:
        return function()
    result: list[T] = []
    failure: list[BaseException] = []

    def run() -> None:
        try:
            result.append(function())
        except BaseException as error:
            failure.append(error)

    with _lock:
        limit, stack = sys.getrecursionlimit(), threading.stack_size(_STACK)
        sys.setrecursionlimit(max(limit, 60 * levels, 10_000))
        try:
            thread = threading.Thread(target=run, name="deep-text")
            thread.start()
            thread.join()
        finally:
            threading.stack_size(stack)
            sys.setrecursionlimit(limit)
    if failure:
        raise failure[0]
    return result[0]
