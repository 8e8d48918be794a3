"""The cache of data folders: whole or not at all."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.data import cache


@pytest.fixture(autouse=True)
def elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setattr(cache, "CACHE", tmp_path / "cache")
    return tmp_path / "cache"


def test_made_once_only(elsewhere: Path) -> None:
    asked = []

    def make(making: Path) -> None:
        asked.append(making)
        (making / "data").write_text("whole")

    folder = cache.made_once("one", make)
    assert folder == elsewhere / "one"
    assert cache.made_once("one", make) == folder
    assert len(asked) == 1
    assert [path.name for path in elsewhere.iterdir()] == ["one"]


def test_nothing_stays_of_a_failure(elsewhere: Path) -> None:
    def make(making: Path) -> None:
        (making / "data").write_text("half")
        raise RuntimeError("stopped half-way")

    with pytest.raises(RuntimeError, match="half-way"):
        cache.made_once("one", make)
    assert not list(elsewhere.iterdir())


def test_the_first_of_two_makers_wins(elsewhere: Path) -> None:
    def quick(making: Path) -> None:
        (making / "data").write_text("first")

    def slow(making: Path) -> None:
        (making / "data").write_text("second")
        cache.made_once("one", quick)

    folder = cache.made_once("one", slow)
    assert (folder / "data").read_text() == "first"
    assert [path.name for path in elsewhere.iterdir()] == ["one"]
