"""The interval of gamma: folded quantile, standard error under dependence, ends."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import foldnorm, norm

from scantling.diagnostics import tail_interval
from scantling.diagnostics.tail_index import index_ends, magnitudes, tail_counts, tail_index
from scantling.diagnostics.tail_interval import (
    BIAS_HIGH,
    BIAS_LOW,
    LEAST_RATIO,
    MISSES,
    MOST_EXTRA,
    dependent_error,
    folded_quantile,
    gamma_interval,
)
from scantling.diagnostics.tail_kernel import tail_estimates

GAMMAS = st.floats(-0.8, 1.5)
ERRORS = st.floats(1e-9, 0.6)
ROWS = st.sampled_from([30, 100, 250, 1000, 50_000])
LEVELS = st.floats(0.01, 0.999)


def interval(gamma: float, error: float, n: int, level: float) -> tuple[float, float]:
    low, high = gamma_interval(np.array([gamma]), np.array([error]), n, level)
    return float(low[0]), float(high[0])


# The folded normal quantile.


@pytest.mark.parametrize("level", [0.2, 0.5, 0.9, 0.99])
def test_folded_quantile_is_that_of_the_folded_normal(level: float) -> None:
    """scipy.stats.foldnorm; 1e-8."""
    ratios = np.array([0.0, 0.1, 0.3, 1.0, 2.5, 5.0, 12.0])
    assert folded_quantile(ratios, level) == pytest.approx(foldnorm.ppf(level, ratios), abs=1e-8)
    for ratio in ratios:
        point = float(folded_quantile(float(ratio), level))
        assert norm.cdf(point - ratio) - norm.cdf(-point - ratio) == pytest.approx(level, abs=1e-9)


def test_folded_quantile_at_its_known_points() -> None:
    """Armstrong et al. (2018), Econometrica 86: 1.645 without bias, 2.284 at bias = error."""
    assert folded_quantile(0.0, 0.90) == pytest.approx(1.6448536, abs=1e-6)
    assert folded_quantile(1.0, 0.90) == pytest.approx(2.284, abs=1e-3)


def test_with_much_bias_only_one_side_can_be_missed() -> None:
    """Then the quantile is ratio + the one-sided normal point; at 0 it is the two-sided one."""
    for ratio in (20.0, 1e4):
        assert folded_quantile(ratio, 0.90) - ratio == pytest.approx(norm.ppf(0.90), abs=1e-6)


# The standard error.


def test_under_independence_the_error_is_the_independent_one() -> None:
    errors = np.array([0.01, 0.05, 0.2])
    assert dependent_error(errors, errors, 500, 1) == pytest.approx(errors)


def test_the_error_by_hand() -> None:
    """Centring takes 1 - block/n of the block variance: n = 100, block 36 leaves 0.8."""
    independent = np.full(5, 0.05)
    ratios = np.array([0.5, LEAST_RATIO, 1.0, 1.2, 2.0])
    found = dependent_error(0.8 * ratios * independent, independent, 100, 36)
    least = LEAST_RATIO**2
    expected = 0.05 * np.array([least, least, 1.0, 1.44, 2.0 * MOST_EXTRA])
    assert found == pytest.approx(expected)


def test_series_without_spread_have_no_error() -> None:
    zero = np.zeros(1)
    assert dependent_error(zero, zero, 100, 16)[0] == pytest.approx(0, abs=1e-12)
    low, high = gamma_interval(np.array([0.3]), zero, 100, 0.90)
    assert low < 0.3 < high


@settings(max_examples=60, deadline=None)
@given(block=st.floats(0.001, 0.5), more=st.floats(1.0, 3.0), independent=st.floats(0.001, 0.5))
def test_more_dependence_means_a_larger_error(
    block: float, more: float, independent: float
) -> None:
    pair = dependent_error(np.array([block, block * more]), np.full(2, independent), 250, 28)
    assert pair[0] <= pair[1] * (1 + 1e-12)
    assert pair[0] >= LEAST_RATIO**2 * independent * (1 - 1e-12)


# The ends.


def test_the_ends_by_hand() -> None:
    """gamma .30 at 250 rows: the interpolated biases, half the step plain and half on logs."""
    gamma, error = 0.30, 0.05
    high, low = dict(zip(*BIAS_HIGH, strict=True)), dict(zip(*BIAS_LOW, strict=True))
    way = (0.30 - 0.285) / (0.32 - 0.285)  # between the two points of either table
    high_bias = (1 - way) * high[0.285] + way * high[0.32]
    low_bias = (1 - way) * low[0.285] + way * low[0.32] - 0.03 * 1.1
    half = (high_bias - low_bias) / 2
    point = foldnorm.ppf(1 - MISSES * 0.10, half / error)
    step = (point - half / error) * error
    lower, upper = interval(gamma, error, 250, 0.90)
    assert lower == pytest.approx(
        (gamma - step + gamma * math.exp(-step / gamma)) / 2 - high_bias, abs=1e-9
    )
    assert upper == pytest.approx(
        (gamma + step + gamma * math.exp(step / gamma)) / 2 - low_bias, abs=1e-9
    )


@pytest.mark.parametrize("gamma", [0.02, 0.17, 0.30, 0.45])
def test_without_sampling_error_the_range_of_biases_is_left(gamma: float) -> None:
    low, high = interval(gamma, 1e-12, 250, 0.90)
    assert gamma - low == pytest.approx(np.interp(gamma, *BIAS_HIGH), abs=1e-9)
    slow = 0.03 * np.interp(gamma, *tail_interval.SLOW_SHARE)
    assert high - gamma == pytest.approx(slow - np.interp(gamma, *BIAS_LOW), abs=1e-9)


def test_below_a_tenth_no_finite_index_is_excluded() -> None:
    for gamma in np.linspace(-0.5, 0.10, 25):
        assert interval(gamma, 0.001, 10**6, 0.90)[0] <= 0
    assert interval(0.15, 0.001, 10**6, 0.90)[0] > 0


@settings(max_examples=200, deadline=None)
@given(gamma=GAMMAS, error=ERRORS, n=ROWS, level=LEVELS)
def test_ends_are_ordered_and_hold_the_estimate(
    gamma: float, error: float, n: int, level: float
) -> None:
    low, high = interval(gamma, error, n, level)
    assert low <= gamma < high


@settings(max_examples=100, deadline=None)
@given(gamma=GAMMAS, error=ERRORS, n=ROWS, level=st.floats(0.4, 0.98), more=st.floats(0.01, 1.0))
def test_level_and_error_widen_it_and_fewer_rows_raise_the_upper_end(
    gamma: float, error: float, n: int, level: float, more: float
) -> None:
    low, high = interval(gamma, error, n, level)
    higher = interval(gamma, error, n, level + more * (0.999 - level))
    noisier = interval(gamma, error * (1 + more), n, level)
    assert higher[0] < low and high < higher[1]
    assert noisier[0] <= low and high <= noisier[1]
    assert interval(gamma, error, n // 2, level)[1] > high  # more downward bias


def test_the_level_counts_with_the_calibrated_misses() -> None:
    """Far out, one side only: the step is the normal point of 1 - MISSES (1 - level)."""
    gamma, error = 0.30, 1e-4
    low, _ = interval(gamma, error, 250, 0.90)
    step = gamma - np.interp(gamma, *BIAS_HIGH) - low
    assert step / error == pytest.approx(norm.ppf(1 - MISSES * 0.10), rel=1e-3)


def test_bias_ranges_are_ranges() -> None:
    grid = np.linspace(-0.2, 1.2, 500)
    high, low = np.interp(grid, *BIAS_HIGH), np.interp(grid, *BIAS_LOW)
    assert (high >= 0).all()
    assert (low < 0).all()
    for points, _ in (BIAS_HIGH, BIAS_LOW):
        assert (np.diff(points) > 0).all()
    assert tail_interval.SLOW_MIXING > 0


# Through the whole.


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), factor=st.sampled_from([-3.0, 1e-200, 0.01, 1e250]))
def test_intervals_are_free_of_scale(seed: int, factor: float) -> None:
    x = np.random.default_rng(seed).standard_t(3, 120)
    one, other = tail_index(x), tail_index(factor * x)
    assert (other.low, other.high) == pytest.approx((one.low, one.high), rel=1e-6)


def test_intervals_shrink_with_the_sample() -> None:
    """Mean width in gamma over 20 series of t(3): more rows, less of it."""
    widths = []
    for n in (100, 400, 1600, 6400):
        drawn = np.random.default_rng(2).standard_t(3, (20, n))
        found = [tail_index(x) for x in drawn]
        widths.append(np.mean([1 / one.low - 1 / one.high for one in found]))
    ratios = np.divide(widths[1:], widths[:-1])
    assert (ratios < 0.8).all()
    assert (ratios > 0.4).all()  # but not below 1/2 by much: bias does not average out


def test_ends_of_the_index_are_reciprocals() -> None:
    assert index_ends(0.2, 0.5) == (2.0, 5.0)
    assert index_ends(0.0, 0.5) == (2.0, math.inf)
    assert index_ends(-0.1, 0.05) == (20.0, math.inf)
    assert index_ends(-0.3, -0.1) == (math.inf, math.inf)


def two_piece(df: float, ratio: float, size: tuple[int, int], seed: int) -> np.ndarray:
    """Student t with halves scaled by `ratio` and 1/`ratio`."""
    rng = np.random.default_rng(seed)
    x = np.abs(rng.standard_t(df, size))
    right = rng.random(size) < ratio**2 / (1 + ratio**2)
    return np.where(right, ratio * x, -x / ratio)


def test_asymmetry_adds_no_bias_to_symmetric_series_and_a_bounded_one_to_skewed() -> None:
    """Symmetric t(3), n = 1000: under 0.003 on average. Two-piece t(4) with ratio 1.5: near the
    bias simulated for it, 0.066 over the symmetric law's. A squared series: the largest."""
    plain = tail_interval.asymmetry_bias(two_piece(3, 1.0, (1000, 200), 1))
    assert plain.mean() < 0.003
    skewed = tail_interval.asymmetry_bias(two_piece(4, 1.5, (1000, 200), 2))
    assert skewed.mean() == pytest.approx(0.066, abs=0.015)
    squared = tail_interval.asymmetry_bias(two_piece(4, 1.0, (1000, 5), 3) ** 2)
    assert np.allclose(squared, tail_interval.MOST_ASYMMETRY_BIAS)
    assert tail_interval.asymmetry_bias(np.r_[np.zeros(95), np.arange(5.0)][:, None]) == 0


def test_the_interval_covers_two_piece_laws_only_with_its_allowance() -> None:
    """t(4), ratio 1.5, n = 1000: 0.25 is covered in at least 80 % of 300 samples (88 % in the
    study); without the allowance in under half."""
    x = two_piece(4, 1.5, (1000, 300), 4)
    share = []
    for skew in (tail_interval.asymmetry_bias(x), 0.0):
        found = tail_estimates(magnitudes(x, "both"), tail_counts(1000), block=64, skew_bias=skew)
        share.append(((found.gamma_low <= 0.25) & (found.gamma_high >= 0.25)).mean())
    assert share[0] >= 0.80
    assert share[1] < 0.5
