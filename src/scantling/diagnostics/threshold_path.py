"""Hill's index over thresholds: a plot's data, and the stretch over which it is stable."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.moments import Z90
from scantling.diagnostics.tail_index import one_side

FEWEST = 10
LARGEST_SHARE = 0.25
POINTS = 48


@dataclass(frozen=True, slots=True, kw_only=True)
class ThresholdPath:
    """The tail index at each number of upper order statistics."""

    counts: FloatArray
    """Numbers of upper order statistics, increasing."""
    index: FloatArray
    """Hill's index at each."""
    stable_from: int
    """First count of the longest stable stretch."""
    stable_to: int
    """Last count of it."""
    stable_index: float
    """Median index over the stretch."""


def threshold_path(values: FloatArray) -> ThresholdPath:
    """Hill's index from the 10 largest values to the largest quarter.

    A stretch is stable if every index in it lies within the 90 % error band gamma/sqrt(k) of its
    first, narrowest-sample point; the longest in log k is returned. Hill (1975), Annals of
    Statistics 3. The points share data, so stability is a picture, not evidence.
    """
    ordered = one_side(np.asarray(values, dtype=np.float64), "both")
    positive = int((ordered > 0).sum())
    most = max(FEWEST + 1, min(positive - 1, int(LARGEST_SHARE * ordered.size)))
    counts = np.unique(np.round(np.geomspace(FEWEST, most, POINTS)).astype(int))
    logs = np.log(ordered[: most + 1])
    sums = np.cumsum(logs)
    gamma = np.maximum(sums[counts - 1] / counts - logs[counts], 1e-12)
    best = (0, 0)
    for start in range(counts.size):
        half = Z90 * gamma[start] / np.sqrt(counts[start])
        outside = np.flatnonzero(np.abs(gamma[start:] - gamma[start]) > half)
        stop = start + (int(outside[0]) if outside.size else counts.size - start) - 1
        longer = np.log(counts[stop] / counts[start]) > np.log(counts[best[1]] / counts[best[0]])
        if longer:
            best = (start, stop)
    first, last = best
    return ThresholdPath(
        counts=read_only(counts),
        index=read_only(1 / gamma),
        stable_from=int(counts[first]),
        stable_to=int(counts[last]),
        stable_index=float(np.median(1 / gamma[first : last + 1])),
    )
