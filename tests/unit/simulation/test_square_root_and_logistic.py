"""Square-root and logistic lasso against scikit-learn and plain textbook twins."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog
from scipy.special import expit, ndtri
from sklearn.linear_model import Lasso, LogisticRegression

from scantling.errors import InputError
from scantling.simulation import logistic, square_root
from scantling.simulation.arguments import NotConvergedError
from scantling.simulation.logistic import logistic_batch
from scantling.simulation.square_root import solve_square_root, square_root_batch


def design(n, p, replicates, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    X -= X.mean(axis=0)
    B = np.zeros((p, 1))
    B[: min(p, 5)] = 0.6
    Y = X @ B + rng.standard_t(2.5, (n, replicates))
    return X, Y - Y.mean(axis=0)


def binary(n, p, replicates, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p)) + 0.5
    h = 0.9 * X[:, : min(p, 4)].sum(axis=1, keepdims=True) - 1.0
    Y = (rng.random((n, replicates)) < expit(h)).astype(float)
    Y[0], Y[1] = 0.0, 1.0
    return X, Y


def pivotal_share(X, Y, share):
    n = len(Y)
    return share * np.abs(X.T @ Y).max(axis=0) / n / np.sqrt((Y**2).mean(axis=0))


def textbook_square_root(X, y, w):
    """Scaled lasso, line by line: sigma from the residual, the lasso at sigma w, until they agree.

    Sun et al. (2012), Biometrika 99, 879-898.
    """
    sigma, b = np.sqrt((y**2).mean()), np.zeros(X.shape[1])
    for _ in range(500):
        b = sk_lasso(X, y, sigma * w)
        fresh = np.sqrt(((y - X @ b) ** 2).mean())
        if abs(fresh - sigma) < 1e-13:
            break
        sigma = fresh
    return b


def sk_lasso(X, y, w):
    fit = Lasso(alpha=1.0, fit_intercept=False, tol=1e-15, max_iter=10**6).fit(X / w, y)
    return fit.coef_ / w


def textbook_logistic(X, y, w, steps=200_000):
    """Proximal gradient steps, accelerated and restarted, line by line."""
    n, p = X.shape
    Z = np.column_stack([np.ones(n), X])
    weights = np.concatenate([[0.0], w])
    rate = 4 * n / np.linalg.norm(Z, 2) ** 2
    b = z = np.zeros(p + 1)
    t = 1.0
    for _ in range(steps):
        step = z + rate * Z.T @ (y - expit(Z @ z)) / n
        fresh = np.sign(step) * np.maximum(np.abs(step) - rate * weights, 0.0)
        t_next = (1 + np.sqrt(1 + 4 * t * t)) / 2
        if (z - fresh) @ (fresh - b) > 0:
            t_next = 1.0
        z = fresh + (t - 1) / t_next * (fresh - b) if t_next > 1 else fresh
        if np.abs(fresh - b).max() < 1e-15:
            break
        b, t = fresh, t_next
    return b[1:], b[0]


@pytest.mark.parametrize(("n", "p", "share"), [(60, 15, 0.2), (40, 60, 0.5), (40, 60, 0.25)])
def test_square_root_agrees_with_the_scaled_lasso(n, p, share):
    X, Y = design(n, p, 4, seed=n + p)
    w = pivotal_share(X, Y, share) * np.random.default_rng(1).uniform(0.7, 1.4, (p, 4))
    B = square_root_batch(X, Y, w, tol=1e-12)
    assert ((B != 0).sum(axis=0) > 2).all()
    for r in range(4):
        np.testing.assert_allclose(B[:, r], textbook_square_root(X, Y[:, r], w[:, r]), atol=1e-6)


def test_square_root_penalty_needs_no_scale():
    # CHECKS 48: lambda = c sqrt(n) Phi^-1(1 - a/(2p)); the penalty here is lambda/n.
    X, Y = design(100, 50, 5, seed=2)
    level = 1.1 * ndtri(1 - 0.05 / 100) * np.sqrt(100)
    assert level == pytest.approx(36.1957940, abs=1e-6)
    B = square_root_batch(X, Y, level / 100, tol=1e-12)
    np.testing.assert_allclose(
        square_root_batch(X, -1e4 * Y, level / 100, tol=1e-12), -1e4 * B, atol=1e-6
    )
    assert (B != 0).any()


def test_square_root_at_the_highest_penalty_and_just_below():
    X, Y = design(50, 30, 6, seed=3)
    highest = pivotal_share(X, Y, 1.0)
    assert not square_root_batch(X, Y, highest * (1 + 1e-8)).any()
    below = square_root_batch(X, Y, highest * (1 - 1e-4), tol=1e-12)
    assert ((below != 0).sum(axis=0) == 1).all()


def test_below_some_penalty_the_answer_is_the_perfect_fit_of_least_norm():
    # There the loss is zero, and what is left is min ||b||_1 with Xb = y, a linear programme.
    X, Y = design(20, 60, 2, seed=4)
    B = square_root_batch(X, Y, 1e-3, tol=1e-9)
    np.testing.assert_allclose(X @ B, Y, atol=1e-8)
    for r in range(2):
        exact = linprog(np.ones(120), A_eq=np.hstack([X, -X]), b_eq=Y[:, r], bounds=(0, None))
        assert np.abs(B[:, r]).sum() == pytest.approx(exact.fun, rel=1e-7)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    kind=st.sampled_from(["normal", "heavy", "discrete", "duplicated", "scaled"]),
    n=st.integers(4, 40),
    p=st.integers(1, 50),
    share=st.floats(0.45, 1.1),
    size=st.integers(-5, 5).map(lambda power: 10.0**power),
    seed=st.integers(0, 2**32 - 1),
)
def test_optimality_conditions_of_the_square_root_lasso(kind, n, p, share, size, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_t(2.5, (n, p)) if kind == "heavy" else rng.standard_normal((n, p))
    if kind == "discrete":
        X = rng.integers(-1, 2, (n, p)) + 0.0
    if kind == "duplicated":
        X = X[:, rng.integers(0, p, p)]
    if kind == "scaled":
        X = X * 10.0 ** rng.uniform(-4, 4, p)
    Y = size * rng.standard_t(2.5, (n, 3))
    w = pivotal_share(X, Y, share) + 1e-9
    B, gaps = solve_square_root(X, Y, w[None], tol=1e-10)
    residual = Y - X @ B
    sigma = np.sqrt((residual**2).mean(axis=0))
    proper = sigma > 1e-6 * np.sqrt((Y**2).mean(axis=0))
    assert (gaps[proper] <= 1e-10).all()
    slope = X.T @ residual / n / np.where(proper, sigma, 1.0)
    room = 1e-4 * np.sqrt((X**2).mean(axis=0))[:, None]
    assert (np.abs(slope) <= w + room)[:, proper].all()
    on = (B != 0) & proper
    assert (np.abs(slope - w * np.sign(B)) <= room + 1e-4 * w)[on].all()


@pytest.mark.parametrize(("n", "p", "share"), [(120, 10, 0.1), (60, 90, 0.5), (60, 90, 0.3)])
def test_logistic_agrees_with_sklearn(n, p, share):
    X, Y = binary(n, p, 3, seed=n + p)
    penalty = share * np.abs(X.T @ (Y - Y.mean(axis=0))).max(axis=0) / n
    B, A = logistic_batch(X, Y, penalty, tol=1e-13)
    assert ((B != 0).sum(axis=0) > 2).all()
    for r in range(3):
        fit = LogisticRegression(
            l1_ratio=1.0, C=1 / (n * penalty[r]), solver="saga", tol=1e-11, max_iter=10**6
        ).fit(X, Y[:, r])
        np.testing.assert_allclose(B[:, r], fit.coef_[0], atol=1e-6)
        assert A[r] == pytest.approx(fit.intercept_[0], abs=1e-6)


def test_logistic_agrees_with_the_textbook_with_weights_for_each_column():
    X, Y = binary(70, 40, 3, seed=5)
    top = np.abs(X.T @ (Y - Y.mean(axis=0))).max(axis=0) / 70
    w = 0.3 * top * np.random.default_rng(6).uniform(0.5, 2.0, (40, 3))
    B, A = logistic_batch(X, Y, w, tol=1e-13)
    for r in range(3):
        b, a = textbook_logistic(X, Y[:, r], w[:, r])
        np.testing.assert_allclose(B[:, r], b, atol=1e-7)
        assert A[r] == pytest.approx(a, abs=1e-7)
    scale = 10.0 ** np.random.default_rng(7).uniform(-5, 5, 40)
    scaled, a = logistic_batch(X * scale, Y, scale[:, None] * w, tol=1e-13)
    np.testing.assert_allclose(scaled * scale[:, None], B, atol=1e-6)
    np.testing.assert_allclose(a, A, atol=1e-6)


def test_logistic_at_the_highest_penalty_is_the_constant():
    X, Y = binary(80, 20, 4, seed=8)
    top = np.abs(X.T @ (Y - Y.mean(axis=0))).max(axis=0) / 80
    B, A = logistic_batch(X, Y, top * (1 + 1e-9))
    assert not B.any()
    np.testing.assert_allclose(expit(A), Y.mean(axis=0), atol=1e-12)
    assert logistic_batch(X, Y, top * 0.999, tol=1e-12)[0].any(axis=0).all()


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    kind=st.sampled_from(["normal", "heavy", "discrete", "duplicated", "separated", "scaled"]),
    n=st.integers(4, 40),
    p=st.integers(1, 40),
    share=st.floats(-2.0, 0.1).map(lambda power: 10.0**power),
    seed=st.integers(0, 2**32 - 1),
)
def test_optimality_conditions_of_the_logistic_lasso(kind, n, p, share, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_t(2.2, (n, p)) if kind == "heavy" else rng.standard_normal((n, p))
    if kind == "discrete":
        X = rng.integers(-1, 2, (n, p)) + 0.0
    if kind == "duplicated":
        X = X[:, rng.integers(0, p, p)]
    if kind == "scaled":
        X = X * 10.0 ** rng.uniform(-4, 4, p)
    Y = (rng.random((n, 2)) < 0.4).astype(float)
    if kind == "separated":
        Y = np.repeat((X[:, :1] > 0).astype(float), 2, axis=1)
    Y[0], Y[1] = 0.0, 1.0
    w = share * np.abs(X.T @ (Y - Y.mean(axis=0))).max(axis=0) / n + 1e-4 * np.abs(X).max() + 1e-9
    B, A = logistic_batch(X, Y, w, tol=1e-10)
    error = Y - expit(A + X @ B)
    np.testing.assert_allclose(error.mean(axis=0), 0.0, atol=1e-10)
    slope = X.T @ error / n
    room = 1e-4 * np.sqrt((X**2).mean(axis=0))[:, None]
    assert (np.abs(slope) <= w + room).all()
    on = np.abs(B) * room > 1e-6
    assert (np.abs(slope - w * np.sign(B)) <= room + 1e-3 * w)[on].all()


def test_unreached_gaps_are_refused(monkeypatch):
    X, Y = binary(60, 90, 3, seed=9)
    monkeypatch.setattr(logistic, "ROUNDS", 1)
    with pytest.raises(NotConvergedError, match=r"^penalty: response .* duality gap") as caught:
        logistic_batch(X, Y, 0.02)
    assert 1e-3 < caught.value.gap < 1
    X, Y = design(40, 60, 3, seed=10)
    monkeypatch.setattr(square_root, "ROUNDS", 1)
    with pytest.raises(NotConvergedError):
        square_root_batch(X, Y, 0.1)


@pytest.mark.parametrize(
    ("Y", "message"),
    [
        ([0.0, 1.0, 2.0], "^Y: values of 0 and 1 are needed; found 2"),
        ([1.0, 1.0, 1.0], "^Y: both 0 and 1 .* response 1 has only 1"),
        ([[0.0, 0.0], [1.0, 0.0], [1.0, 0.0]], "^Y: both 0 and 1 .* response 2 has only 0"),
        ([0.0, 1.0], "^Y: as many rows"),
    ],
)
def test_responses_that_are_not_binary_are_refused(Y, message):
    with pytest.raises(InputError, match=message):
        logistic_batch(np.eye(3)[:, :2], Y, 0.1)


def test_penalties_are_checked():
    with pytest.raises(InputError, match=r"^penalty: positive"):
        square_root_batch(np.eye(3), [1.0, 2.0, 3.0], 0.0)
    with pytest.raises(InputError, match=r"^penalty: positive"):
        logistic_batch(np.eye(3), [0.0, 1.0, 1.0], -1.0)
    assert not square_root_batch(np.eye(3), np.zeros(3), 0.1).any()
