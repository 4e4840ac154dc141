"""Loadings, the adaptive second stage, and refits on selected columns."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtri
from sklearn.datasets import load_diabetes

from scantling.errors import InputError
from scantling.simulation import loadings
from scantling.simulation.lasso import solve_batch
from scantling.simulation.loadings import (
    adaptive_loadings,
    iterated_loadings,
    refit_batch,
    score_loadings,
)


def test_score_loadings_by_hand():
    X = np.array([[1.0, 2.0], [3.0, -1.0]])
    errors = np.array([[2.0], [-1.0]])
    # column 1: (1*4 + 9*1)/2, column 2: (4*4 + 1*1)/2
    np.testing.assert_allclose(score_loadings(X, errors)[:, 0], np.sqrt([6.5, 8.5]), rtol=1e-15)


def test_adaptive_loadings_by_hand():
    initial = np.array([[0.0, 4.0], [0.5, -0.01], [-2.0, 1.0]])
    found = adaptive_loadings(initial, [0.5, 1.0], floor=0.1)
    np.testing.assert_allclose(found, [[10.0, 0.25], [1.0, 10.0], [0.25, 1.0]], rtol=1e-15)
    with pytest.raises(InputError, match=r"^reference, floor: positive"):
        adaptive_loadings(initial, 0.0)


def test_adaptive_second_stage_takes_less_off_large_coefficients():
    rng = np.random.default_rng(1)
    X = rng.standard_normal((300, 80))
    Y = X[:, :4] @ np.full((4, 1), 0.8) + rng.standard_normal((300, 40))
    penalty = 1.1 * ndtri(1 - 0.05 / 160) / np.sqrt(300)
    first, _ = solve_batch(X, Y, penalty, tol=1e-9)
    second, _ = solve_batch(X, Y, penalty * adaptive_loadings(first, penalty), tol=1e-9)
    assert first[:4].mean() < 0.62
    assert second[:4].mean() == pytest.approx(0.8, abs=0.08)
    assert (second[4:] != 0).sum() <= (first[4:] != 0).sum()


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    n=st.integers(2, 40),
    p=st.integers(1, 30),
    replicates=st.integers(1, 12),
    share=st.floats(0.0, 1.0),
    kind=st.sampled_from(["normal", "duplicated", "scaled", "discrete"]),
    seed=st.integers(0, 2**32 - 1),
)
def test_refits_are_least_squares(n, p, replicates, share, kind, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    if kind == "duplicated":
        X = X[:, rng.integers(0, p, p)]
    if kind == "scaled":
        X = X * 10.0 ** rng.uniform(-5, 5, p)
    if kind == "discrete":
        X = rng.integers(-1, 2, (n, p)) + 0.0
    Y = rng.standard_t(3, (n, replicates))
    selected = rng.random((p, replicates)) < share
    B = refit_batch(X, Y, selected)
    assert not B[~selected].any()
    size = np.maximum(np.sqrt((X**2).mean(axis=0)), 1e-300)
    for r in range(replicates):
        on = selected[:, r]
        Z = X[:, on] / size[on]
        best = Z @ np.linalg.lstsq(Z, Y[:, r], rcond=1e-10)[0] if on.any() else 0.0
        np.testing.assert_allclose(X @ B[:, r], np.broadcast_to(best, n), atol=1e-8)


def test_refits_do_not_depend_on_how_they_are_stacked(monkeypatch):
    rng = np.random.default_rng(2)
    X, Y = rng.standard_normal((50, 20)), rng.standard_normal((50, 30))
    selected = rng.random((20, 30)) < 0.3
    usual = refit_batch(X, Y, selected)
    monkeypatch.setattr(loadings, "STACK_CELLS", 30)
    np.testing.assert_allclose(refit_batch(X, Y, selected), usual, atol=1e-13)


def test_iterated_loadings_on_the_diabetes_data():
    # CHECKS 67: columns standardised, c 1.1, g .05; exact set, found with scikit-learn.
    # Belloni et al. (2012), Econometrica 80, 2369-2429. lambda = 2 n * level.
    table = load_diabetes()
    X = (table.data - table.data.mean(axis=0)) / table.data.std(axis=0)
    y = table.target - table.target.mean()
    n, p = X.shape
    level = 1.1 * ndtri(1 - 0.05 / (2 * p)) / np.sqrt(n)
    assert 2 * n * level == pytest.approx(129.8319, abs=1e-4)
    Y = np.column_stack([y, 3.0 * y, -y])
    B, psi = iterated_loadings(X, Y, level)
    for r in range(3):
        assert {table.feature_names[j] for j in np.flatnonzero(B[:, r])} == {
            "bmi", "bp", "s3", "s5",
        }  # fmt: skip
    on = np.flatnonzero(B[:, 0])
    residual = y - X[:, on] @ np.linalg.lstsq(X[:, on], y, rcond=None)[0]
    own = np.sqrt(((X * residual[:, None]) ** 2).mean(axis=0))
    np.testing.assert_allclose(psi[:, 0], own, rtol=2e-4)
    np.testing.assert_allclose(psi[:, 1], 3.0 * psi[:, 0], rtol=1e-9)


def test_equal_iterated_loadings_are_the_residual_rms_times_the_columns():
    rng = np.random.default_rng(3)
    X = rng.standard_normal((200, 30)) * np.linspace(0.5, 3.0, 30)
    X -= X.mean(axis=0)
    Y = X[:, :3] @ np.full((3, 1), 3.0) + 2.0 * rng.standard_normal((200, 6))
    Y -= Y.mean(axis=0)
    B, psi = iterated_loadings(X, Y, 1.1 * ndtri(1 - 0.05 / 60) / np.sqrt(200), equal=True)
    ratio = psi / np.sqrt((X**2).mean(axis=0))[:, None]
    np.testing.assert_allclose(ratio, np.broadcast_to(ratio[:1], ratio.shape), rtol=1e-12)
    assert ratio[0] == pytest.approx(np.full(6, 2.0), abs=0.35)
    assert (B[:3] != 0).all()
