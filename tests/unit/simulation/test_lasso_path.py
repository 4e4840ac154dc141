"""The batched path against one penalty at a time, scikit-learn's LARS and coordinate descent."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.linear_model import Lasso, LassoLars, lars_path

from scantling.errors import InputError
from scantling.simulation import active_set, kept_inverse, path, path_block, working_set
from scantling.simulation.lasso import NotConvergedError, lasso_batch, solve_batch
from scantling.simulation.path import lasso_path_batch, walk_path


def design(n, p, replicates, seed, df=None):
    rng = np.random.default_rng(seed)
    draw = rng.standard_normal if df is None else lambda size: rng.standard_t(df, size)
    X = draw((n, p))
    B = np.zeros((p, replicates))
    B[rng.choice(p, min(p, 6), replace=False)] = 0.5
    Y = X @ B + draw((n, replicates))
    return X, Y, np.abs(X.T @ Y).max(axis=0) / n


def falling(top, ratio, points):
    return top * ratio ** (np.arange(points) / max(points - 1, 1))[:, None]


def worst_gap(X, Y, penalties, B):
    """The largest gap over ||y||^2/(2n), as primal minus dual."""
    n = len(Y)
    residual = Y - X @ B
    slope = np.abs(X.T @ residual).max(axis=0) / n
    shrink = np.minimum(1.0, penalties / np.maximum(slope, 1e-300))
    power = (Y**2).sum(axis=0) / (2 * n)
    primal = (residual**2).sum(axis=0) / (2 * n) + penalties * np.abs(B).sum(axis=0)
    dual = power - ((Y - shrink * residual) ** 2).sum(axis=0) / (2 * n)
    return ((primal - dual) / power).max()


@pytest.mark.parametrize(
    ("n", "p", "ratio", "df"), [(80, 30, 0.05, None), (60, 150, 0.1, None), (60, 150, 0.1, 2.2)]
)
def test_every_point_agrees_with_lars_and_coordinate_descent(n, p, ratio, df):
    X, Y, top = design(n, p, 4, seed=n + p, df=df)
    grid = falling(top, ratio, 12)
    ours = lasso_path_batch(X, Y, grid, tol=1e-13)
    assert (ours[-1] != 0).sum() > 40
    for r in range(4):
        alphas, _, coefficients = lars_path(X, Y[:, r], method="lasso")
        for step in (0, 3, 7, 11):
            at = [np.interp(grid[step, r], alphas[::-1], c[::-1]) for c in coefficients]
            np.testing.assert_allclose(ours[step, :, r], at, atol=1e-6)
        for step in (4, 11):
            single = LassoLars(alpha=grid[step, r], fit_intercept=False).fit(X, Y[:, r])
            np.testing.assert_allclose(ours[step, :, r], single.coef_, atol=1e-6)
            single = Lasso(alpha=grid[step, r], fit_intercept=False, tol=1e-14, max_iter=10**6)
            np.testing.assert_allclose(ours[step, :, r], single.fit(X, Y[:, r]).coef_, atol=1e-6)


def test_points_agree_with_one_penalty_at_a_time_on_badly_scaled_columns():
    X, Y, _ = design(50, 80, 5, seed=1)
    X = X * 10.0 ** np.random.default_rng(2).uniform(-3, 3, 80)
    grid = falling(np.abs(X.T @ Y).max(axis=0) / 50, 1e-4, 15)
    ours = lasso_path_batch(X, Y, grid, tol=1e-13)
    for step in range(15):
        alone = lasso_batch(X, Y, grid[step], tol=1e-13)
        np.testing.assert_allclose(X @ ours[step], X @ alone, atol=1e-7)


@pytest.mark.parametrize("shape", [(80,), (80, 5)])
def test_loadings_multiply_the_penalty(shape):
    X, Y, _ = design(50, 80, 5, seed=3)
    loadings = np.random.default_rng(4).uniform(0.5, 2.0, shape)
    table = np.broadcast_to(loadings if loadings.ndim == 2 else loadings[:, None], (80, 5))
    grid = falling((np.abs(X.T @ Y) / 50 / table).max(axis=0), 0.1, 9)
    for step, first, last, B, gaps in walk_path(X, Y, grid, tol=1e-13, loadings=loadings):
        assert (first, last) == (0, 5) and gaps.max() <= 1e-13
        alone, _ = solve_batch(X, Y, grid[step] * table, tol=1e-13)
        np.testing.assert_allclose(B, alone, atol=1e-9)
    assert step == 8 and (B != 0).sum() > 40


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    n=st.integers(2, 40),
    p=st.integers(1, 60),
    replicates=st.integers(1, 4),
    points=st.integers(1, 8),
    lowest=st.floats(-3.0, 0.0).map(lambda power: 10.0**power),
    tied=st.booleans(),
    tol=st.sampled_from([1e-4, 1e-8]),
    seed=st.integers(0, 2**32 - 1),
)
def test_gap_at_every_penalty(n, p, replicates, points, lowest, tied, tol, seed):
    rng = np.random.default_rng(seed)
    X = rng.integers(-1, 2, (n, p)).astype(float) if tied else rng.standard_t(2.5, (n, p))
    Y = rng.standard_t(2.5, (n, replicates))
    top = np.maximum(np.abs(X.T @ Y).max(axis=0) / n, 1e-6)
    grid = falling(1.1 * top, lowest, points)
    for step, B in enumerate(lasso_path_batch(X, Y, grid, tol=tol)):
        assert worst_gap(X, Y, grid[step], B) <= 1.01 * tol + 1e-11


def test_every_way_through_gives_the_same_path(monkeypatch):
    X, Y, top = design(60, 90, 20, seed=5)
    grid = falling(top, 0.05, 10)
    usual = lasso_path_batch(X, Y, grid, tol=1e-13)
    assert np.count_nonzero(usual[-1], axis=0).min() > 25
    for module, name, value in [
        (path, "FEWEST_POINTS", 99),
        (path, "GRAM_COLUMNS", 0),
        (path, "LARGEST_SET", 5),
        (kept_inverse, "WORST_PIVOT", 1.0),
        (path_block, "MOST_CANDIDATES", 1),
        (path_block, "MARGIN", -1.0),
        (path_block, "MARGIN", 0.5),
        (path_block, "STEP", 0.97),
        (path_block, "EXCHANGES", 1),
        (path_block, "ONE_BY_ONE", 0),
        (path_block, "PASSES", 1),
        (path_block, "SPARSE_BELOW", 0),
        (path_block, "SINGLE_FROM", 0.0),
        (path, "BLOCK_CELLS", 90 * 3),
        (working_set, "SPARSE_SHARE", 0.0),
        (working_set, "SPARSE_SHARE", 1.0),
        (active_set, "PACKED_ABOVE", 2),
        (working_set, "PASS_CELLS", 1),
    ]:
        with monkeypatch.context() as patch:
            if module in (working_set, active_set):
                patch.setattr(path, "FEWEST_POINTS", 99)
            patch.setattr(module, name, value)
            again = lasso_path_batch(X, Y, grid, tol=1e-13)
        np.testing.assert_allclose(again, usual, atol=1e-9)


@pytest.mark.parametrize("df", [None, 2.2])
@pytest.mark.parametrize(("n", "p"), [(200, 60), (60, 200), (80, 500)])
def test_kept_inverses_alone_do_the_common_problem_exactly(n, p, df, monkeypatch):
    X, Y, top = design(n, p, 30, seed=n, df=df)
    grid = falling(top, 0.1, 30)
    with monkeypatch.context() as patch:
        patch.setattr(path, "FEWEST_POINTS", 99)
        tight = lasso_path_batch(X, Y, grid, tol=1e-13)
    monkeypatch.setattr(path, "settle", None)  # The general method must not be needed.
    loose = lasso_path_batch(X, Y, grid, tol=1e-6)
    assert np.count_nonzero(loose[-1], axis=0).min() > 5
    np.testing.assert_allclose(loose, tight, atol=1e-8)


def near_copies(X):
    X[:, 40:] = X[:, :40] + 1e-7 * X[:, 40:]
    return X


HARD = {
    "copies": lambda X: np.hstack([X[:, :40], -2.0 * X[:, :40]]),
    "near copies": near_copies,
    "common factor": lambda X: X + 5.0 * X[:, :1],
    "three values": lambda X: np.sign(X) * (np.abs(X) > 0.7),
    "scales": lambda X: X * 10.0 ** np.linspace(-6, 6, 80),
}


@pytest.mark.parametrize("kind", HARD)
@pytest.mark.parametrize("tol", [1e-6, 1e-10])
def test_gap_and_fit_hold_on_hard_columns(kind, tol):
    rng = np.random.default_rng(9)
    X = HARD[kind](rng.standard_normal((50, 80)))
    Y = X[:, :3] @ rng.standard_normal((3, 6)) + rng.standard_normal((50, 6))
    Y *= [1e-5, 1e-2, 1.0, 1.0, 1e2, 1e5]
    grid = falling(np.abs(X.T @ Y).max(axis=0) / 50, 0.01, 20)
    power = (Y**2).mean(axis=0)
    for step, B in enumerate(lasso_path_batch(X, Y, grid, tol=tol)):
        assert worst_gap(X, Y, grid[step], B) <= 1.01 * tol + 1e-12
        alone, _ = solve_batch(X, Y, grid[step], tol=1e-12)
        # Within the gap: mean((Xb - Xb*)^2) / 2 is at most that.
        error = ((X @ (B - alone)) ** 2).mean(axis=0) / power
        assert error.max() <= 2.0 * tol


@pytest.mark.parametrize("tol", [1e-4, 1e-6, 1e-9])
@pytest.mark.parametrize("copies", [False, True])
def test_a_split_of_the_responses_changes_nothing(tol, copies, monkeypatch):
    X, Y, top = design(60, 90, 70, seed=10)
    if copies:
        X[:, 45:60] = X[:, :15]
    grid = falling(top, 0.05, 12)
    whole = lasso_path_batch(X, Y, grid, tol=tol)
    for r in (0, 33, 69):
        alone = lasso_path_batch(X, Y[:, r], grid[:, r], tol=tol)
        np.testing.assert_allclose(alone[:, :, 0] @ X.T, whole[:, :, r] @ X.T, atol=1e-9)
    with monkeypatch.context() as patch:
        patch.setattr(path, "GROUP_CELLS", 1)
        parts = lasso_path_batch(X, Y, grid, tol=tol)
    np.testing.assert_allclose(X @ parts, X @ whole, atol=1e-9)
    for step, _, _, B, _ in walk_path(X, Y, grid, tol=tol):
        np.testing.assert_allclose(X @ B, X @ whole[step], atol=1e-9)


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    n=st.integers(5, 60),
    p=st.integers(1, 120),
    points=st.integers(4, 15),
    lowest=st.floats(0.02, 1.0),
    own=st.booleans(),
    seed=st.integers(0, 2**32 - 1),
)
def test_optimality_conditions_at_every_penalty(n, p, points, lowest, own, seed):
    rng = np.random.default_rng(seed)
    X, Y = rng.standard_normal((n, p)), rng.standard_normal((n, 3))
    loadings = rng.uniform(0.3, 3.0, (p, 3) if own else p)
    table = loadings if own else np.repeat(loadings[:, None], 3, axis=1)
    top = (np.abs(X.T @ Y) / n / table).max(axis=0)
    grid = falling(top, lowest, points)
    for step, _, _, B, gaps in walk_path(X, Y, grid, tol=1e-12, loadings=loadings):
        assert gaps.max() <= 1e-12
        bound = grid[step] * table
        slope = X.T @ (Y - X @ B) / n
        # A gap g leaves the residual within sqrt(2 g) of the best one.
        slack = 1e-5 * np.sqrt((X**2).mean(axis=0).max() * (Y**2).mean(axis=0).max())
        assert (np.abs(slope) <= bound + slack).all()
        active = np.abs(B) > 1e-3
        assert np.abs(slope - bound * np.sign(B))[active].max(initial=0.0) <= slack


def test_zero_columns_and_zero_responses_stay_zero():
    X, Y, top = design(30, 10, 3, seed=6)
    X[:, 4], Y[:, 1] = 0.0, 0.0
    B = lasso_path_batch(X, Y, falling(np.full(3, top.max()), 0.01, 5))
    assert not B[:, 4].any() and not B[:, :, 1].any() and B[-1].any()


def test_an_unreached_gap_is_refused(monkeypatch):
    X, Y, top = design(30, 10, 3, seed=7)

    def stuck(sets, tol, coefficients, gaps, **_):
        gaps[:] = [0.0, 0.5, 0.1]

    monkeypatch.setattr(path, "settle", stuck)
    monkeypatch.setattr(path, "FEWEST_POINTS", 5)
    with pytest.raises(NotConvergedError, match=r"response 2 at penalty 1 .* 0.5") as caught:
        lasso_path_batch(X, Y, falling(top, 0.1, 4))
    assert (caught.value.gap, caught.value.response) == (0.5, 1)


def test_an_answer_that_does_not_fit_in_memory_is_refused(monkeypatch):
    X, Y, top = design(30, 10, 3, seed=8)
    monkeypatch.setattr(path, "MEMORY_BOUND", 2 * 8 * 4 * 10 * 3 - 1)
    with pytest.raises(InputError, match=r"^penalties: 4 penalties by 10 columns by 3 responses"):
        lasso_path_batch(X, Y, falling(top, 0.1, 4))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"penalties": [0.1, 0.2]}, "^penalties: none may be larger .* number 2"),
        ({"penalties": [0.1, 0.0]}, "^penalties: positive"),
        ({"penalties": [[0.1, 0.1]]}, "^penalties: one column or 1"),
        ({"penalties": ["high"]}, "^penalties: numbers"),
        ({"Y": [1.0, 2.0]}, "^Y: as many rows"),
        ({"X": np.full((3, 2), 1e200)}, "^X: magnitudes"),
        ({"tol": 2.0}, "^tol: "),
    ],
)
def test_bad_arguments_are_refused_by_name(change, message):
    call = {"X": np.eye(3)[:, :2], "Y": [1.0, 2.0, 3.0], "penalties": [0.2, 0.1], **change}
    with pytest.raises(InputError, match=message):
        lasso_path_batch(**call)
