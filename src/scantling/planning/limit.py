"""A limit: the largest number of columns that meets one criterion, with its band."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np

AT_LEAST = "at least"


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """Largest number of columns that meets a criterion."""

    columns: int | None
    """Point estimate; the largest number examined if the limit was not reached; None if the
    limit could not be computed."""
    low: int | None
    """5 % point over draws of the law's parameters."""
    high: int | None
    """95 % point; None if it lies beyond the largest number examined."""
    mode: str
    """conditional | generative."""
    reached: bool
    """Whether the criterion fails within the columns examined."""
    note: str = ""
    """'at least' if the limit was not reached; the reason if it could not be computed."""
    draws: tuple[float, ...] = field(default=(), repr=False)
    """The limit under each draw of the law; inf where it was not reached."""


def missing_limit(reason: str, *, mode: str = "conditional") -> Limit:
    """A limit that could not be computed, and why."""
    return Limit(columns=None, low=None, high=None, mode=mode, reached=False, note=reason)


def make_limit(point: float, draws: Sequence[float], most: int, *, mode: str) -> Limit:
    """Limit from its value under the fitted law and under each draw; inf is 'not reached'.

    A limit not reached has no upper end, whatever the draws say.
    """
    reached = math.isfinite(point)
    low, high = band(draws)
    low, high = min(low, point), max(high, point)  # a band contains its point
    return Limit(
        columns=int(point) if reached else most,
        low=most if math.isinf(low) else int(low),
        high=None if math.isinf(high) or not reached else int(high),
        mode=mode,
        reached=reached,
        note="" if reached else AT_LEAST,
        draws=tuple(float(d) for d in draws),
    )


def band(draws: Sequence[float]) -> tuple[float, float]:
    """The 5 % and 95 % points of the draws, as two of the draws themselves."""
    ordered = np.sort(np.asarray(draws, dtype=np.float64))
    last = ordered.size - 1
    return float(ordered[math.floor(0.05 * last)]), float(ordered[math.ceil(0.95 * last)])


def last_below(passes: Callable[[int], bool], good: int, bad: int) -> int:
    """Largest whole number from `good` on that passes, `bad` being known to fail."""
    while bad - good > 1:
        middle = (good + bad) // 2
        if passes(middle):
            good = middle
        else:
            bad = middle
    return good
