"""A test that leaves something running is failed by the fixture that every test here has."""

from __future__ import annotations

from pathlib import Path

import pytest

pytest_plugins = ["pytester"]
CONFTEST = Path(__file__).resolve().parents[1] / "conftest.py"
LEAVES = {
    "a thread": "import threading as t\ndef test(): t.Thread(target=t.Event().wait, args=(30,), daemon=True).start()",
    "a window": "from PySide6.QtWidgets import QLabel\nkept = []\ndef test(qapp): kept.append(QLabel('kept'))",
}
CLEANS = {
    "a thread that ends": "import threading\ndef test(): threading.Thread(target=lambda: None).start()",
    "a window of the bot": "from PySide6.QtWidgets import QLabel\ndef test(qtbot): qtbot.addWidget(QLabel('closed'))",
    "a window that goes": "from PySide6.QtWidgets import QLabel\ndef test(qapp): QLabel('dropped').show()",
    "nothing": "def test(): pass",
}


@pytest.mark.parametrize("source", LEAVES.values(), ids=LEAVES)
def test_what_is_left_behind_fails(pytester: pytest.Pytester, source: str) -> None:
    pytester.makeconftest(CONFTEST.read_text(encoding="utf-8").replace("PATIENCE = 5.0", "PATIENCE = 0.1"))
    pytester.makepyfile(source)
    pytester.runpytest_subprocess().assert_outcomes(passed=1, errors=1)


@pytest.mark.parametrize("source", CLEANS.values(), ids=CLEANS)
def test_what_is_cleaned_up_passes(pytester: pytest.Pytester, source: str) -> None:
    pytester.makeconftest(CONFTEST.read_text(encoding="utf-8"))
    pytester.makepyfile(source)
    pytester.runpytest_subprocess().assert_outcomes(passed=1)
