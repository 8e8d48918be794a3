"""Folders that are made once."""

from __future__ import annotations

import hashlib
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
CACHE = ROOT / "build" / "cache"


def made_once(name: str, make: Callable[[Path], None]) -> Path:
    """The folder of this name in the cache; `make` fills it when it is not there.

    It appears whole or not at all, also when several processes ask at once or one of them dies half-way. The name must
    hold all that the content depends on.
    """
    folder = CACHE / name
    if folder.is_dir():
        return folder
    CACHE.mkdir(parents=True, exist_ok=True)
    making = Path(tempfile.mkdtemp(prefix=f".{name}-", dir=CACHE))
    try:
        make(making)
        making.chmod(0o755)
        try:
            making.rename(folder)
        except OSError:
            if not folder.is_dir():  # else another process was first, with the same content
                raise
    finally:
        shutil.rmtree(making, ignore_errors=True)
    return folder


def digest(*files: Path) -> str:
    """A short fingerprint of the contents of files."""
    summed = hashlib.sha256()
    for file in files:
        summed.update(file.read_bytes())
    return summed.hexdigest()[:12]
