"""Errors whose level persists: the test, the fit, and what an autoregression does to variances."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.tsa.arima_process import ArmaProcess

from scantling.core.record import read_only
from scantling.diagnostics.autoregression import (
    Autoregression,
    find_autoregression,
    fit_autoregression,
    largest_root,
    partial_autocorrelations,
    stationary,
)
from scantling.diagnostics.dependence import sign_ljung_box_permutation


def known(*coefficients: float) -> Autoregression:
    values = np.array(coefficients)
    return Autoregression(coefficients=read_only(values), draws=read_only(values[None].copy()))


def series(coefficients: list[float], rows: int, seed: int, df: float = 5.0) -> np.ndarray:
    rng = np.random.default_rng(seed)
    e = known(*coefficients).errors(rng.standard_t(df, (rows, 1)), rng)[:, 0]
    return np.asarray(e - e.mean())


@pytest.mark.parametrize("coefficients", [[0.5], [0.9], [0.6, 0.2], [0.5, -0.3, 0.2]])
def test_variance_gain_and_long_run_are_those_of_statsmodels(coefficients: list[float]) -> None:
    path = known(*coefficients)
    theirs = ArmaProcess(np.concatenate([[1.0], -np.array(coefficients)]), [1.0])
    covariances = theirs.acovf(2000)
    assert path.gain == pytest.approx(covariances[0], rel=1e-9)
    whole = covariances[0] + 2 * covariances[1:].sum()
    assert path.long_run == pytest.approx(whole / covariances[0], rel=1e-6)
    partial = theirs.pacf(len(coefficients) + 1)[1:]
    assert partial_autocorrelations(path.coefficients)[::-1] == pytest.approx(partial, abs=1e-9)
    assert path.root == pytest.approx(float(np.abs(1 / theirs.arroots).max()), rel=1e-9)


@given(st.lists(st.floats(-0.9, 0.9), min_size=1, max_size=4), st.integers(0, 2**16))
@settings(max_examples=40, deadline=None)
def test_shocks_undo_errors_and_no_root_is_left_outside(raw: list[float], seed: int) -> None:
    coefficients = stationary(np.array(raw))
    assert largest_root(coefficients) <= 0.999 + 1e-9
    path = known(*coefficients)
    rng = np.random.default_rng(seed)
    shocks = rng.standard_normal((60, 3))
    errors = path.errors(shocks, rng)
    lags = len(raw)
    size = max(1.0, float(np.abs(errors).max()))
    assert path.shocks(errors)[lags:] == pytest.approx(shocks[lags:], abs=1e-9 * size)


def test_the_variance_of_a_score_is_what_draws_show() -> None:
    rng = np.random.default_rng(1)
    x = known(0.8).errors(rng.standard_normal((400, 2)), rng)
    path = known(0.7)
    drawn = x.T @ path.errors(rng.standard_normal((400, 20_000)), rng)
    formula = (path.seen_by_shocks(x) ** 2).sum(axis=0)
    # 20,000 draws: a standard error of 1 % of the variance; rows before the first add a little.
    assert drawn.var(axis=1) == pytest.approx(formula, rel=0.04)
    # As the long-run factor (1 + ab)/(1 - ab) of two first-order series says, .8 and .7 by 3.5.
    assert (drawn.var(axis=1) / (x**2).sum(axis=0) / path.gain).mean() == pytest.approx(3.5, abs=1)


def test_order_and_coefficients_are_found() -> None:
    found = [fit_autoregression(series([0.5, 0.3], 2000, seed), seed=1) for seed in range(20)]
    orders = [0 if path is None else path.coefficients.size for path in found]
    # Schwarz's criterion takes too long an order in under one sample of ten at 2,000 rows.
    assert sum(order == 2 for order in orders) >= 17
    twos = np.array([p.coefficients for p in found if p is not None and p.coefficients.size == 2])
    assert twos.mean(axis=0) == pytest.approx([0.5, 0.3], abs=0.02)
    spread = next(p for p in found if p is not None and p.coefficients.size == 2)
    # sd of each, sqrt((1 - .3^2)/n).
    assert spread.draws.std(axis=0) == pytest.approx([0.0213, 0.0213], rel=0.35)


def test_signs_keep_their_size_under_any_volatility_and_tail() -> None:
    """Exact by permutation: 5 % of 400 samples, 2.3 to 8.3 % in 99 of 100 runs."""
    rng = np.random.default_rng(7)
    rejected = {"t(1.5)": 0, "volatility": 0}
    for number in range(400):
        heavy = rng.standard_t(1.5, 120)
        size = np.exp(np.convolve(rng.standard_normal(140), np.ones(20) / 3, "valid"))[:120]
        for name, u in (("t(1.5)", heavy), ("volatility", size * rng.standard_normal(120))):
            p = sign_ljung_box_permutation(u, seed=number, draws=99).p_value
            rejected[name] += p <= 0.05
    assert 0.023 <= rejected["t(1.5)"] / 400 <= 0.083
    assert 0.023 <= rejected["volatility"] / 400 <= 0.083


def test_signs_reject_where_levels_persist() -> None:
    found = [find_autoregression(series([0.5], 200, seed, df=2.5), seed=1) for seed in range(30)]
    assert sum(each.autoregression is not None for each in found) >= 27
    quiet = [find_autoregression(series([0.0], 200, seed, df=2.5), seed=1) for seed in range(40)]
    assert sum(each.autoregression is not None for each in quiet) <= 3


@pytest.mark.parametrize(
    "values",
    [
        np.tile([1.0, -1.0], 50),
        np.concatenate([np.zeros(99), [1.0]]) - 0.01,
        np.arange(100.0) - 49.5,
        np.where(np.arange(100) < 50, 1.0, -1.0),
    ],
)
def test_odd_series_get_an_answer(values: np.ndarray) -> None:
    found = find_autoregression(values, seed=1)
    assert 0 < found.test.p_value <= 1
    path = found.autoregression
    if path is not None:
        assert np.isfinite(path.draws).all()
        assert path.root < 1
        assert np.isfinite(path.gain)
