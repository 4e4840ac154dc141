"""Sizes that move together: with the errors' volatility, among columns, and over time.

A series is the centre plus path^g times the rest, path the errors' own volatility; the rest has
normal scores T(exp(s h) z), h a log scale that series share in part and that may persist.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import gammainccinv, gammaincinv, ndtr, ndtri, polygamma

from scantling.core.even_table import EvenTable
from scantling.core.record import FloatArray, read_only
from scantling.law.column_margins import pooled

FLOOR = 0.05
"""Sizes below this share of the median size count as that: their logs say nothing."""
LARGEST_EXPONENT = 1.5
FLAT = 0.02
"""A log path that varies less says nothing on exponents."""
CLEAR = 2.5
"""Standard errors from which a co-movement is taken up."""
LARGEST_SCALE = 1.5
LAGS = 5
NODES = 49
REACH = 9.0
"""Standard normals at which the log scale is tabulated, to either side."""
CELLS = 2048
FEWEST_SERIES = 10
"""Series from which the asymmetry of the log scale is read."""
HALF_NORMAL = ndtri((np.arange(400) + 0.5) / 800 + 0.5)
"""Equally likely sizes of a standard normal."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CommonScale:
    """The log scale of the normal scores, which is normal."""

    shared: float
    """sd of the part all series share."""
    own: float
    """sd of each series' own part."""
    persistence: float
    """Autocorrelation of both from one row to the next; 0 where rows have no order."""
    errors: float
    """sd of the shared part in the log size of the errors."""
    heavy: bool
    """Whether the log scale is that of a Student law's mixing variable, whose large values
    come together; else normal."""

    @property
    def total(self) -> float:
        """sd of a series' log scale."""
        return math.hypot(self.shared, self.own)


def log_sizes(series: FloatArray) -> FloatArray:
    """Log absolute values of each series (m, B), floored at 5 % of their median."""
    size = np.abs(series)
    middle = np.median(size, axis=0)
    floor = FLOOR * np.where(middle > 0, middle, size.mean(axis=0))
    return np.asarray(np.log(np.maximum(size, floor)))


def exponents(series: FloatArray, path: FloatArray) -> FloatArray:
    """Exponent g of the errors' volatility `path` (m,) in each series (m, B), 0 to 1.5.

    Slopes of log size on log path, shrunk towards their mean over series, or towards 0 where
    that mean lies within 2.5 of its standard errors, which allow for persistence.
    """
    steps = np.log(path) - np.log(path).mean()
    if float(steps.std()) < FLAT or not series.shape[1]:
        return np.zeros(series.shape[1])
    sizes = log_sizes(series)
    slopes, errors = _slopes(sizes, steps)
    mean, mean_error = _slopes(sizes.mean(axis=1)[:, None], steps)
    if slopes.size == 1:
        out = slopes if slopes[0] > CLEAR * errors[0] else np.zeros(1)
    elif abs(mean[0]) > CLEAR * mean_error[0]:
        out = pooled(slopes, errors)
    else:
        # About 0: one zero a series turns shrinking to the mean into shrinking to 0.
        out = pooled(np.concatenate([slopes, -slopes]), np.tile(errors, 2))[: slopes.size]
    return np.asarray(np.clip(out, 0.0, LARGEST_EXPONENT))


