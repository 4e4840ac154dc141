"""Extremal index and effective rows: published limits, exact cases, coverage, bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scantling.core.streams import stream
from scantling.diagnostics.extremes import (
    effective_rows,
    effective_rows_reference,
    extreme_clustering,
    intervals_estimator,
    tail_effective_rows,
    tail_effective_rows_reference,
)
from scantling.errors import InputError


def arch(a: float, n: int, samples: int, seed: int) -> np.ndarray:
    """ARCH(1) with unit intercept and normal innovations, shape (samples, n)."""
    rng = np.random.default_rng(seed)
    last = np.zeros(samples)
    out = np.empty((n + 200, samples))
    for t in range(n + 200):
        last = rng.standard_normal(samples) * np.sqrt(1 + a * last**2)
        out[t] = last
    return out[200:].T


def test_intervals_estimator_by_hand() -> None:
    # No time above 2: 2 (1 + 2 + 2)^2 / (3 (1 + 4 + 4)) = 50/27.
    assert intervals_estimator(np.array([1, 2, 2])) == pytest.approx(50 / 27, rel=1e-14)
    # Otherwise: 2 (0 + 0 + 8)^2 / (3 * 8 * 7) = 128/168.
    assert intervals_estimator(np.array([1, 1, 9])) == pytest.approx(128 / 168, rel=1e-14)
    assert intervals_estimator(np.array([], dtype=int)) == 1


@pytest.mark.parametrize(
    ("a", "limit"), [(0.1, 0.997), (0.3, 0.887), (0.5, 0.727), (0.7, 0.579), (0.9, 0.460)]
)
def test_arch_extremal_index(a: float, limit: float) -> None:
    """de Haan et al. (1989), Stochastic Processes and their Applications 32.

    Mean of 20 samples of 20,000 rows at share 0.01; tolerance 0.08 for the distance of that
    threshold to the limit (the mean lies up to 0.08 below it at a = 0.3).
    """
    found = [extreme_clustering(x, share=0.01) for x in arch(a, 20_000, 20, seed=2)]
    assert np.mean([f.index for f in found]) == pytest.approx(limit, abs=0.08)
    # The jackknife's error is of the size of the spread: 20 samples tell it within a third.
    spread = np.std([f.index for f in found], ddof=1)
    assert 0.6 < np.mean([f.error for f in found]) / spread < 2.0


def test_independent_rows_do_not_cluster() -> None:
    """Heavy or thin: the mean index is near 1, and the interval reaches it nearly always."""
    for draw in ("standard_cauchy", "standard_normal"):
        rng = np.random.default_rng(3)
        found = [extreme_clustering(getattr(rng, draw)(size=2000)) for _ in range(60)]
        assert np.mean([f.index for f in found]) > 0.94
        assert np.mean([f.high == 1 for f in found]) >= 0.9
        assert all(f.exceedances == 100 for f in found)


@pytest.mark.parametrize("m", [2, 4, 8])
def test_repeated_values_cluster_by_their_number(m: int) -> None:
    """Each value m times in a row has index 1/m; the 90 % interval holds it in most samples."""
    rng = np.random.default_rng(4)
    found = [extreme_clustering(np.repeat(rng.standard_t(3, 6000 // m), m)) for _ in range(100)]
    assert np.mean([f.index for f in found]) == pytest.approx(1 / m, rel=0.06)
    # 88 to 89 % of 1,000; 0.78 is three binomial errors of 100 below that.
    assert np.mean([f.low <= 1 / m <= f.high for f in found]) >= 0.78
    assert np.mean([f.clusters for f in found]) == pytest.approx(300 / m, rel=0.08)


@given(st.floats(1e-3, 1e3), st.floats(-1e3, 1e3), st.integers(0, 50))
@settings(max_examples=40, deadline=None)
def test_index_has_no_unit(scale: float, shift: float, seed: int) -> None:
    x = np.random.default_rng(seed).standard_t(3, 400)
    first, second = extreme_clustering(x), extreme_clustering(shift - scale * x)
    assert second.index == pytest.approx(first.index, abs=1e-12)
    assert second.threshold == pytest.approx(scale * first.threshold, rel=1e-6)
    assert 0 <= first.low <= first.index <= first.high <= 1
    assert 1 <= first.clusters <= first.exceedances == 20


def test_short_series_keep_ten_exceedances() -> None:
    found = extreme_clustering(np.random.default_rng(5).standard_normal(60))
    assert (found.exceedances, found.share) == (10, pytest.approx(1 / 6))
    assert 0 < found.error <= 0.5


def test_bursts_by_hand() -> None:
    """Five large values after every 95 small ones: 80 times of 1 and 19 of 96.

    2 (19 * 95)^2 / (99 * 19 * 95 * 94); twice 1/5 nearly, because the gaps are regular where
    the estimator expects exponential ones.
    """
    bursts = np.tile(np.r_[np.full(95, 0.1), np.full(5, 10.0)], 20) * np.tile([1, -1], 1000)
    grouped = extreme_clustering(bursts + np.linspace(0, 1e-3, 2000))
    assert grouped.index == pytest.approx(2 * 19 * 95 / (99 * 94), rel=1e-12)
    assert grouped.exceedances == 100
    # Shuffled, the same values come singly.
    shuffled = np.random.default_rng(6).permutation(bursts)
    assert extreme_clustering(shuffled + np.linspace(0, 1e-3, 2000)).index > 0.8


@pytest.mark.parametrize("scale", [1e-300, 1e300])
def test_extreme_sizes_do_not_overflow(scale: float) -> None:
    x = np.random.default_rng(6).uniform(-1, 1, 500)
    assert extreme_clustering(scale * x).index == extreme_clustering(x).index
    assert effective_rows(scale * x) == pytest.approx(effective_rows(x), rel=1e-9)
    assert tail_effective_rows(scale * x) == pytest.approx(tail_effective_rows(x), rel=1e-9)


def test_effective_rows_by_hand() -> None:
    """Against the definition written out; and -1, 1, -1, ... is worth no more than n."""
    x = np.random.default_rng(7).standard_normal(64).cumsum()
    c = x - x.mean()
    variance = np.mean(c**2)
    lags = [np.sum(c[k:] * c[:-k]) / 64 for k in range(1, 5)]  # bandwidth 64^(1/3) = 4
    long_run = variance + 2 * sum((1 - k / 5) * g for k, g in enumerate(lags, start=1))
    assert effective_rows(x) == pytest.approx(64 * variance / long_run, rel=1e-12)
    assert effective_rows(np.tile([-1.0, 1.0], 50)) == 100


@pytest.mark.parametrize("phi", [0.0, 0.5, 0.8])
def test_effective_rows_of_an_autoregression(phi: float) -> None:
    """The Bartlett sum of phi^k at the bandwidth used (exact); tolerance 4 % by simulation."""
    from scipy.signal import lfilter

    n, bandwidth = 20_000, 28
    rng = np.random.default_rng(8)
    got = np.mean(
        [effective_rows(lfilter([1], [1, -phi], rng.standard_normal(n))) for _ in range(10)]
    )
    lags = np.arange(1, bandwidth + 1)
    factor = 1 + 2 * np.sum((1 - lags / (bandwidth + 1)) * phi**lags)
    assert got / n == pytest.approx(1 / factor, rel=0.04)


def test_tail_effective_rows() -> None:
    """About n for independent rows, n/m for rows in near-equal groups of m, never above n."""
    rng = np.random.default_rng(9)
    alone = [tail_effective_rows(rng.standard_t(3, 2000)) / 2000 for _ in range(60)]
    assert max(alone) == 1
    assert np.mean(alone) > 0.88
    groups = []
    for _ in range(60):
        nearly = rng.uniform(0.999, 1.001, 2000)
        groups.append(tail_effective_rows(np.repeat(rng.standard_t(3, 500), 4) * nearly) / 2000)
    assert np.mean(groups) == pytest.approx(0.25, abs=0.04)
    wild = [tail_effective_rows(x) / 2000 for x in arch(0.9, 2000, 30, seed=10)]
    assert np.mean(wild) < 0.8


def test_independent_rows_show_no_loss_in_nineteen_of_twenty() -> None:
    """t(3), n = 300: single samples fall to 0.4 n, and below the reference in 5 % of 200.

    0.095 is three binomial errors above 0.05; a reference at n would be passed by most.
    """
    rng = np.random.default_rng(21)
    below = np.zeros((200, 2))
    share = np.empty(200)
    for k, x in enumerate(rng.standard_t(3, (200, 300))):
        share[k] = tail_effective_rows(x) / 300
        below[k] = (
            effective_rows(x) < effective_rows_reference(x, seed=k),
            share[k] * 300 < tail_effective_rows_reference(x, seed=k),
        )
    assert share.min() < 0.5
    assert np.all(below.mean(axis=0) <= 0.095)
    assert np.mean(share < 1) > 0.25


def test_dependent_rows_show_a_loss() -> None:
    rng = np.random.default_rng(22)
    grouped = np.repeat(rng.standard_t(3, 200), 4) * rng.uniform(0.999, 1.001, 800)
    assert tail_effective_rows(grouped) < tail_effective_rows_reference(grouped, seed=1) < 800
    assert effective_rows(grouped) < effective_rows_reference(grouped, seed=1) < 800


def test_the_reference_is_the_fifth_lowest_of_ninety_nine_orders() -> None:
    """Its orders drawn again: 4 lie below; the order of the series itself does not matter much."""
    x = np.random.default_rng(23).standard_t(3, 200)
    c = x - x.mean()
    orders = stream(5, "effective rows, reordered").permuted(np.tile(c, (99, 1)), axis=1)
    found = effective_rows_reference(x, seed=5)
    lowest = sorted(effective_rows(row) for row in orders)
    assert found == pytest.approx(lowest[4], rel=1e-9)
    again = tail_effective_rows_reference(x, seed=5)
    assert again == tail_effective_rows_reference(x, seed=5) < 200
    assert again == pytest.approx(tail_effective_rows_reference(x[::-1], seed=6), rel=0.25)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        (np.zeros(100), "values: "),
        (np.arange(10.0), "values: at least 30 values"),
        (np.r_[np.arange(99.0), np.nan], "values: finite values"),
        (["a"] * 40, "values: numbers are needed"),
        (np.ones((40, 2)), "values: one dimension"),
    ],
)
def test_bad_values_are_refused(values: np.ndarray, message: str) -> None:
    for function in (extreme_clustering, effective_rows, tail_effective_rows):
        with pytest.raises(InputError, match=message):
            function(values)
    for reference in (effective_rows_reference, tail_effective_rows_reference):
        with pytest.raises(InputError, match=message):
            reference(values, seed=1)


def test_bad_share_and_ties_are_refused() -> None:
    with pytest.raises(InputError, match="share: "):
        extreme_clustering(np.arange(100.0), share=0)
    with pytest.raises(InputError, match="because of ties"):
        extreme_clustering(np.tile([-1.0, 1.0], 50))
    with pytest.raises(InputError, match="so it has no tail"):
        tail_effective_rows(np.tile([-1.0, 0.5, 2.0, 7.0], 50))
