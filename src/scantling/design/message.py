"""Wording shared by the refusals of this package: values, names and files on one line."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from pathlib import Path
from typing import Any

_WIDTH = 60
_MOST_COMPARED = 5000
# Shares of letters that match, in order: below them a name is another name, not a slip. One slip
# in a name of three or four letters takes a larger share of it (common practice, no source).
_LIKE = 0.6
_LIKE_SHORT = 0.5
_SHORT = 5


def shown(value: Any) -> str:
    """Return `value` on one printable line of at most about 60 characters.

    Text is quoted, true and false are written as in TOML; nothing the user
    supplies can break a message over two lines or make it unprintable.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and value.bit_length() > 200:
        return f"a whole number of {value.bit_length()} bits"
    if isinstance(value, str):
        text = repr(value[: _WIDTH + 1])
    elif isinstance(value, dict):
        text = "a table"
    elif isinstance(value, list | tuple):
        text = "[" + ", ".join(shown(item) for item in value[:20]) + "]"
    elif isinstance(value, int | float):
        text = repr(value)
    else:
        text = str(value).replace("\n", " ")
    return text if len(text) <= _WIDTH else text[: _WIDTH - 3] + "..."


def nearest(name: str, known: Iterable[str]) -> str:
    """Return '; nearest: ...' for the known name most like `name`, or '' if none is like it."""
    # A comparison costs the product of the lengths: both are bounded.
    pool = {entry[:100]: entry for entry in reversed(list(known)[:_MOST_COMPARED])}
    cutoff = _LIKE_SHORT if 1 < len(name) < _SHORT else _LIKE
    match = difflib.get_close_matches(name[:100], list(pool), n=1, cutoff=cutoff)
    return f"; nearest: {shown(pool[match[0]])}" if match else ""


def listed(names: Iterable[str], most: int = 5) -> str:
    """Return the first `most` names, quoted and separated by commas, and how many more."""
    every = list(names)
    text = ", ".join(shown(name) for name in every[:most])
    return text if len(every) <= most else f"{text} and {len(every) - most} more"


def counted(number: int, noun: str) -> str:
    """Return a number with its noun: '1 row', '12 rows'."""
    return f"{number} {noun}{'' if number == 1 else 's'}"


def file_label(path: Path) -> str:
    """Return the base name of `path` as it may stand in a message."""
    return printable(path.name or str(path))


def printable(text: str) -> str:
    """Return `text` as it is, or escaped and cut if it is long or would not print on one line."""
    if len(text) > 400:
        return repr(text[:400]) + "..."
    return text if text.isprintable() else repr(text)
