"""Layout of graphs with shared parts, by Graphviz in a worker process that is started when first needed."""

from __future__ import annotations

import atexit
import json
import subprocess
import sys
import threading
from collections.abc import Mapping, Sequence
from functools import lru_cache

Point = tuple[float, float]
_WAIT = 8.0


class _Worker:
    """One Graphviz process; restarted if it dies, given up on if it does not answer."""

    def __init__(self) -> None:
        self._process: subprocess.Popen[str] | None = None
        self._lock = threading.Lock()

    def ask(self, request: str) -> dict[str, object] | None:
        with self._lock:
            process = self._running()
            assert process.stdin is not None and process.stdout is not None
            timer = threading.Timer(_WAIT, process.kill)
            timer.start()
            try:
                process.stdin.write(request + "\n")
                process.stdin.flush()
                line = process.stdout.readline()
            except OSError:
                line = ""
            finally:
                timer.cancel()
                timer.join()
            answer = json.loads(line) if line.strip() else None
            return answer if isinstance(answer, dict) and "error" not in answer else None

    def _running(self) -> subprocess.Popen[str]:
        if self._process is None or self._process.poll() is not None:
            command = [sys.executable, "-m", "core.drawing.graphviz_worker"]
            self._process = subprocess.Popen(
                command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True
            )
            atexit.register(self.stop)
        return self._process

    def stop(self) -> None:
        if self._process is not None and self._process.poll() is None:
            self._process.kill()
            self._process.wait(2)


_worker = _Worker()


def place(sizes: Mapping[str, tuple[float, float]], edges: Sequence[tuple[str, str]]) -> Mapping[str, Point] | None:
    """The centres of nodes of these sizes; those of a row share their y.

    None where Graphviz cannot be had (the caller then draws a tree with references).
    """
    return _placed(json.dumps({"nodes": dict(sizes), "edges": list(edges)}))


@lru_cache(maxsize=64)
def _placed(request: str) -> Mapping[str, Point] | None:
    answer = _worker.ask(request)
    if answer is None:
        return None
    nodes = answer["nodes"]
    assert isinstance(nodes, dict)
    return {name: (float(x), float(y)) for name, (x, y) in nodes.items()}