def _slopes(sizes: FloatArray, steps: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Least-squares slopes of sizes (m, B) on centred steps (m,), and their errors.

    Errors grow by sqrt((1 + ab)/(1 - ab)), a and b the first autocorrelations of residual and
    regressor: Bartlett (1935), J. Royal Statistical Society 98.
    """
    power = float(steps @ steps)
    centred = sizes - sizes.mean(axis=0)
    slope = steps @ centred / power
    rest = centred - steps[:, None] * slope
    spread = np.maximum((rest**2).sum(axis=0), np.finfo(float).tiny)
    product = (rest[1:] * rest[:-1]).sum(axis=0) / spread * float(steps[1:] @ steps[:-1]) / power
    product = np.clip(product, 0.0, 0.9)
    error = np.sqrt(spread / len(steps) / power * (1 + product) / (1 - product))
    return slope, error


def fit_scale(
    scores: FloatArray, correlation_part: float, error_scores: FloatArray, *, ordered: bool
) -> CommonScale:
    """Fit the common log scale of normal scores (m, B) and its part in the errors' (m,).

    Covariances of log sizes over pairs, over lags 1 to 5, and with the errors, each taken up
    only when clear of 0. `correlation_part` is the mean over pairs of arcsin(r)^2/2, which
    correlation r alone contributes. The scale is that of a Student law if its third moment is
    nearer to that law's than to 0, or cannot be seen.
    """
    m, width = scores.shape
    sizes = log_sizes(scores)
    sizes -= sizes.mean(axis=0)
    level = sizes.mean(axis=1)
    own_variance = float((sizes**2).mean())
    shared = 0.0
    if width > 1:
        pairs = (float(level.var()) * width - own_variance) / (width - 1) - correlation_part
        error = own_variance * math.sqrt(2 / m) * max(1 / width, 0.02)
        shared = pairs if pairs > CLEAR * error + 0.01 else 0.0
    persistence, total = _persistence(sizes, level, shared) if ordered else (0.0, 0.0)
    own = max(0.0, total - shared)
    heavy = width < FEWEST_SERIES or not shared or _asymmetric(level, shared)
    whole = _scale_of(shared + own, heavy)
    share = shared / (shared + own) if shared else 0.0
    return CommonScale(
        shared=whole * math.sqrt(share),
        own=whole * math.sqrt(1 - share),
        persistence=persistence,
        errors=_error_link(level, error_scores, math.sqrt(shared), heavy) if shared else 0.0,
        heavy=heavy,
    )


def _scale_of(variance: float, heavy: bool) -> float:
    """sd of the log scale at which log sizes of the scores have this variance in common."""
    if variance <= 0:
        return 0.0
    tried = np.linspace(0.0, LARGEST_SCALE, 16)
    given = np.array([0.0, *(_common_variance(float(scale), heavy) for scale in tried[1:])])
    return float(np.interp(variance, np.maximum.accumulate(given), tried))


def _common_variance(scale: float, heavy: bool) -> float:
    """Variance of E(ln |T(exp(log scale) z)| given the scale), z normal, floored as sizes are."""
    law = CommonScale(shared=scale, own=0.0, persistence=0.0, errors=0.0, heavy=heavy)
    nodes = np.linspace(-8, 8, NODES)
    weights = np.exp(-(nodes**2) / 2)
    size = np.multiply.outer(np.exp(log_mix(nodes, scale, heavy)), HALF_NORMAL)
    logs = np.log(np.maximum(squeezed(size, squeeze(law)), FLOOR * ndtri(0.75))).mean(axis=1)
    mean, square = (float(weights @ logs**k / weights.sum()) for k in (1, 2))
    return square - mean**2


def _asymmetric(level: FloatArray, variance: float) -> bool:
    third = float(((level - level.mean()) ** 3).mean())
    half_df = _half_df(math.sqrt(variance))
    return third > -float(polygamma(2, half_df)) / 16


@lru_cache(maxsize=512)
def _half_df(scale: float) -> float:
    """Half the degrees of freedom at which (1/2) log(df/chi^2) has sd `scale`."""
    low, high = -3.0, 12.0
    for _ in range(50):
        middle = (low + high) / 2
        if polygamma(1, math.exp(middle)) / 4 > scale**2:
            low = middle
        else:
            high = middle
    return math.exp(low)


def log_mix(normal: FloatArray, scale: float, heavy: bool) -> FloatArray:
    """Log scale of sd `scale` at standard normals of any shape: normal, or a Student law's."""
    if not heavy or scale < FLAT:
        return np.asarray(scale * normal)
    return _student_mix(scale)(normal)


@lru_cache(maxsize=512)
def _student_mix(scale: float) -> EvenTable:
    half = _half_df(scale)

    def log_scale(z: FloatArray) -> FloatArray:
        below, above = gammaincinv(half, ndtr(-z)), gammainccinv(half, ndtr(z))
        return np.asarray(0.5 * np.log(half / np.where(z > 0, below, above)))

    return EvenTable.of(log_scale, REACH, CELLS)


def _persistence(sizes: FloatArray, level: FloatArray, shared: float) -> tuple[float, float]:
    """Autocorrelation of the log scale and its variance in one series, from lagged products."""
    m, width = sizes.shape
    products = np.array([float((sizes[k:] * sizes[:-k]).sum()) / m / width for k in range(1, 6)])
    error = float((sizes**2).mean()) / math.sqrt(m) * max(1 / math.sqrt(width), shared)
    if products.sum() < CLEAR * error * math.sqrt(LAGS):
        return 0.0, 0.0
    smoothed = np.maximum(products, 0.0)
    ratio = float(smoothed[1:].sum() / smoothed[:-1].sum())
    persistence = min(max(ratio, 0.0), 0.98)
    powers = persistence ** np.arange(1, LAGS + 1)
    total = float(smoothed.sum() / powers.sum()) if persistence > 0.3 else 0.0
    return persistence, total


def _error_link(level: FloatArray, error_scores: FloatArray, shared: float, heavy: bool) -> float:
    """sd of the shared scale in the errors' size, `shared` being the sd of its part in scores."""
    errors = log_sizes(error_scores[:, None])[:, 0]
    slope, error = _slopes(errors[:, None], level - level.mean())
    if slope[0] < CLEAR * error[0]:
        return 0.0
    covariance = float(((errors - errors.mean()) * (level - level.mean())).mean())
    return _scale_of((covariance / shared) ** 2, heavy)


@lru_cache(maxsize=128)
def squeeze(scale: CommonScale) -> tuple[FloatArray, FloatArray]:
    """Points w >= 0 and T(w), which makes exp(log scale) z standard normal for normal z.

    T(w) = -Phi^-1(E Phi(-w exp(-log scale))), by the trapezoid rule; odd in w.
    """
    nodes = np.linspace(-8, 8, NODES)
    weights = np.exp(-(nodes**2) / 2)
    shared, own = (log_mix(nodes, part, scale.heavy) for part in (scale.shared, scale.own))
    if scale.own and scale.shared:
        logs, weights = np.add.outer(shared, own).ravel(), np.outer(weights, weights).ravel()
    else:
        logs = own if scale.own else shared
    points = np.concatenate([[0.0], np.exp(np.linspace(-5, math.log(9) + logs.max(), 400))])
    beyond = ndtr(-points[:, None] * np.exp(-logs)) @ (weights / weights.sum())
    return read_only(points), read_only(-ndtri(np.maximum(beyond, 1e-300)))


def squeezed(values: FloatArray, curve: tuple[FloatArray, FloatArray]) -> FloatArray:
    """T of values of any shape and sign."""
    return np.asarray(np.copysign(np.interp(np.abs(values), *curve), values))
