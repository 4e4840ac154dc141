"""Huber and absolute loss against scikit-learn, linear programming and plain textbook twins."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog
from sklearn.linear_model import Lasso, QuantileRegressor

from scantling.errors import InputError
from scantling.simulation import absolute, huber, robust_fit
from scantling.simulation.absolute import absolute_batch
from scantling.simulation.arguments import NotConvergedError
from scantling.simulation.huber import huber_batch, solve_huber
from scantling.simulation.lasso import lasso_batch


def design(n, p, replicates, seed, df=2.5):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    B = np.zeros((p, 1))
    B[: min(p, 5)] = 0.6
    return X, X @ B + 0.3 + rng.standard_t(df, (n, replicates))


def huber_objective(X, Y, w, tau, B, A):
    r = np.abs(Y - A - X @ B)
    loss = np.where(r <= tau, r**2 / 2, tau * r - tau**2 / 2).mean(axis=0)
    return loss + (w * np.abs(B)).sum(axis=0)


def absolute_objective(X, Y, w, B, A):
    return np.abs(Y - A - X @ B).mean(axis=0) + (w * np.abs(B)).sum(axis=0)


def textbook_huber(X, y, w, tau, intercept, steps=60_000):
    """Accelerated proximal gradient, line by line. Beck et al. (2009), SIAM J. Imaging
    Sciences 2, 183-202, restarted where the step turns back."""
    n, p = X.shape
    Z = np.column_stack([np.ones(n) if intercept else np.zeros(n), X])
    weights = np.concatenate([[0.0], np.broadcast_to(w, (p,))])
    rate = n / np.linalg.norm(Z, 2) ** 2
    b = z = np.zeros(p + 1)
    t = 1.0
    for _ in range(steps):
        gradient = -Z.T @ np.clip(y - Z @ z, -tau, tau) / n
        step = z - rate * gradient
        fresh = np.sign(step) * np.maximum(np.abs(step) - rate * weights, 0.0)
        t_next = (1 + np.sqrt(1 + 4 * t * t)) / 2
        if (z - fresh) @ (fresh - b) > 0:
            t_next = 1.0
        z = fresh + (t - 1) / t_next * (fresh - b) if t_next > 1 else fresh
        if np.abs(fresh - b).max() < 1e-15:
            break
        b, t = fresh, t_next
    return b[1:], b[0]


def shifted_rows_lasso(X, y, w, tau, intercept):
    """Huber's loss is a lasso with a shift for every row: y = a + Xb + o + e, o penalised by tau/n.

    She et al. (2011), Outlier detection using nonconvex penalized regression, JASA 106, 626-639.
    """
    n, p = X.shape
    columns = np.column_stack([X / w, np.eye(n) / (tau / n)])
    centred = columns - columns.mean(axis=0) if intercept else columns
    target = y - y.mean() if intercept else y
    fit = Lasso(alpha=1.0, fit_intercept=False, tol=1e-15, max_iter=10**6).fit(centred, target)
    b = fit.coef_
    return b[:p] / w, float((y - columns @ b).mean()) if intercept else 0.0


def linear_programme(X, y, w, intercept):
    """(1/n) sum |y - a - Xb| + w'|b| as min c'x, x >= 0: b+, b-, r+, r-, a+, a-."""
    n = len(X)
    one = np.full((n, 1), float(intercept))
    A = np.hstack([X, -X, np.eye(n), -np.eye(n), one, -one])
    c = np.concatenate([w, w, np.full(2 * n, 1 / n), [0.0, 0.0]])
    return linprog(c, A_eq=A, b_eq=y, bounds=(0, None), method="highs").fun


def huber_penalty(X, Y, tau, share):
    psi = np.clip(Y - np.median(Y, axis=0), -tau, tau)
    return share * np.abs(X.T @ psi).max(axis=0) / len(Y)


def sign_penalty(X, Y, share):
    return share * np.abs(X.T @ np.sign(Y - np.median(Y, axis=0))).max(axis=0) / len(Y)


@pytest.mark.parametrize("intercept", [True, False])
@pytest.mark.parametrize(("n", "p", "tau"), [(60, 15, 1.3), (40, 60, 0.7), (40, 60, 3.0)])
def test_huber_agrees_with_the_lasso_on_shifted_rows(n, p, tau, intercept):
    X, Y = design(n, p, 4, seed=n + p)
    penalty = huber_penalty(X, Y, tau, 0.25)
    B, A = huber_batch(X, Y, penalty, tau=tau, intercept=intercept, tol=1e-12)
    assert ((B != 0).sum(axis=0) > 5).all() and (np.abs(Y - A - X @ B) > tau).any()
    for r in range(4):
        b, a = shifted_rows_lasso(X, Y[:, r], np.full(p, penalty[r]), tau, intercept)
        np.testing.assert_allclose(B[:, r], b, atol=1e-6)
        assert A[r] == pytest.approx(a, abs=1e-6)


@pytest.mark.parametrize("intercept", [True, False])
def test_huber_agrees_with_the_textbook_with_weights_for_each_column(intercept):
    X, Y = design(50, 30, 3, seed=1, df=1.5)
    tau = np.array([0.5, 1.0, 2.0])
    weights = huber_penalty(X, Y, tau, 0.3) * np.random.default_rng(2).uniform(0.5, 2, (30, 3))
    B, A = huber_batch(X, Y, weights, tau=tau, intercept=intercept, tol=1e-13)
    for r in range(3):
        b, a = textbook_huber(X, Y[:, r], weights[:, r], tau[r], intercept)
        np.testing.assert_allclose(B[:, r], b, atol=1e-8)
        assert A[r] == pytest.approx(a, abs=1e-8)


def test_huber_on_badly_scaled_columns_agrees_with_weighted_ones():
    X, Y = design(60, 40, 3, seed=3)
    scale = 10.0 ** np.random.default_rng(4).uniform(-6, 6, 40)
    penalty = huber_penalty(X, Y, 1.0, 0.3)
    plain, a = huber_batch(X, Y, penalty, tau=1.0, tol=1e-12)
    scaled, b = huber_batch(X * scale, Y, scale[:, None] * penalty, tau=1.0, tol=1e-12)
    np.testing.assert_allclose(scaled * scale[:, None], plain, atol=1e-7)
    np.testing.assert_allclose(a, b, atol=1e-7)


def test_a_threshold_beyond_all_residuals_is_the_lasso():
    X, Y = design(50, 80, 4, seed=5)
    X, centred = X - X.mean(axis=0), Y - Y.mean(axis=0)
    penalty = 0.2 * np.abs(X.T @ centred).max(axis=0) / 50
    B, A = huber_batch(X, Y, penalty, tau=1e3, tol=1e-12)
    np.testing.assert_allclose(B, lasso_batch(X, centred, penalty, tol=1e-12), atol=1e-6)
    np.testing.assert_allclose(A, Y.mean(axis=0), atol=1e-9)


@pytest.mark.parametrize("intercept", [True, False])
@pytest.mark.parametrize(("n", "p", "share"), [(60, 15, 0.3), (40, 60, 0.5), (40, 60, 0.15)])
def test_absolute_loss_reaches_the_linear_programme(n, p, share, intercept):
    X, Y = design(n, p, 3, seed=n + p, df=1.5)
    penalty = sign_penalty(X, Y, share)
    B, A = absolute_batch(X, Y, penalty, intercept=intercept, tol=1e-12)
    assert ((B != 0).sum(axis=0) > 1).all()
    ours = absolute_objective(X, Y, penalty, B, A)
    for r in range(3):
        exact = linear_programme(X, Y[:, r], np.full(p, penalty[r]), intercept)
        assert ours[r] == pytest.approx(exact, rel=1e-10)
        theirs = QuantileRegressor(alpha=penalty[r] / 2, fit_intercept=intercept).fit(X, Y[:, r])
        np.testing.assert_allclose(B[:, r], theirs.coef_, atol=1e-6)
        # A vertex interpolates as many rows as there are coefficients.
        interpolated = np.abs(Y[:, r] - A[r] - X @ B[:, r]) < 1e-10
        assert interpolated.sum() == (B[:, r] != 0).sum() + intercept


@pytest.mark.parametrize("kind", ["duplicated", "discrete", "sparse", "rounded response"])
def test_degenerate_programmes_reach_the_objective(kind):
    rng = np.random.default_rng(6)
    X, Y = design(50, 30, 4, seed=7)
    if kind == "duplicated":
        X = np.hstack([X, X, -X[:, :5], X[:, :5] @ np.ones((5, 2)), np.zeros((50, 1))])
    elif kind == "discrete":
        X = rng.integers(-1, 2, (50, 30)).astype(float)
    elif kind == "sparse":
        X = (rng.random((50, 30)) < 0.1).astype(float)
    else:
        X, Y = np.round(X), np.round(Y)
    penalty = np.maximum(sign_penalty(X, Y, 0.25), 0.01)
    B, A = absolute_batch(X, Y, penalty, tol=1e-8)
    ours = absolute_objective(X, Y, penalty, B, A)
    for r in range(4):
        exact = linear_programme(X, Y[:, r], np.full(X.shape[1], penalty[r]), True)
        assert ours[r] == pytest.approx(exact, rel=2e-8)


def test_programmes_alone_give_the_same_answers(monkeypatch):
    X, Y = design(60, 80, 3, seed=12)
    penalty = sign_penalty(X, Y, 0.3)
    B, A = absolute_batch(X, Y, penalty, tol=1e-12)
    monkeypatch.setattr(absolute, "STEPS", 0)
    again, level = absolute_batch(X, Y, penalty, tol=1e-10)
    assert (B != 0).sum() > 20
    np.testing.assert_allclose(again, B, atol=1e-8)
    np.testing.assert_allclose(level, A, atol=1e-8)


KINDS = ["normal", "heavy", "discrete", "sparse", "duplicated", "scaled"]


def awkward(kind, n, p, rng):
    X = rng.standard_normal((n, p))
    if kind == "heavy":
        return rng.standard_t(2.2, (n, p))
    if kind == "discrete":
        return rng.integers(-1, 2, (n, p)).astype(float)
    if kind == "sparse":
        return (rng.random((n, p)) < 0.1).astype(float)
    if kind == "duplicated":
        return X[:, rng.integers(0, p, p)] * rng.choice([-1.0, 1.0], p)
    return X * 10.0 ** rng.uniform(-4, 4, p) if kind == "scaled" else X


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    kind=st.sampled_from(KINDS),
    n=st.integers(3, 40),
    p=st.integers(1, 50),
    share=st.floats(-1.5, 0.1).map(lambda power: 10.0**power),
    spread=st.floats(-1.5, 1.0).map(lambda power: 10.0**power),
    rounded=st.booleans(),
    intercept=st.booleans(),
    seed=st.integers(0, 2**32 - 1),
)
def test_optimality_conditions_of_huber(kind, n, p, share, spread, rounded, intercept, seed):
    rng = np.random.default_rng(seed)
    X = awkward(kind, n, p, rng)
    Y = rng.standard_t(2.2, (n, 3))
    Y = np.round(Y) + 0.0 if rounded else Y
    middle = np.median(Y, axis=0) if intercept else 0.0
    tau = spread * (np.abs(Y - middle).mean(axis=0) + 1e-3)
    psi = np.clip(Y - middle, -tau, tau)
    size = np.sqrt((X**2).mean(axis=0))[:, None]
    w = share * np.abs(X.T @ psi).max(axis=0) / n + 1e-4 * tau * max(size.max(), 1e-3)
    B, A = huber_batch(X, Y, w, tau=tau, intercept=intercept, tol=1e-11)
    psi = np.clip(Y - A - X @ B, -tau, tau)
    slope, room = X.T @ psi / n, 1e-4 * tau * size
    assert (np.abs(slope) <= w + room).all()
    on = np.abs(B) * size > 1e-2 * tau
    assert (np.abs(slope - w * np.sign(B))[on] <= 1e-2 * np.broadcast_to(w, B.shape)[on]
            + np.broadcast_to(room, B.shape)[on]).all()  # fmt: skip
    if intercept:
        assert (np.abs(psi.mean(axis=0)) <= 1e-4 * tau).all()
    else:
        assert not A.any()


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    kind=st.sampled_from(KINDS),
    n=st.integers(3, 30),
    p=st.integers(1, 30),
    share=st.floats(-1.0, 0.1).map(lambda power: 10.0**power),
    rounded=st.booleans(),
    intercept=st.booleans(),
    seed=st.integers(0, 2**32 - 1),
)
def test_absolute_loss_attains_the_programme(kind, n, p, share, rounded, intercept, seed):
    rng = np.random.default_rng(seed)
    X = awkward(kind, n, p, rng)
    y = rng.standard_t(2.2, (n, 1))
    y = np.round(y) if rounded else y
    w = float(np.maximum(sign_penalty(X, y, share), 1e-3 * np.abs(X).max() + 1e-9)[0])
    B, A = absolute_batch(X, y, w, intercept=intercept, tol=1e-8)
    exact = linear_programme(X, y[:, 0], np.full(p, w), intercept)
    unit = np.abs(y - np.median(y)).mean() if intercept else np.abs(y).mean()
    assert absolute_objective(X, y, w, B, A)[0] == pytest.approx(exact, abs=2e-8 * unit + 1e-12)


def test_answers_move_with_the_response():
    X, Y = design(60, 40, 3, seed=8)
    penalty, tau = huber_penalty(X, Y, 1.0, 0.3), 1.0
    B, A = huber_batch(X, Y, penalty, tau=tau, tol=1e-12)
    moved, level = huber_batch(X, 7.0 - 100.0 * Y, 100.0 * penalty, tau=100.0 * tau, tol=1e-12)
    np.testing.assert_allclose(moved, -100.0 * B, atol=1e-5)
    np.testing.assert_allclose(level, 7.0 - 100.0 * A, atol=1e-5)
    share = sign_penalty(X, Y, 0.3)
    B, A = absolute_batch(X, Y, share, tol=1e-12)
    moved, level = absolute_batch(X, 7.0 - 100.0 * Y, share, tol=1e-12)
    np.testing.assert_allclose(moved, -100.0 * B, atol=1e-7)
    np.testing.assert_allclose(level, 7.0 - 100.0 * A, atol=1e-7)


def test_one_wild_row_moves_the_lasso_and_not_the_robust_fits():
    X, Y = design(80, 20, 1, seed=9, df=30)
    wild = Y.copy()
    wild[3] = 1e6
    for fit in (
        lambda y: huber_batch(X, y, 0.1, tau=1.0, tol=1e-10)[0],
        lambda y: absolute_batch(X, y, 0.1, tol=1e-10)[0],
    ):
        assert np.abs(fit(Y) - fit(wild)).max() < 0.2


def test_constant_and_zero_data():
    Y = np.column_stack([np.full(8, 5.0), np.arange(8.0)])
    for fit in (
        lambda **k: huber_batch(np.eye(8)[:, :3], Y, 0.2, tau=1.0, **k),
        lambda **k: absolute_batch(np.eye(8)[:, :3], Y, 0.2, **k),
    ):
        B, A = fit()
        assert not B[:, 0].any() and A[0] == 5.0
    B, A = absolute_batch(np.zeros((5, 2)), np.zeros((5, 1)), 0.1, intercept=False)
    assert not B.any() and not A.any()


def test_gap_reported_bounds_the_distance_to_the_minimum(monkeypatch):
    X, Y = design(60, 40, 3, seed=10)
    penalty = huber_penalty(X, Y, 1.0, 0.2)
    tau = np.ones(3)
    B, A = huber_batch(X, Y, penalty, tau=1.0, tol=1e-13)
    best = huber_objective(X, Y, penalty, 1.0, B, A)
    unit = huber_objective(X, Y, 0.0, 1.0, np.zeros((40, 3)), np.median(Y, axis=0))
    monkeypatch.setattr(huber, "ENTER_AT_ONCE", 1)
    monkeypatch.setattr(huber, "ROUNDS", 4)
    b, a, gaps = solve_huber(X, Y, penalty[None], tau, tol=1e-9, intercept=True)
    above = (huber_objective(X, Y, penalty, 1.0, b, a) - best) / unit
    assert (above > 1e-4).all() and (above <= gaps).all()
    with pytest.raises(NotConvergedError, match=r"^penalty: response .* duality gap") as caught:
        huber_batch(X, Y, penalty, tau=1.0, tol=1e-9)
    assert caught.value.gap == pytest.approx(gaps.max())
    monkeypatch.setattr(absolute, "STEPS", 1)
    monkeypatch.setattr(absolute, "PROGRAMMES", 0)
    with pytest.raises(NotConvergedError):
        absolute_batch(X, Y, 0.02, tol=1e-9)


def test_line_search_finds_the_lowest_point():
    rng = np.random.default_rng(11)
    for _ in range(8):
        Z, y, b = rng.standard_normal((12, 5)), rng.standard_t(2, 12), rng.standard_normal(5)
        w, move, tau = rng.uniform(0, 0.5, 5), rng.standard_normal(5), rng.uniform(0.1, 2)
        r, u = y - Z @ b, Z @ move

        def value(t, b=b, move=move, Z=Z, y=y, w=w, tau=tau):
            return huber_objective(Z, y[:, None], w[:, None], tau, (b + t * move)[:, None], 0.0)[0]

        if value(1e-7) > value(0.0):
            move, u = -move, -u
        t, _ = robust_fit._line_search(r, u, b, move, w, tau)
        best = min(value(s, move=move) for s in np.linspace(0, 2 * t + 1, 301))
        assert value(t, move=move) <= best + 1e-12


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"penalty": 0.0}, "^penalty: positive"),
        ({"penalty": [0.1, 0.1]}, "^penalty: one number or 1"),
        ({"penalty": np.ones((3, 1))}, "^penalty: one number, 1 of them or a table of 2 by 1"),
        ({"penalty": "large"}, "^penalty: numbers"),
        ({"tau": -1.0}, "^tau: positive"),
        ({"tau": [1.0, 2.0]}, "^tau: one number or 1"),
        ({"tau": np.nan}, "^tau: finite"),
        ({"tol": 0.0}, "^tol: "),
        ({"Y": [1.0, 2.0]}, "^Y: as many rows"),
    ],
)
def test_bad_arguments_are_refused_by_name(change, message):
    call = {"X": np.eye(3)[:, :2], "Y": [1.0, 2.0, 3.0], "penalty": 0.1, "tau": 1.0, **change}
    with pytest.raises(InputError, match=message):
        huber_batch(**call)
    if "tau" not in change:
        call.pop("tau")
        with pytest.raises(InputError, match=message):
            absolute_batch(**call)
