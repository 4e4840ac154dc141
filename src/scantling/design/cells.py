"""The text of single values: numbers, missing ones, and what is neither."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray

_MISSING = frozenset({"", "na", "nan", "null"})
_WORDS = {**dict.fromkeys(_MISSING, np.nan), "true": 1.0, "false": 0.0}


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """A value that is neither a number nor missing."""

    row: int
    """Row of data, from 0."""
    text: str
    """The value as in the file."""


def blank(text: str) -> bool:
    """Return whether a text stands for a missing value: '', NA, NaN or null, in any case."""
    return text.strip().lower() in _MISSING


def number(text: str) -> float | None:
    """Return the number a text stands for: nan if missing, None if it is no number.

    True and False are 1 and 0. Digits grouped by commas, spaces or underscores,
    signs of currency or percent, and digits of other scripts are no numbers.
    """
    bare = text.strip()
    word = _WORDS.get(bare.lower())
    if word is not None:
        return word
    # float() also takes 1_000 and the digits of every script.
    if "_" in bare or not bare.isascii():
        return None
    try:
        return float(bare)
    except ValueError:
        return None


def column_numbers(texts: Sequence[str]) -> tuple[FloatArray, Fault | None]:
    """Return the numbers of a column of texts, and the first text that is none.

    Returns
    -------
    numbers : array, shape (n,)
        nan where a value is missing or is no number; infinities are kept.
    fault : Fault or None
        The first value that is neither a number nor missing.
    """
    joined = "".join(texts)
    if joined.isascii() and "_" not in joined:
        try:
            return np.fromiter(map(float, texts), dtype=np.float64, count=len(texts)), None
        except ValueError:
            pass
    known: dict[str, float | None] = {}
    numbers = np.full(len(texts), np.nan)
    fault = None
    for row, text in enumerate(texts):
        value = known[text] if text in known else known.setdefault(text, number(text))
        if value is not None:
            numbers[row] = value
        elif fault is None:
            fault = Fault(row=row, text=text)
    return numbers, fault
