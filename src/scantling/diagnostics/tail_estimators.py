"""Tail-index estimators on sorted arrays: formulas only, no thresholds chosen, no checks.

Notation: `ordered` holds positive values in decreasing order along the first axis,
X_(1) >= X_(2) >= ...; gamma = 1/alpha is what is estimated, alpha the tail index.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from scantling.core.record import FloatArray, read_only


def hill(ordered: FloatArray, count: int) -> FloatArray:
    """Mean log excess over X_(count+1) of the `count` largest values.

    Hill (1975), Annals of Statistics 3. Equals the Pareto maximum-likelihood 1/shape with
    the scale fixed at X_(count+1).

    Parameters
    ----------
    ordered : array, shape (m,) or (m, columns), m > count
    count : int
        Upper order statistics used.
    """
    logs = np.log(ordered[: count + 1])
    return np.asarray(logs[:count].mean(axis=0) - logs[count])


def pickands(ordered: FloatArray, m: int) -> float:
    """ln[(X_(m) - X_(2m)) / (X_(2m) - X_(4m))] / ln 2; Pickands (1975), Annals of Statistics 3."""
    first, second, fourth = ordered[m - 1], ordered[2 * m - 1], ordered[4 * m - 1]
    return float(np.log((first - second) / (second - fourth)) / np.log(2))


def moment_estimator(ordered: FloatArray, count: int) -> float:
    """M_1 + 1 - (1/2)/(1 - M_1^2/M_2); Dekkers et al. (1989), Annals of Statistics 17."""
    logs = np.log(ordered[:count] / ordered[count])
    first, second = logs.mean(), (logs**2).mean()
    return float(first + 1 - 0.5 / (1 - first**2 / second))


def rank_half_index(ordered: FloatArray, count: int) -> float:
    """Tail index alpha from regressing ln(i - 1/2) on ln X_(i), i <= count.

    Gabaix et al. (2011), Journal of Business & Economic Statistics 29; its standard error is
    alpha sqrt(2/count), not that of the regression.
    """
    logs = np.log(ordered[:count])
    ranks = np.log(np.arange(1, count + 1) - 0.5)
    centred = logs - logs.mean()
    return float(-(centred @ ranks) / (centred @ centred))


def bias_reduced_hill(ordered: FloatArray, count: int) -> float:
    """Intercept of i ln(X_(i)/X_(i+1)) on i/(count+1), i <= count (second-order index -1).

    Beirlant et al. (1999), Extremes 2.
    """
    logs = np.log(ordered[: count + 1])
    index = np.arange(1, count + 1)
    spacings = index * (logs[:-1] - logs[1:])
    regressor = index / (count + 1)
    centred = regressor - regressor.mean()
    slope = (centred @ spacings) / (centred @ centred)
    return float(spacings.mean() - slope * regressor.mean())


@lru_cache(maxsize=32)
def weighted_hill_coefficients(kappa: int) -> FloatArray:
    """Coefficients a, shape (kappa+1,), with which the weighted Hill is sum_i a_i ln X_(i).

    The estimator is the intercept of H_k on k, k = 1..kappa, by least squares with weight k:
    it extrapolates the linear bias of Hill to k = 0. Huisman et al. (2001), Journal of
    Business & Economic Statistics 19. H_k is linear in the logs, hence so is the intercept.
    """
    k = np.arange(1, kappa + 1, dtype=np.float64)
    sums = [float((k ** (1 + power)).sum()) for power in range(3)]
    on_hill = k * (sums[2] - sums[1] * k) / (sums[0] * sums[2] - sums[1] ** 2)
    on_logs = np.zeros(kappa + 1)
    on_logs[:kappa] = np.cumsum((on_hill / k)[::-1])[::-1]
    on_logs[1:] -= on_hill
    return read_only(on_logs)


def weighted_hill(ordered: FloatArray, kappa: int) -> FloatArray:
    """gamma by the weighted Hill regression; `ordered` is (m,) or (m, columns), m > kappa."""
    return np.asarray(weighted_hill_coefficients(kappa) @ np.log(ordered[: kappa + 1]))


def influence(log_ordered: FloatArray, coefficients: FloatArray) -> FloatArray:
    """Influence of each observation on sum_i a_i ln X_(i), by rank.

    For T = integral of A(share above y) d ln y with A' = n a, an observation of rank r moves
    T by (1/n) IF_r with IF_r = n sum_{j >= r} a_j D_j - sum_j j a_j D_j, D_j the log spacings
    (von Mises expansion; ranks beyond the coefficients share the last value). A is taken to be
    smooth, up to where it stops.

    Parameters
    ----------
    log_ordered : array, shape (n, columns)
        Logs in decreasing order; only the first len(a) are read.
    coefficients : array, shape (kappa+1,)

    Returns
    -------
    array, shape (n, columns)
        Mean zero over ranks, up to rounding.
    """
    n = log_ordered.shape[0]
    kappa = coefficients.size - 1
    # Summing by parts, the estimator is sum_j A_j D_j with A_j = a_1 + ... + a_j.
    spacing = log_ordered[:kappa] - log_ordered[1 : kappa + 1]
    weighted = coefficients[:kappa, None] * spacing
    out = np.zeros_like(log_ordered)
    out[:kappa] = n * np.cumsum(weighted[::-1], axis=0)[::-1]
    out -= (np.arange(1, kappa + 1)[:, None] * weighted).sum(axis=0)
    return out - out.mean(axis=0)


def hill_influence(log_ordered: FloatArray, count: int) -> FloatArray:
    """Influence of each observation on Hill at `count`, by rank, shape (n, columns).

    (n/k)[(ln X/X_(k+1))_+ - H 1(X > X_(k+1))]: the second term is the threshold's own movement,
    which `influence` has no need of because the weighted Hill's coefficients do not jump.
    Hsing (1991), Annals of Statistics 19.
    """
    excess = log_ordered[:count] - log_ordered[count]
    out = np.zeros_like(log_ordered)
    out[:count] = (excess - excess.mean(axis=0)) * (log_ordered.shape[0] / count)
    return out


def block_standard_error(influences: FloatArray, block: int) -> FloatArray:
    """Standard error of a mean-type statistic under dependence.

    The variance the circular moving-block bootstrap has for a mean, in closed form: the mean
    square of block sums over n * block. `influences` is (n, columns), in time order.
    """
    n = influences.shape[0]
    if block <= 1:
        return np.asarray(np.sqrt((influences**2).mean(axis=0) / n))
    wrapped = np.concatenate([influences, influences[: block - 1]])
    running = np.cumsum(np.concatenate([np.zeros_like(wrapped[:1]), wrapped]), axis=0)
    sums = running[block:] - running[:-block]
    return np.asarray(np.sqrt((sums**2).mean(axis=0) / block / n))
