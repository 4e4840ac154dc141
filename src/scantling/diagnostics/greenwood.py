"""Is there a finite tail index at all? The Greenwood statistic of the largest excesses.

Under exponential excesses the statistic is free of parameters; power tails make it larger,
lighter-than-exponential ones smaller. Greenwood (1946), Journal of the Royal Statistical
Society 109; Castillo et al. (2014), Scandinavian Journal of Statistics 41.
"""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.greenwood_table import UPPER_POINTS, UPPER_PROBABILITIES


def greenwood_statistic(ordered: FloatArray, count: int) -> FloatArray:
    """k sum Y^2 / (sum Y)^2 of the excesses Y over X_(k+1), k = `count`.

    `ordered` is (m,) or (m, columns), decreasing, m > count. Equal excesses give 1.
    """
    excess = ordered[:count] - ordered[count]
    largest = excess.max(axis=0)
    share = excess / np.where(largest > 0, largest, 1.0)  # squares of tiny excesses would vanish
    total = share.sum(axis=0)
    ratio = count * (share**2).sum(axis=0) / np.where(total > 0, total, 1.0) ** 2
    return np.asarray(np.where(total > 0, ratio, 1.0))


def null_moments(count: int) -> tuple[float, float]:
    """Exact mean and variance of the statistic under exponential excesses."""
    mean = 2 * count / (count + 1)
    variance = 4 * count**2 * (count - 1) / ((count + 1) ** 2 * (count + 2) * (count + 3))
    return mean, variance


def upper_points(count: int) -> FloatArray:
    """Upper points of the standardised statistic at UPPER_PROBABILITIES.

    Between the tabulated counts they are interpolated in log(count); beyond the largest,
    the largest is used.
    """
    counts = sorted(UPPER_POINTS)
    logs = np.log(counts)
    table = np.array([UPPER_POINTS[k] for k in counts])
    return np.array([np.interp(np.log(count), logs, table[:, j]) for j in range(table.shape[1])])


def greenwood_p_value(statistic: FloatArray, count: int) -> FloatArray:
    """One-sided p-value against power tails, of the shape of `statistic`.

    Below the smallest tabulated probability the log of the p-value is extrapolated linearly.
    """
    mean, variance = null_moments(count)
    standard = (np.asarray(statistic) - mean) / np.sqrt(variance)
    points = upper_points(count)
    logs = np.log(UPPER_PROBABILITIES)
    inside = np.interp(standard, points, logs)
    slope = (logs[-1] - logs[-3]) / max(points[-1] - points[-3], 1e-9)
    beyond = logs[-1] + slope * (standard - points[-1])
    return np.asarray(np.exp(np.where(standard > points[-1], beyond, inside)))
