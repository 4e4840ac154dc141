"""Interval of gamma = 1/index by the weighted Hill regression: error, bias range, ends.

The estimator's bias hardly depends on n but strongly on the law: from about -0.04 for the
heaviest Student laws over 0 for Pareto to +0.08 for nearly normal ones. Over the laws of
interest it is a band that follows the estimate itself, much narrower than its largest value.
The constants below are read off the simulations of tests/validation/tail_intervals.py.
"""

from __future__ import annotations

import numpy as np
from scipy.special import ndtr

from scantling.core.record import FloatArray

BIAS_HIGH = (
    (0.0, 0.10, 0.145, 0.165, 0.19, 0.22, 0.25, 0.285, 0.32, 0.37),
    (0.0, 0.10, 0.074, 0.060, 0.058, 0.046, 0.036, 0.021, 0.006, 0.001),
)
"""Estimate, and the largest bias of laws whose estimate lies there: Student t and GARCH. Below
0.10 the whole estimate may be bias: no finite index is excluded."""
BIAS_LOW = (
    (0.0, 0.26, 0.285, 0.32, 0.37, 0.42, 0.50),
    (-0.004, -0.004, -0.006, -0.017, -0.030, -0.038, -0.042),
)
"""The same for the smallest bias: Pareto, then Student t with few degrees of freedom."""
SLOW_MIXING = 0.03
"""Further downward bias at 250 rows under volatility clustering; falls like n^-1/4."""
SLOW_SHARE = ((0.0, 0.12, 0.16, 0.19), (0.3, 0.35, 0.9, 1.1))
"""Estimate, and the share of SLOW_MIXING that applies there: less where tails look thin."""
LEAST_RATIO = 0.85
"""Smallest accepted ratio of the block to the independent standard error."""
MOST_EXTRA = 1.5
"""Block errors see only part of the dependence that long-lived volatility brings: they are
multiplied by the ratio once more, up to this. Calibrated so that coverage holds for GARCH with
indices 3.8 and 5.8."""
MISSES = 0.74
"""Share of the nominal misses allowed before the steps above; calibrated with them."""


ASYMMETRY_BIAS = 0.3
"""Bias that pooling unequal halves adds, per squared log ratio of their outer deciles: between
0.24 and 0.38 over two-piece Student laws with 3, 4 and 6 degrees of freedom (simulated)."""
MOST_ASYMMETRY_BIAS = 0.10
"""Where one half is far larger, as in a squared series, the other no longer matters."""
ASYMMETRY_NOISE = 13.0
"""Twice n times the mean squared log ratio of symmetric samples, taken off before."""


def asymmetry_bias(values: FloatArray) -> FloatArray:
    """Upward bias that pooling both tails of skewed series may add, shape (P,).

    `values` is (n, P). The outer deciles' distances from the median are compared; series whose
    deciles coincide with the median have none.
    """
    low, middle, high = np.quantile(values, [0.1, 0.5, 0.9], axis=0)
    above, below = high - middle, middle - low
    fine = (above > 0) & (below > 0)
    ratio = np.log(np.where(fine, above, 1.0) / np.where(fine, below, 1.0))
    excess = np.maximum(ratio**2 - ASYMMETRY_NOISE / values.shape[0], 0.0)
    return np.asarray(np.minimum(ASYMMETRY_BIAS * excess, MOST_ASYMMETRY_BIAS))


def folded_quantile(ratio: FloatArray | float, level: float) -> FloatArray:
    """The `level` quantile of |N(ratio, 1)|: critical value when bias/s.e. is at most `ratio`.

    Armstrong et al. (2018), Econometrica 86. Ratio 0 and level 0.90 give 1.645.
    """
    ratio = np.asarray(ratio, dtype=np.float64)
    low, high = np.zeros_like(ratio), ratio + 9.0
    for _ in range(60):
        middle = (low + high) / 2
        short = ndtr(middle - ratio) - ndtr(-middle - ratio) < level
        low, high = np.where(short, middle, low), np.where(short, high, middle)
    return np.asarray(high)


def dependent_error(
    block_error: FloatArray, independent_error: FloatArray, n: int, block: int
) -> FloatArray:
    """Standard error of gamma for the interval.

    The block error times its ratio to the independent one, that factor being at most 1.5 and the
    ratio at least 0.85. The block error is first freed of what centring takes,
    sqrt(1 - block/n).
    """
    freed = block_error / np.sqrt(1 - min(block, n - 1) / n) if block > 1 else block_error
    ratio = np.maximum(freed / np.maximum(independent_error, np.finfo(float).tiny), LEAST_RATIO)
    return np.asarray(independent_error * ratio * np.minimum(ratio, MOST_EXTRA))


def gamma_interval(
    gamma: FloatArray,
    error: FloatArray,
    n: int,
    level: float,
    *,
    skew_bias: FloatArray | float = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Ends of the interval for gamma.

    The bias lies between BIAS_LOW and BIAS_HIGH at the estimate; sampling error adds the critical
    value that covers the worse end. Its half is taken on the log scale, because the error grows
    with gamma. The interval never gets narrower than the range of biases, so that it holds the
    estimate at every level.

    Parameters
    ----------
    gamma, error : array, shape (P,)
        Estimates and their `dependent_error`.
    n : int
        Rows behind them.
    level : float
        Nominal coverage.
    skew_bias : float or array, shape (P,)
        `asymmetry_bias` of the series, where both tails are pooled.
    """
    high_bias = np.interp(gamma, *BIAS_HIGH) + skew_bias
    slow = SLOW_MIXING * np.interp(gamma, *SLOW_SHARE) * (250 / n) ** 0.25
    low_bias = np.interp(gamma, *BIAS_LOW) - slow
    half_range = (high_bias - low_bias) / 2 / np.maximum(error, 1e-12)
    critical = folded_quantile(half_range, 1 - MISSES * (1 - level)) - half_range
    step = np.maximum(critical, 0.0) * error
    size = np.maximum(gamma, 0.05)
    relative = np.minimum(step / size, 1.2)
    lower = gamma + (size * np.expm1(-relative) - step) / 2
    upper = gamma + (size * np.expm1(relative) + step) / 2
    return np.asarray(lower - high_bias), np.asarray(upper - low_bias)
