"""How numbers, infinities and unknowns stand in the JSON documents."""

from __future__ import annotations

import math
from typing import Any

DIGITS = 10
"""Significant digits kept; far below any simulation error, above rounding noise."""
ABOVE = "above 50"
UNBOUNDED = "no upper end"


def number(value: float | int | None) -> float | int | None:
    """A JSON number; None for what is unknown or infinite."""
    if value is None or isinstance(value, int):
        return value
    value = float(value)
    if not math.isfinite(value):
        return None
    rounded = float(f"{value:.{DIGITS}g}")
    return rounded if math.isfinite(rounded) else value


def noted(key: str, value: float | int | None, note: str) -> dict[str, Any]:
    """The key with its number, and beside a null the note that explains it."""
    shown = number(value)
    return {key: shown} if shown is not None else {key: None, f"{key}_note": note}
