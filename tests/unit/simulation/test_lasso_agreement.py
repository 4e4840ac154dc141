"""The batched lasso against scikit-learn, closed forms and a plain textbook twin."""

from __future__ import annotations

import numpy as np
import pytest
from sklearn.datasets import load_diabetes
from sklearn.linear_model import Lasso

from scantling.simulation.lasso import lasso_batch, solve_batch


def textbook_lasso(X, y, weights, sweeps=20_000, tol=1e-13):
    """Cyclic coordinate descent, one response, line by line.

    Friedman et al. (2007), Annals of Applied Statistics 1, 302-332.
    """
    n, p = X.shape
    b = np.zeros(p)
    residual = y.astype(float)
    square = (X**2).sum(axis=0) / n
    for _ in range(sweeps):
        largest = 0.0
        for j in range(p):
            if square[j] == 0:
                continue
            rho = X[:, j] @ residual / n + square[j] * b[j]
            fresh = np.sign(rho) * max(abs(rho) - weights[j], 0.0) / square[j]
            residual -= (fresh - b[j]) * X[:, j]
            largest = max(largest, abs(fresh - b[j]) * np.sqrt(square[j]))
            b[j] = fresh
        if largest < tol:
            break
    return b


def sklearn_lasso(X, Y, penalties):
    fits = [
        Lasso(alpha=penalty, fit_intercept=False, tol=1e-15, max_iter=200_000).fit(X, y).coef_
        for penalty, y in zip(penalties, Y.T, strict=True)
    ]
    return np.array(fits).T


def objective(X, Y, weights, B):
    weights = np.broadcast_to(weights, B.shape)
    return ((Y - X @ B) ** 2).sum(axis=0) / (2 * len(Y)) + (weights * np.abs(B)).sum(axis=0)


def design(n, p, replicates, seed, df=None):
    rng = np.random.default_rng(seed)
    draw = rng.standard_normal if df is None else lambda size: rng.standard_t(df, size)
    X = draw((n, p))
    relevant = rng.choice(p, min(p, 6), replace=False)
    B = np.zeros((p, replicates))
    B[relevant] = rng.choice([-0.5, 0.5], (len(relevant), 1))
    return X, X @ B + draw((n, replicates))


def share_of_highest(X, Y, share):
    return share * np.abs(X.T @ Y).max(axis=0) / len(Y)


@pytest.mark.parametrize("df", [None, 2.2])
@pytest.mark.parametrize(("n", "p", "share"), [(80, 30, 0.2), (60, 150, 0.3), (60, 150, 0.08)])
def test_coefficients_agree_with_sklearn(n, p, share, df):
    X, Y = design(n, p, 6, seed=n + p, df=df)
    penalties = share_of_highest(X, Y, share)
    ours = lasso_batch(X, Y, penalties, tol=1e-12)
    theirs = sklearn_lasso(X, Y, penalties)
    assert (ours != 0).sum() > 10
    np.testing.assert_allclose(ours, theirs, atol=1e-6, rtol=0)


def test_badly_scaled_columns_agree_with_sklearn_on_weighted_ones():
    X, Y = design(90, 40, 5, seed=3)
    scale = 10.0 ** np.random.default_rng(4).uniform(-6, 6, 40)
    penalties = share_of_highest(X, Y, 0.1)
    weights = scale[:, None] * penalties
    ours, gaps = solve_batch(X * scale, Y, weights, tol=1e-12)
    assert gaps.max() <= 1e-12
    np.testing.assert_allclose(
        ours * scale[:, None], sklearn_lasso(X, Y, penalties), atol=1e-6, rtol=0
    )


def test_one_penalty_on_badly_scaled_columns_agrees_with_the_textbook():
    X, Y = design(50, 12, 3, seed=5)
    X = X * 10.0 ** np.linspace(-6, 6, 12)
    penalties = share_of_highest(X, Y, 1e-4)
    ours = lasso_batch(X, Y, penalties, tol=1e-12)
    for r in range(3):
        twin = textbook_lasso(X, Y[:, r], np.full(12, penalties[r]))
        np.testing.assert_allclose(
            X @ ours[:, r], X @ twin, atol=1e-7 * np.linalg.norm(Y[:, r]), rtol=0
        )
        assert set(np.flatnonzero(ours[:, r])) == set(np.flatnonzero(twin))


def test_weights_by_column_and_response_agree_with_sklearn_by_rescaling():
    X, Y = design(70, 100, 4, seed=6)
    rng = np.random.default_rng(7)
    weights = share_of_highest(X, Y, 0.15) * rng.uniform(0.5, 2.0, (100, 4))
    ours, _ = solve_batch(X, Y, weights, tol=1e-12)
    for r in range(4):
        loadings = weights[:, r]
        fit = sklearn_lasso(X / loadings, Y[:, [r]], [1.0])[:, 0]
        np.testing.assert_allclose(ours[:, r], fit / loadings, atol=1e-6, rtol=0)


