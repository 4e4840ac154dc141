"""The column that orders the rows: dates, dates with time, or numbers."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scantling.design.cells import number

_ISO = re.compile(
    r"\d{4}-\d{2}(-\d{2}([T ]\d{2}:\d{2}(:\d{2}([.,]\d{1,9})?)?(Z|[+-]\d{2}:?\d{2})?)?)?", re.ASCII
)
_WHOLE = re.compile(r"[+-]?\d{1,300}", re.ASCII)


@dataclass(frozen=True, slots=True, kw_only=True)
class Disorder:
    """The first place where a time column does not order its rows."""

    position: int
    """Position of the label at fault, from 0."""
    unreadable: bool
    """True: the label is no time. False: it does not come after the one before."""
    kind: str
    """What the label was read as: an ISO date, or a number."""


def looks_like_date(label: str) -> bool:
    """Return whether a label has the shape of an ISO date, or of a date with time."""
    return _ISO.fullmatch(label.strip()) is not None


def disorder(labels: Sequence[str]) -> Disorder | None:
    """Return the first place where labels are no times, or do not increase strictly.

    All labels are ISO dates (2020-03, 2020-03-31, 2020-03-31 16:00:00+01:00;
    those without an offset are taken as UTC) or all are finite numbers; the
    first label decides which.
    """
    bare = [label.strip() for label in labels]
    if not bare:
        return None
    if looks_like_date(bare[0]):
        kind = "an ISO date"
        usable, later = _date_order(bare)
    else:
        kind = "a number"
        usable, later = _number_order(bare)
    bad = np.flatnonzero(~usable)
    if bad.size:
        kind = kind if bad[0] else "an ISO date or a number"
        return Disorder(position=int(bad[0]), unreadable=True, kind=kind)
    back = np.flatnonzero(~later)
    if back.size:
        return Disorder(position=int(back[0]) + 1, unreadable=False, kind=kind)
    return None


def _date_order(labels: list[str]) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return which labels are dates, and which dates come after the one before."""
    import pandas

    shaped = np.array([_ISO.fullmatch(label) is not None for label in labels])
    stamps = pandas.to_datetime(
        [label if fits else "" for label, fits in zip(labels, shaped, strict=True)],
        format="ISO8601",
        utc=True,
        errors="coerce",
    )
    return np.asarray(stamps.notna()), np.asarray(stamps[1:] > stamps[:-1])


def _number_order(labels: list[str]) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return which labels are finite numbers, and which exceed the one before."""
    # Whole numbers stay whole: nanoseconds since 1970 exceed a float's digits.
    values = [int(label) if _WHOLE.fullmatch(label) else _plain(label) for label in labels]
    usable = np.array([value is not None for value in values], dtype=bool)
    if not usable.all():
        return usable, np.zeros(0, dtype=bool)
    numbers = [value for value in values if value is not None]
    return usable, np.array([after > before for before, after in pairwise(numbers)], dtype=bool)


def _plain(label: str) -> float | None:
    value = number(label)
    named = label.lower() in ("true", "false")
    return None if named or value is None or not math.isfinite(value) else value
