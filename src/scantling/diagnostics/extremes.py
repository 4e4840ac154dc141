"""Do extremes come in clusters, and how many independent rows is a dependent sample worth?"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import stdtrit

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.dependence import permuted
from scantling.diagnostics.tail_estimators import (
    block_standard_error,
    influence,
    weighted_hill_coefficients,
)
from scantling.diagnostics.tail_index import (
    MINIMUM,
    block_length,
    magnitudes,
    moderate,
    prepare,
    tail_counts,
)
from scantling.errors import InputError

LEAST_EXCEEDANCES = 10
"""Fewest values the threshold is set to leave above it; the share is raised for that."""
LEVEL = 0.90
"""Nominal coverage of the extremal index's interval."""
REORDERINGS = 99
"""Random orders of a series behind the reference that its effective rows are held against."""
LOWEST_SHARE = 0.05
"""Share of those orders that show fewer rows than the reference."""
LARGEST_ERROR = 0.5
"""Largest standard deviation of a number in [0, 1]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ExtremeClustering:
    """Clustering of a series' largest deviations from its median."""

    index: float
    """Extremal index, in (0, 1]: 1/mean cluster size; 1 where extremes come singly."""
    error: float
    """Its standard error, by the block jackknife before the cap at 1; at most 0.5, the largest
    that a number in [0, 1] can have."""
    low: float
    """Lower end of the 90 % interval, within [0, 1]."""
    high: float
    """Upper end."""
    threshold: float
    """Distance from the median beyond which a value counts, in units of the series."""
    share: float
    """Share of values that the threshold was to leave above it; raised in short series."""
    exceedances: int
    """Values beyond the threshold."""
    clusters: float
    """Independent clusters among them: index * exceedances, at least 1."""


def extreme_clustering(values: Any, *, share: float = 0.05) -> ExtremeClustering:
    """Extremal index of |values - median| by the intervals estimator.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        In time order.
    share : float
        Share of values above the threshold; raised to 10/n in series where it would leave
        fewer than 10 there.

    Raises
    ------
    InputError
        If `values` are not finite numbers or too few, if `share` is not between 0 and 0.5, or
        if ties leave fewer than two values above the threshold.

    Notes
    -----
    Ferro et al. (2003), Journal of the Royal Statistical Society B 65. For ARCH(1) the estimate
    is below the limit at usual thresholds (0.81 at share 0.05 and 0.84 at 0.01 for a limit of
    0.887, by simulation), because calm and wild periods add to the clustering of extremes.
    Standard error: the jackknife over blocks of ceil(n^0.6) rows, a time between exceedances
    belonging to the block in which it starts; interval: Student t with one degree less than
    there are blocks, cut to [0, 1]. It covers sampling error at the threshold used, not the
    distance to the limit.
    """
    between(share, "share", 0, 0.5)
    series = finite_vector(values, "values", minimum=MINIMUM)
    n = series.size
    top = float(np.abs(series).max()) or 1.0
    distance = magnitudes(series / top, "both")
    used = max(float(share), LEAST_EXCEEDANCES / n)
    threshold = float(np.quantile(distance, 1 - used))
    rows = np.flatnonzero(distance > threshold)
    if rows.size < 2:
        raise InputError(
            f"values: {rows.size} lie beyond the {1 - used:.1%} quantile of the distance from the"
            " median, because of ties; clustering needs 2"
        )
    times = np.diff(rows)
    index = min(1.0, intervals_estimator(times))
    error, freedom = _jackknife_error(times, rows[:-1], n)
    step = float(stdtrit(freedom, (1 + LEVEL) / 2)) * error
    return ExtremeClustering(
        index=index,
        error=error,
        low=max(0.0, index - step),
        high=min(1.0, index + step),
        threshold=threshold * top,
        share=used,
        exceedances=int(rows.size),
        clusters=max(1.0, index * rows.size),
    )


def intervals_estimator(times: np.ndarray) -> float:
    """Extremal index from the times between exceedances, before the cap at 1.

    2 (sum T)^2 / (N sum T^2) if no T is above 2, else
    2 (sum (T - 1))^2 / (N sum (T - 1)(T - 2)); Ferro et al. (2003), Journal of the Royal
    Statistical Society B 65. No times at all: 1, no evidence of clustering.

    Parameters
    ----------
    times : array of int, shape (N,)
        In rows, 1 or more.
    """
    if not times.size:
        return 1.0
    spans = times.astype(np.float64)
    if spans.max() <= 2:
        return float(2 * spans.sum() ** 2 / (spans.size * (spans**2).sum()))
    return float(2 * (spans - 1).sum() ** 2 / (spans.size * ((spans - 1) * (spans - 2)).sum()))


def effective_rows(values: Any) -> float:
    """Independent rows whose mean is as exact as that of these n dependent ones.

    n times the variance over the long-run variance with Bartlett weights and bandwidth
    ceil(n^(1/3)); Newey et al. (1987), Econometrica 55. Within [1, n]: negative
    autocorrelation is not counted as a gain.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        In time order.

    Raises
    ------
    InputError
        If `values` are not finite numbers, too few, or constant.
    """
    return float(_mean_rows(_centred(values)[None])[0])


