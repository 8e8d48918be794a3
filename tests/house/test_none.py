"""Qt's binding must not drop references to None: an interpreter that runs out of them dies within minutes."""

from __future__ import annotations

import subprocess
import sys

# Void calls of several kinds: a setter of a core object, of a widget, a virtual called from C++, a signal with a slot.
CALLS = """
import sys
from PySide6.QtCore import QObject, QTimer, Signal
from PySide6.QtWidgets import QApplication, QLabel

application = QApplication([])

class Source(QObject):
    sent = Signal(int)

class Label(QLabel):
    def resizeEvent(self, event):
        super().resizeEvent(event)

source, label, timer = Source(), Label(), QTimer()
source.sent.connect(lambda number: None)
label.show()

def calls(number):
    source.setObjectName(str(number))
    label.setText(str(number))
    label.resize(100 + number % 7, 50)
    timer.setInterval(number)
    source.sent.emit(number)

for number in range(100):
    calls(number)
before = sys.getrefcount(None)
for number in range(2000):
    calls(number)
print(5 * 2000, sys.getrefcount(None) - before)
"""


def test_void_calls_of_qt_keep_the_references_to_none() -> None:
    """From Python 3.12 on, None is never freed and its count stands still; below, each call would lose one."""
    done = subprocess.run([sys.executable, "-c", CALLS], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    calls, change = map(int, done.stdout.split())
    assert abs(change) < calls / 100, f"{calls} void calls changed the count of None by {change}"
