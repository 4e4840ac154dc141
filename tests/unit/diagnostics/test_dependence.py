"""Serial dependence: plain twins, size, power, permutations, bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2

from scantling.core.streams import stream
from scantling.diagnostics import dependence
from scantling.errors import InputError

ALL = (
    dependence.ljung_box,
    dependence.robust_ljung_box,
    dependence.arch_lm,
    dependence.mcleod_li,
)


def box(series: np.ndarray, lags: int) -> float:
    """Ljung-Box, line by line."""
    centred = series - series.mean()
    n, total = series.size, 0.0
    for lag in range(1, lags + 1):
        r = sum(centred[t] * centred[t - lag] for t in range(lag, n)) / np.sum(centred**2)
        total += r**2 / (n - lag)
    return n * (n + 2) * total


def garch(rng: np.random.Generator, shocks: np.ndarray, alpha: float, beta: float) -> np.ndarray:
    """GARCH(1,1) with unit variance where shocks have it; the first 200 values are dropped."""
    shocks = np.concatenate([rng.permutation(shocks)[:200], shocks])
    variance, series = 1.0, np.empty(shocks.size)
    for t, shock in enumerate(shocks):
        series[t] = np.sqrt(variance) * shock
        variance = 1 - alpha - beta + alpha * series[t] ** 2 + beta * variance
    return series[200:]


def test_statistics_agree_with_their_plain_twins() -> None:
    u = np.random.default_rng(1).standard_t(4, 90) + 3
    centred = u - u.mean()
    assert dependence.ljung_box(u, 4).statistic == pytest.approx(box(u, 4), rel=1e-10)
    assert dependence.mcleod_li(u, 4).statistic == pytest.approx(box(centred**2, 4), rel=1e-10)
    absolute = dependence.absolute_ljung_box_permutation(u, seed=1, lags=4, draws=9)
    assert absolute.statistic == pytest.approx(box(np.abs(u - np.median(u)), 4), rel=1e-10)
    squares = centred**2
    design = np.column_stack([np.ones(86)] + [squares[4 - lag : 90 - lag] for lag in range(1, 5)])
    rest = squares[4:] - design @ np.linalg.lstsq(design, squares[4:], rcond=None)[0]
    share = 1 - rest @ rest / np.sum((squares[4:] - squares[4:].mean()) ** 2)
    assert dependence.arch_lm(u, 4).statistic == pytest.approx(86 * share, rel=1e-9)


def test_robust_ljung_box_by_hand() -> None:
    """u = 1, -1, 2, -2, 3, -3, 0, 0: lag-1 products -1, -2, -4, -6, -9, 0, 0: 22^2/138."""
    result = dependence.robust_ljung_box([1.0, -1.0, 2.0, -2.0, 3.0, -3.0, 0.0, 0.0], 1)
    assert result.statistic == pytest.approx(484 / 138, rel=1e-12)
    assert result.p_value == pytest.approx(chi2.sf(484 / 138, 1), rel=1e-12)


def test_permutation_p_value_agrees_with_its_plain_twin() -> None:
    u = np.random.default_rng(2).standard_t(3, 40)
    size = np.abs(u - np.median(u))
    rng = stream(9, "absolute Ljung-Box permutation")
    draws = np.concatenate(list(dependence.permuted(size, 49, rng)))
    exceeding = sum(box(draw, 3) >= box(size, 3) * (1 - 1e-9) for draw in draws)
    result = dependence.absolute_ljung_box_permutation(u, seed=9, lags=3, draws=49)
    assert result.p_value == (1 + exceeding) / 50


def test_permutation_p_value_does_not_depend_on_the_chunk(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    u = np.random.default_rng(3).standard_t(3, 100)
    whole = dependence.absolute_ljung_box_permutation(u, seed=2, draws=199)
    monkeypatch.setattr(dependence, "CHUNK", 700)
    assert dependence.absolute_ljung_box_permutation(u, seed=2, draws=199) == whole


@settings(max_examples=30, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    scale=st.sampled_from([1e-160, 1e-4, 30.0, 1e160]),
    lags=st.integers(1, 10),
)
def test_tests_do_not_depend_on_units(seed: int, scale: float, lags: int) -> None:
    u = np.random.default_rng(seed).standard_t(2.5, 60)
    for test in ALL:
        assert test(-scale * u, lags).statistic == pytest.approx(test(u, lags).statistic, rel=1e-6)
        assert 0 <= test(u, lags).p_value <= 1


def test_what_each_test_needs_is_recorded() -> None:
    u = np.random.default_rng(4).standard_normal(50)
    assert [test(u).needs_moment for test in ALL] == [2, 4, 4, 4]
    assert dependence.absolute_ljung_box_permutation(u, seed=1, draws=9).needs_moment == 2
    assert {test(u).method for test in ALL} == {"asymptotic"}


def test_centring_is_left_out_on_request() -> None:
    u = np.random.default_rng(5).standard_normal(200) + 0.5
    for test in (dependence.arch_lm, dependence.mcleod_li):
        assert test(u).statistic == pytest.approx(test(u - u.mean(), centre=False).statistic)
        assert test(u, centre=False).statistic != pytest.approx(test(u).statistic, rel=1e-3)


def test_errors_of_one_size_are_no_evidence() -> None:
    signs = np.resize([1.0, -1.0], 40)
    for result in (
        dependence.arch_lm(signs),
        dependence.mcleod_li(signs),
        dependence.absolute_ljung_box_permutation(signs, seed=1),
    ):
        assert (result.statistic, result.p_value) == (0.0, 1.0)


def test_size_of_the_permutation_test_under_t_2_5() -> None:
    """Nominal 5 %, exact under exchangeability; tolerance 3 standard errors of 1000."""
    rng = np.random.default_rng(6)
    rejected = sum(
        dependence.absolute_ljung_box_permutation(
            rng.standard_t(2.5, 250), seed=replicate, draws=99
        ).p_value
        <= 0.05
        for replicate in range(1000)
    )
    assert rejected / 1000 == pytest.approx(0.05, abs=0.021)


def test_power_under_garch_with_t_2_5_shocks_exceeds_that_of_the_squares() -> None:
    """GARCH(.15,.75), n = 1000: .96 against .62, simulated (250); 4 standard errors."""
    rng = np.random.default_rng(7)
    replications = 150
    absolute = squares = 0
    for replicate in range(replications):
        u = garch(rng, rng.standard_t(2.5, 1000) / np.sqrt(5), 0.15, 0.75)
        result = dependence.absolute_ljung_box_permutation(u, seed=replicate, draws=99)
        absolute += result.p_value <= 0.05
        squares += dependence.mcleod_li(u).p_value <= 0.05
    assert absolute / replications == pytest.approx(0.96, abs=0.08)
    assert squares / replications == pytest.approx(0.62, abs=0.18)


def test_robust_ljung_box_keeps_its_size_under_garch_where_the_plain_one_does_not() -> None:
    rng = np.random.default_rng(8)
    replications = 300
    plain = robust = 0
    for _ in range(replications):
        u = garch(rng, rng.standard_normal(500), 0.25, 0.7)
        plain += dependence.ljung_box(u).p_value <= 0.05
        robust += dependence.robust_ljung_box(u).p_value <= 0.05
    assert plain / replications > 0.2
    assert robust / replications < 0.05 + 4 * np.sqrt(0.05 * 0.95 / replications)


def test_level_tests_find_autocorrelation() -> None:
    rng = np.random.default_rng(9)
    shocks = rng.standard_t(4, 401)
    u = shocks[1:] + 0.4 * shocks[:-1]
    assert dependence.ljung_box(u).p_value < 1e-6
    assert dependence.robust_ljung_box(u).p_value < 1e-3


# Permutations.


@settings(max_examples=40, deadline=None)
@given(n=st.integers(4, 60), share=st.floats(0.01, 1.0), seed=st.integers(0, 10**6))
def test_blocks_are_moved_whole_around_the_circle(n: int, share: float, seed: int) -> None:
    block = max(1, int(share * (n // 2)))
    rng = np.random.default_rng(seed)
    for row in np.concatenate(list(dependence.permuted(np.arange(n, dtype=float), 5, rng, block))):
        assert sorted(row) == list(range(n))
        # `row` lists which value lies against each place: seen around the
        # circle, neighbours stay neighbours except at the ends of blocks.
        breaks = np.count_nonzero(np.diff(np.append(row, row[0])) % n != 1)
        assert breaks <= -(-n // block)


def test_every_order_of_single_rows_is_drawn_alike() -> None:
    """24 orders of 4 values, 24 000 draws: chi2 with 23 degrees of freedom below its 99.9 %."""
    for block in (None, 1):
        rng = np.random.default_rng(10)
        rows = np.concatenate(list(dependence.permuted(np.arange(4.0), 24_000, rng, block)))
        _, counts = np.unique(rows @ [1, 10, 100, 1000], return_counts=True)
        assert counts.size == 24
        assert np.sum((counts - 1000) ** 2) / 1000 < chi2.ppf(0.999, 23)


# Bad input.


@pytest.mark.parametrize("test", ALL)
def test_unusable_input_is_named(test) -> None:  # type: ignore[no-untyped-def]
    u = np.random.default_rng(11).standard_normal(40)
    with pytest.raises(InputError, match=r"^u: values that vary"):
        test(np.full(40, 2.0))
    with pytest.raises(InputError, match=r"^u: finite values are needed; value 1 is inf"):
        test(np.append(np.inf, u))
    with pytest.raises(InputError, match=r"^u: at least 8"):
        test(u[:7])
    for lags in (0, 11):
        with pytest.raises(InputError, match=rf"^lags: 1 to 10 are needed; found {lags}"):
            test(u, lags)


def test_permutation_needs_a_draw() -> None:
    with pytest.raises(InputError, match=r"^draws: at least 1"):
        dependence.absolute_ljung_box_permutation(np.arange(30.0), seed=1, draws=0)