def effective_rows_reference(values: Any, *, seed: int) -> float:
    """Effective rows that 5 % of 99 random orders of the same values fall to or below.

    What `effective_rows` may show of independent rows by chance: no loss is shown from there on.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
    seed : int
        Of the orders.

    Raises
    ------
    InputError
        As `effective_rows`.
    """
    orders = permuted(_centred(values), REORDERINGS, stream(seed, "effective rows, reordered"))
    return _lowest(np.concatenate([_mean_rows(rows) for rows in orders]))


def _lowest(found: FloatArray) -> float:
    """The value that LOWEST_SHARE of random orders fall to or below."""
    return float(np.sort(found)[math.floor(LOWEST_SHARE * (found.size + 1)) - 1])


def _mean_rows(rows: FloatArray) -> FloatArray:
    """Effective rows for the mean of each row of (k, n), centred."""
    n = rows.shape[1]
    bandwidth = math.ceil(round(n ** (1 / 3), 9))
    variance = np.einsum("ij,ij->i", rows, rows)
    long_run = variance.copy()
    for lag in range(1, bandwidth + 1):
        covariance = np.einsum("ij,ij->i", rows[:, lag:], rows[:, :-lag])
        long_run += 2 * (1 - lag / (bandwidth + 1)) * covariance
    # The Bartlett sum is not negative, but may vanish, as for alternating values.
    worth = n * variance / np.where(long_run > 0, long_run, variance)
    return np.asarray(np.clip(worth, 1, n))


def tail_effective_rows(values: Any, *, seed: int = 0) -> float:
    """Independent rows from which the tail index would be as exact as from these.

    n (independent error / block error)^2 of the weighted Hill regression on half of the
    absolute values: Huisman et al. (2001), Journal of Business & Economic Statistics 19, with
    the circular block bootstrap's error in closed form at block ceil(n^0.6), freed of what
    centring takes, sqrt(1 - block/n). Zeros and ties as for `tail_index`; n counts what is
    left. Within [1, n].

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        In time order.
    seed : int
        Of the tie-breaking noise.

    Raises
    ------
    InputError
        If `values` are not finite numbers, too few, constant or discrete.
    """
    return float(_tail_rows(_tail_influence(values, seed)[None])[0])


def tail_effective_rows_reference(values: Any, *, seed: int) -> float:
    """Tail-index effective rows that 5 % of 99 random orders of the values fall to or below.

    With few rows it lies far below them: no loss is shown from there on.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
    seed : int
        Of the orders and the tie-breaking noise.

    Raises
    ------
    InputError
        As `tail_effective_rows`.
    """
    generator = stream(seed, "tail-index effective rows, reordered")
    orders = permuted(_tail_influence(values, seed), REORDERINGS, generator)
    return _lowest(np.concatenate([_tail_rows(rows) for rows in orders]))


def _tail_influence(values: Any, seed: int) -> FloatArray:
    """Influence of each value on the weighted Hill regression, in the order of the series."""
    series = prepare(finite_vector(values, "values", minimum=MINIMUM), seed=seed)
    distance = magnitudes(series.values, "both")
    n = distance.size
    kappa = tail_counts(n)[0]
    order = np.argsort(-distance, kind="stable")
    if distance[order[kappa]] <= 0:
        raise InputError("values: more than half of them are equal, so there is no tail index")
    logs = np.log(np.maximum(distance[order], np.finfo(float).tiny))
    in_time = np.empty(n)
    in_time[order] = influence(logs[:, None], weighted_hill_coefficients(kappa))[:, 0]
    return in_time


def _tail_rows(rows: FloatArray) -> FloatArray:
    """Tail-index effective rows of each row of influences (k, n)."""
    n = rows.shape[1]
    block = block_length(n)
    independent = block_standard_error(rows.T, 1)
    dependent = block_standard_error(rows.T, block) / math.sqrt(1 - block / n)
    ratio = independent / np.maximum(dependent, independent)
    return np.maximum(1.0, n * ratio**2)


def _centred(values: Any) -> FloatArray:
    """Values about their mean, of a size whose squares are safe; a constant is refused."""
    series = moderate(finite_vector(values, "values", minimum=MINIMUM))
    if np.ptp(series) == 0:
        raise InputError("values: constant, so rows cannot be compared")
    return np.asarray(series - series.mean())


def _jackknife_error(times: np.ndarray, starts: np.ndarray, n: int) -> tuple[float, int]:
    """Standard error of the intervals estimator, blocks left out in turn; and blocks - 1."""
    count = max(2, n // block_length(n))
    block = starts * count // n
    without = np.array([intervals_estimator(times[block != left]) for left in range(count)])
    error = float(np.sqrt((count - 1) * without.var()))
    return min(error, LARGEST_ERROR), count - 1
