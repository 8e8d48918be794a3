"""Numbers as a drawing writes them."""

from __future__ import annotations

import math

_UNITS = ((1e18, "E"), (1e15, "P"), (1e12, "T"), (1e9, "G"), (1e6, "M"), (1e3, "k"))


def rows_text(value: float) -> str:
    """Rows in three figures: 0.3, 412, 4.9k, 741M, 1.2T. Whole numbers below ten thousand are written out."""
    if value != value or math.isinf(value):
        return "∞"
    if value < 0.05:
        return "0"
    if value < 9.95 and abs(value - round(value)) > 0.05:
        return f"{value:.1f}"
    if round(value) < 10_000:
        return str(round(value))
    for size, unit in _UNITS:
        if value >= size * 0.9995:
            return f"{_three(value / size)}{unit}"
    return str(round(value))


def _three(value: float) -> str:
    if value >= 1000:
        return f"{value:,.0f}"
    digits = 0 if value >= 99.95 else 1 if value >= 9.995 else 2
    text = f"{value:.{digits}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def bytes_text(value: float) -> str:
    """Bytes with binary-free SI units: 912 B, 41.6 GB."""
    if value < 1000:
        return f"{value:.0f} B"
    for size, unit in _UNITS:
        if value >= size:
            return f"{_three(value / size)} {unit if unit != 'k' else 'k'}B"
    return f"{value:.0f} B"


def ratio_text(before: float, after: float) -> str:
    """How many times fewer or more rows: "÷ 157", "× 3.2", "=" where they are the same."""
    before, after = max(before, 1.0), max(after, 1.0)
    if abs(before - after) <= 0.005 * before:
        return "="
    if before > after:
        return f"÷ {_three(before / after)}"
    return f"× {_three(after / before)}"
