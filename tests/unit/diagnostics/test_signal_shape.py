"""Sparse or dense: error rates on known signals, agreement with plain twins, bad input."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np
import pytest

from scantling.diagnostics.residuals import fit_pilot
from scantling.diagnostics.signal_shape import (
    PENALTIES,
    compare,
    factor_predictions,
    ridge_predictions,
    signal_shape,
)
from scantling.errors import InputError

SAMPLES = 20
ROWS, COLUMNS = 300, 100


def standardised(X: np.ndarray) -> np.ndarray:
    """Columns of mean 0 and mean square 1."""
    X = X - X.mean(axis=0)
    return X / np.sqrt((X**2).mean(axis=0))


def sample(kind: str, seed: int, n: int = ROWS, P: int = COLUMNS) -> tuple[np.ndarray, np.ndarray]:
    """Columns and response of one known signal; noise of variance 1."""
    rng = np.random.default_rng(seed)
    X, factor = rng.standard_normal((n, P)), rng.standard_normal(n)
    noise = rng.standard_normal(n)
    if kind == "sparse":
        signal = X[:, :5] @ rng.choice([-1.0, 1.0], 5) / np.sqrt(5)
    elif kind == "sparse heavy":
        X, noise = rng.standard_t(3, (n, P)) / np.sqrt(3), rng.standard_t(3, n) / np.sqrt(3)
        signal = X[:, :5] @ rng.choice([-1.0, 1.0], 5) / np.sqrt(5)
    elif kind == "tiny":
        signal = X @ rng.standard_normal(P) / np.sqrt(P)
    elif kind == "factor":
        X = X + factor[:, None]
        signal = 0.5 * factor
    else:
        signal = np.zeros(n)
    return standardised(X), signal + noise


def answers(kind: str, *, time_ordered: bool) -> Counter[str]:
    """Answers over the samples."""
    found: Counter[str] = Counter()
    for seed in range(SAMPLES):
        X, y = sample(kind, seed)
        fitted = fit_pilot(X, y, time_ordered=time_ordered, seed=1).fitted
        found[
            signal_shape(X, y, sparse_fitted=fitted, time_ordered=time_ordered, seed=1).answer
        ] += 1
    return found


@pytest.mark.parametrize(
    ("kind", "time_ordered", "wanted", "least", "never"),
    [
        ("sparse", True, "sparse", 18, "dense"),
        ("sparse heavy", False, "sparse", 17, "dense"),
        ("tiny", True, "dense", 18, "sparse"),
        ("factor", False, "dense", 11, "sparse"),
        ("noise", True, "no signal", 18, "undecided"),
    ],
)
def test_error_rates(kind: str, time_ordered: bool, wanted: str, least: int, never: str) -> None:
    """20 samples of n = 300, P = 100, fixed seeds.

    At n = 500, 40 samples, the right answer came in 100 % (sparse), 98 % (tiny effects),
    55 to 78 % (factor, the rest undecided, as the pilot's columns stand in for the factor)
    and 98 % (noise).
    """
    found = answers(kind, time_ordered=time_ordered)
    assert found[wanted] >= least, found
    assert found[never] == 0, found


def test_ridge_agrees_with_leave_one_out_written_out() -> None:
    for n, P in ((40, 12), (25, 60)):
        rng = np.random.default_rng(n)
        X, new = rng.standard_normal((n, P)), rng.standard_normal((7, P))
        y = 3 + X[:, :4].sum(axis=1) + rng.standard_normal(n)

        def fit(rows: np.ndarray, target: np.ndarray, penalty: float) -> np.ndarray:
            centred = rows - rows.mean(axis=0)
            gram = centred.T @ centred + penalty * np.eye(rows.shape[1])
            return np.linalg.solve(gram, centred.T @ (target - target.mean()))

        losses = []
        for penalty in PENALTIES * max(n, P):
            # Centring once on all rows is what the closed form does.
            centred, level = X - X.mean(axis=0), y - y.mean()
            gram = centred @ np.linalg.solve(
                centred.T @ centred + penalty * np.eye(P), centred.T
            ) + np.full((n, n), 1 / n)
            losses.append(np.mean(((level - gram @ level) / (1 - np.diag(gram))) ** 2))
        best = PENALTIES[int(np.argmin(losses))] * max(n, P)
        wanted = y.mean() + (new - X.mean(axis=0)) @ fit(X, y, best)
        np.testing.assert_allclose(ridge_predictions(X, y, new), wanted, rtol=1e-7)


@pytest.mark.parametrize("shape", [(60, 15), (40, 90)])
def test_factors_agree_with_the_singular_value_decomposition(shape: tuple[int, int]) -> None:
    rng = np.random.default_rng(3)
    X = rng.standard_normal((shape[0], 2)) @ rng.standard_normal((2, shape[1])) * 2
    X += rng.standard_normal(shape)
    new = rng.standard_normal((5, shape[1]))
    left, values, right = np.linalg.svd(X - X.mean(axis=0), full_matrices=False)
    y = 1 + left[:, :2] @ np.array([9.0, -8.0]) + 0.1 * rng.standard_normal(shape[0])
    n, centred = y.size, y - y.mean()
    criteria = []
    for k in range(1, 9):
        rss = np.sum((centred - left[:, :k] @ (left[:, :k].T @ centred)) ** 2)
        criteria.append(n * np.log(rss / n) + k * np.log(n))
    k = int(np.argmin(criteria)) + 1
    slopes = (left[:, :k].T @ centred) / values[:k]
    wanted = y.mean() + (new - X.mean(axis=0)) @ right[:k].T @ slopes
    got, count = factor_predictions(X, y, new)
    assert count == k >= 2
    np.testing.assert_allclose(got, wanted, rtol=1e-8)


def test_comparison_by_hand_and_its_size_under_dependence() -> None:
    first, second = np.array([2.0, -2.0, 2.0, -2.0]), np.array([1.0, -1.0, 1.0, -2.0])
    got = compare(first, second, 1)
    assert got.gain == pytest.approx(9 / 4)  # 3, 3, 3, 0
    assert got.error == pytest.approx(np.std([3, 3, 3, 0]) / 2 / np.sqrt(3 / 4))
    assert got.clear == 1
    assert compare(second, first, 1).clear == -1
    assert compare(first, first, 1) == compare(second, second, 1)
    # Equal fits whose squares are autocorrelated: clear by chance in 7 % of 4,000; rows
    # taken for independent, in 36 %.
    from scipy.signal import lfilter

    rng = np.random.default_rng(4)
    rates = {1: 0, 55: 0}
    for _ in range(400):
        level = lfilter([1], [1, -0.8], rng.standard_normal((2, 800)))
        for block in rates:
            rates[block] += compare(level[0], level[1], block).clear != 0
    assert rates[55] / 400 < 0.11
    assert rates[1] / 400 > 0.25


def test_one_outlier_does_not_decide() -> None:
    """Squares say the second is better, absolute values that it is not: undecided."""
    rng = np.random.default_rng(5)
    second = rng.standard_normal(300)
    first = 0.9 * second
    first[::3] = 3.0 * np.sign(second[::3])
    assert compare(first, second, 1).clear == 1
    shrunk = np.where(np.arange(300) % 10 == 0, 4.0 * np.sign(second), 0.5 * second)
    assert compare(shrunk, second, 1).gain > 0
    assert compare(shrunk, second, 1).clear == 0


def test_numbers_are_shares_of_the_variance_and_have_no_unit() -> None:
    X, y = sample("sparse", 1)
    fitted = fit_pilot(X, y, time_ordered=False, seed=2).fitted
    got = signal_shape(X, y, sparse_fitted=fitted, time_ordered=False, seed=2)
    assert got.sparse_explained == pytest.approx(1 - np.mean((y - fitted) ** 2) / y.var())
    assert got.difference == pytest.approx(
        got.sparse_explained - max(got.ridge_explained, got.factor_explained)
    )
    assert f"sparse fit explains {100 * got.sparse_explained:.1f} %" in got.reason
    assert f"standard error {100 * got.error:.1f} %" in got.reason
    again = signal_shape(X, 7 + 1e6 * y, sparse_fitted=7 + 1e6 * fitted, time_ordered=False, seed=2)
    assert again.answer == got.answer
    assert again.ridge_explained == pytest.approx(got.ridge_explained, rel=1e-6)
    other = signal_shape(X, y, sparse_fitted=fitted, time_ordered=False, seed=3)
    assert other.ridge_explained != got.ridge_explained


def test_odd_columns_are_no_trouble() -> None:
    """One column; all columns the same; columns that do not vary; a perfect fit."""
    rng = np.random.default_rng(6)
    x, noise = rng.standard_normal(60), rng.standard_normal(60)
    for X in (x[:, None], np.tile(x[:, None], (1, 80)), np.zeros((60, 3))):
        got = signal_shape(X, x + noise, sparse_fitted=0 * x, time_ordered=True, seed=1)
        varies = bool(X.any())
        assert got.answer == ("dense" if varies else "no signal")
        assert got.components == int(varies)
    exact = signal_shape(x[:, None], x, sparse_fitted=x, time_ordered=True, seed=1)
    assert exact.sparse_explained == pytest.approx(1, abs=1e-12)
    assert exact.factor_explained == pytest.approx(1, abs=1e-9)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"y": np.ones(60)}, "y: constant"),
        ({"y": np.arange(40.0)}, "X: 40 rows are needed, as in y; found 60"),
        ({"y": 1e200 * np.arange(60.0)}, "y: a largest size"),
        ({"sparse_fitted": np.zeros(59)}, "sparse_fitted: 60 rows are needed, as in y; found 59"),
        ({"X": np.full((60, 2), np.nan)}, "X: finite values are needed"),
        ({"sparse_fitted": np.full(60, np.inf)}, "sparse_fitted: finite values"),
        ({"seed": -1, "time_ordered": False}, "seed: 0 or more"),
    ],
)
def test_bad_input_is_refused(change: dict[str, Any], message: str) -> None:
    rng = np.random.default_rng(7)
    arguments: dict[str, Any] = {
        "X": rng.standard_normal((60, 2)),
        "y": rng.standard_normal(60),
        "sparse_fitted": np.zeros(60),
        "time_ordered": True,
        "seed": 1,
    } | change
    with pytest.raises(InputError, match=message):
        signal_shape(**arguments)