@pytest.mark.parametrize("share", [0.5, 0.1, 0.01])
def test_textbook_twin_agrees(share):
    X, Y = design(40, 25, 4, seed=8, df=3)
    penalties = share_of_highest(X, Y, share)
    ours = lasso_batch(X, Y, penalties, tol=1e-13)
    for r in range(4):
        twin = textbook_lasso(X, Y[:, r], np.full(25, penalties[r]))
        np.testing.assert_allclose(ours[:, r], twin, atol=1e-8, rtol=0)


@pytest.mark.parametrize("share", [0.5, 0.05])
def test_duplicated_and_dependent_columns_reach_the_same_objective_and_fit(share):
    X, Y = design(60, 20, 4, seed=9)
    X = np.hstack([X, X[:, ::-1], -X[:, :5], X[:, :5] @ np.ones((5, 3)), np.zeros((60, 2))])
    penalties = share_of_highest(X, Y, share)
    ours = lasso_batch(X, Y, penalties, tol=1e-12)
    theirs = sklearn_lasso(X, Y, penalties)
    np.testing.assert_allclose(
        objective(X, Y, penalties, ours), objective(X, Y, penalties, theirs), rtol=1e-8
    )
    np.testing.assert_allclose(X @ ours, X @ theirs, atol=1e-5, rtol=0)
    assert not ours[-2:].any()


def test_orthonormal_columns_give_soft_thresholding():
    # CHECKS 58: X = 2 I_4, exact.
    ours = lasso_batch(2 * np.eye(4), np.array([4.0, 1.0, -3.0, 0.2]), 0.5)
    np.testing.assert_allclose(ours[:, 0], [1.5, 0.0, -1.0, 0.0], atol=1e-8)
    q, _ = np.linalg.qr(np.random.default_rng(10).standard_normal((50, 20)))
    X = q * np.sqrt(50)
    Y = np.random.default_rng(11).standard_normal((50, 7))
    scores = X.T @ Y / 50
    ours = lasso_batch(X, Y, 0.1, tol=1e-14)
    soft = np.sign(scores) * np.maximum(np.abs(scores) - 0.1, 0)
    assert (soft != 0).any()
    np.testing.assert_allclose(ours, soft, atol=1e-12)


def test_nothing_enters_at_the_highest_penalty_and_one_column_just_below():
    # CHECKS 59: max |x_j'y| / n, exact.
    X, Y = design(50, 80, 9, seed=12)
    highest = np.abs(X.T @ Y).max(axis=0) / 50
    assert not lasso_batch(X, Y, highest * (1 + 1e-8)).any()
    below = lasso_batch(X, Y, highest * (1 - 1e-4), tol=1e-12)
    assert ((below != 0).sum(axis=0) == 1).all()
    assert (np.argmax(np.abs(below), axis=0) == np.argmax(np.abs(X.T @ Y), axis=0)).all()


def test_plug_in_selection_of_the_diabetes_data():
    # CHECKS 67: heteroskedastic loadings, post-lasso residuals, c 1.1, g .05;
    # Belloni et al. (2012), Econometrica 80, 2369-2429. lambda = 2 n * level.
    from scipy.special import ndtri

    table = load_diabetes()
    X = (table.data - table.data.mean(axis=0)) / table.data.std(axis=0)
    y = table.target - table.target.mean()
    n, p = X.shape
    level = 1.1 * ndtri(1 - 0.05 / (2 * p)) / np.sqrt(n)
    assert 2 * n * level == pytest.approx(129.8319, abs=1e-4)
    residual = y
    for _ in range(15):
        loadings = np.sqrt(((X * residual[:, None]) ** 2).mean(axis=0))
        fit, gaps = solve_batch(X, y[:, None], (level * loadings)[:, None], tol=1e-10)
        assert gaps[0] <= 1e-10
        chosen = np.flatnonzero(fit[:, 0])
        residual = y - X[:, chosen] @ np.linalg.lstsq(X[:, chosen], y, rcond=None)[0]
    assert {table.feature_names[j] for j in chosen} == {"bmi", "bp", "s3", "s5"}


def test_zero_penalty_is_least_squares_of_least_norm():
    X, Y = design(40, 10, 3, seed=13)
    expected = np.linalg.lstsq(X, Y, rcond=None)[0]
    np.testing.assert_allclose(lasso_batch(X, Y, 0.0), expected, atol=1e-10)
    mixed = lasso_batch(X, Y, [0.0, 0.2, 0.0], tol=1e-12)
    np.testing.assert_allclose(mixed[:, [0, 2]], expected[:, [0, 2]], atol=1e-10)
    np.testing.assert_allclose(mixed[:, 1], lasso_batch(X, Y[:, 1], 0.2, tol=1e-12)[:, 0])
    twice = lasso_batch(np.hstack([X, X]), Y, 0.0)
    np.testing.assert_allclose(twice, np.vstack([expected, expected]) / 2, atol=1e-10)
    wide, y = design(10, 40, 2, seed=14)
    np.testing.assert_allclose(wide @ lasso_batch(wide, y, 0.0), y, atol=1e-9)
