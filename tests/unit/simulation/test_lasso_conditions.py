"""Optimality, invariance and refusals of the batched lasso."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtri

from scantling.errors import InputError
from scantling.simulation import active_set, lasso, working_set
from scantling.simulation.lasso import NotConvergedError, lasso_batch, solve_batch


def duality_gap(X, Y, weights, B):
    """The gap over ||y||^2/(2n), as primal minus dual."""
    n = len(Y)
    weights = np.broadcast_to(weights, B.shape)
    residual = Y - X @ B
    slope = np.abs(X.T @ residual / n)
    ratio = np.divide(slope, weights, out=np.zeros_like(slope), where=slope > 0)
    shrink = 1 / np.maximum(1, ratio.max(axis=0))
    power = (Y**2).sum(axis=0) / (2 * n)
    primal = (residual**2).sum(axis=0) / (2 * n) + (weights * np.abs(B)).sum(axis=0)
    dual = power - ((Y - shrink * residual) ** 2).sum(axis=0) / (2 * n)
    return (primal - dual) / np.where(power > 0, power, 1)


def awkward_columns(kind, n, p, rng):
    X = rng.standard_normal((n, p))
    if kind == "heavy":
        return rng.standard_t(2.2, (n, p))
    if kind == "scaled":
        return X * 10.0 ** rng.uniform(-6, 6, p)
    if kind == "duplicated":
        return X[:, rng.integers(0, p, p)] * rng.choice([-1.0, 1.0], p)
    if kind == "discrete":
        return rng.integers(-1, 2, (n, p)).astype(float)
    if kind == "sparse":
        return (rng.random((n, p)) < 0.05).astype(float)
    if kind == "factors":
        return rng.standard_normal((n, 2)) @ rng.standard_normal((2, p)) + 0.1 * X
    if kind == "steps":
        return np.cumsum(X, axis=0)
    return X


KINDS = ["normal", "heavy", "scaled", "duplicated", "discrete", "sparse", "factors", "steps"]


@settings(max_examples=120, deadline=None, derandomize=True)
@given(
    kind=st.sampled_from(KINDS),
    n=st.integers(2, 50),
    p=st.integers(1, 80),
    replicates=st.integers(1, 5),
    share=st.floats(-3.0, 0.1).map(lambda power: 10.0**power),
    tol=st.sampled_from([1e-3, 1e-6, 1e-9]),
    by_column=st.booleans(),
    seed=st.integers(0, 2**32 - 1),
)
def test_gap_and_optimality_conditions(kind, n, p, replicates, share, tol, by_column, seed):
    rng = np.random.default_rng(seed)
    X = awkward_columns(kind, n, p, rng)
    Y = rng.standard_t(2.2, (n, replicates)) * 10.0 ** rng.integers(-4, 5)
    penalties = share * np.abs(X.T @ Y).max(axis=0) / n + 1e-12
    weights = penalties * rng.uniform(0.5, 2, (p, 1)) if by_column else penalties
    B, gaps = solve_batch(X, Y, weights, tol=tol)
    assert (gaps <= tol).all()
    # The gap reported is the gap there is, and it bounds the error of the fit:
    # ||X(b - b*)||^2/(2n) <= gap.
    assert (np.abs(duality_gap(X, Y, weights, B) - gaps) <= 1e-3 * tol + 1e-11).all()
    exact, tight = solve_batch(X, Y, weights, tol=1e-10)
    assert (tight <= 1e-10).all()
    power = (Y**2).mean(axis=0)
    off = ((X @ (B - exact)) ** 2).mean(axis=0)
    assert (off <= (np.sqrt(tol) + np.sqrt(1e-10)) ** 2 * power).all()
    slope = X.T @ (Y - X @ exact) / n
    weights = np.broadcast_to(weights, slope.shape)
    room = 1e-5 * np.sqrt(power) * np.sqrt((X**2).mean(axis=0))[:, None]
    assert (np.abs(slope) <= weights + 2 * room).all()
    on = exact * np.sqrt((X**2).mean(axis=0))[:, None] > 1e-3 * np.sqrt(power)
    assert (np.abs(slope - weights)[on] <= 1e-1 * weights[on] + 2 * room[on]).all()


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("share", [0.05, 1e-3])
def test_dense_solutions_with_more_columns_than_rows_reach_the_gap(kind, share):
    rng = np.random.default_rng(20)
    X = awkward_columns(kind, 60, 150, rng)
    Y = rng.standard_t(2.2, (60, 3))
    penalties = share * np.abs(X.T @ Y).max(axis=0) / 60
    B = lasso_batch(X, Y, penalties)
    assert duality_gap(X, Y, penalties, B).max() <= 1.01e-6


def plug_in_problem(n=300, p=600, replicates=60, seed=21):
    rng = np.random.default_rng(seed)
    X = rng.standard_t(4, (n, p))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    errors = rng.standard_t(4, (n, replicates))
    Y = 0.3 * X[:, :8].sum(axis=1, keepdims=True) + errors
    penalty = 0.6 * ndtri(1 - 0.05 / (2 * p)) * np.sqrt((errors**2).mean(axis=0) / n)
    return X, Y, penalty


@pytest.mark.parametrize("tol", [1e-3, 1e-6])
def test_how_responses_are_split_does_not_matter(tol, monkeypatch):
    X, Y, penalty = plug_in_problem()
    whole = lasso_batch(X, Y, penalty, tol=tol)
    assert (whole != 0).sum(axis=0).mean() > 8
    alone = [lasso_batch(X, Y[:, [r]], penalty[[r]], tol=tol) for r in range(60)]
    np.testing.assert_allclose(np.hstack(alone), whole, atol=1e-9, rtol=0)
    monkeypatch.setattr(lasso, "BLOCK_CELLS", 17 * 600)
    monkeypatch.setattr(working_set, "BATCH_CELLS", 1000)
    monkeypatch.setattr(working_set, "PASS_CELLS", 5000)
    np.testing.assert_allclose(lasso_batch(X, Y, penalty, tol=tol), whole, atol=1e-9, rtol=0)


@pytest.mark.parametrize(
    ("module", "name", "value"),
    [
        (working_set, "GRAM_CELLS", 0),
        (working_set, "UNION_COLUMNS", 5),
        (active_set, "PACKED_ABOVE", 0),
        (active_set, "CAUTIOUS_AFTER", 0),
        (lasso, "ENTER_AT_ONCE", 1),
    ],
)
def test_every_way_through_gives_the_same_answer(module, name, value, monkeypatch):
    X, Y, penalty = plug_in_problem(replicates=12)
    usual = lasso_batch(X, Y, penalty, tol=1e-13)
    monkeypatch.setattr(module, name, value)
    np.testing.assert_allclose(lasso_batch(X, Y, penalty, tol=1e-13), usual, atol=1e-9, rtol=0)


def test_same_call_gives_the_same_bits():
    X, Y, penalty = plug_in_problem()
    assert lasso_batch(X, Y, penalty).tobytes() == lasso_batch(X, Y, penalty).tobytes()


def test_answers_scale_with_responses_and_columns():
    X, Y, penalty = plug_in_problem(replicates=10)
    usual = lasso_batch(X, Y, penalty, tol=1e-12)
    np.testing.assert_allclose(
        lasso_batch(X, -1e5 * Y, 1e5 * penalty, tol=1e-12), -1e5 * usual, atol=1e-4, rtol=0
    )
    np.testing.assert_allclose(
        lasso_batch(1e-4 * X, Y, 1e-4 * penalty, tol=1e-12), 1e4 * usual, atol=1e-5, rtol=0
    )
    order = np.random.default_rng(22).permutation(600)
    np.testing.assert_allclose(
        lasso_batch(X[:, order], Y, penalty, tol=1e-12), usual[order], atol=1e-9, rtol=0
    )


def test_a_start_changes_the_way_and_not_the_answer():
    X, Y, penalty = plug_in_problem(replicates=10)
    cold, _ = solve_batch(X, Y, penalty, tol=1e-13)
    near, _ = solve_batch(X, Y, 1.3 * penalty, tol=1e-3)
    warm, gaps = solve_batch(X, Y, penalty, tol=1e-13, start=near)
    far = -near
    far[:40] = 0.1
    wild, _ = solve_batch(X, Y, penalty, tol=1e-13, start=far)
    assert gaps.max() <= 1e-13
    np.testing.assert_allclose(warm, cold, atol=1e-9)
    np.testing.assert_allclose(wild, cold, atol=1e-9)
    kept, gaps = solve_batch(X, Y, penalty, tol=1e-6, start=cold)
    assert gaps.max() <= 1e-6
    np.testing.assert_array_equal(kept, cold)


def test_coordinate_descent_settles_what_the_sign_search_leaves(monkeypatch):
    X, Y, penalty = plug_in_problem(replicates=8)
    usual = lasso_batch(X, Y, penalty, tol=1e-9)

    def idle(gram, slopes, weights, start, slack):
        return start.copy(), np.zeros(len(gram), dtype=bool)

    monkeypatch.setattr(working_set, "solve_together", idle)
    np.testing.assert_allclose(lasso_batch(X, Y, penalty, tol=1e-9), usual, atol=1e-3)


def test_an_unreachable_gap_is_refused_and_carried(monkeypatch):
    X, Y, penalty = plug_in_problem(replicates=4)

    def idle(gram, slopes, weights, start, slack):
        return start.copy(), np.zeros(len(gram), dtype=bool)

    monkeypatch.setattr(working_set, "solve_together", idle)
    monkeypatch.setattr(working_set, "sweep_together", lambda g, s, w, b, k: (b.copy(), s.copy()))
    with pytest.raises(NotConvergedError, match=r"^penalty: response .* duality gap") as caught:
        lasso_batch(X, Y, penalty)
    gaps = duality_gap(X, Y, penalty, np.zeros((600, 4)))
    assert caught.value.gap == pytest.approx(gaps.max(), rel=1e-9)
    assert caught.value.response == np.argmax(gaps)


def test_nearly_dependent_columns_converge_or_say_how_far_they_came():
    x = np.linspace(0, 1, 100)[:, None]
    X = 1e4 + x ** np.arange(1, 25)
    Y = np.sin(9 * x) + np.random.default_rng(23).standard_normal((100, 2))
    try:
        B = lasso_batch(X, Y, 1e-9, tol=1e-12)
    except NotConvergedError as fault:
        assert 1e-12 < fault.gap < 1
    else:
        assert duality_gap(X, Y, 1e-9, B).max() <= 1e-10


def test_small_shapes_and_zero_data():
    one = lasso_batch([[1.0], [2.0]], [1.0, 3.0], 0.5, tol=1e-14)
    assert one.shape == (1, 1)
    assert one[0, 0] == pytest.approx((3.5 - 0.5) / 2.5, rel=1e-12)
    assert not lasso_batch(np.zeros((5, 3)), np.ones((5, 2)), 0.1).any()
    assert not lasso_batch(np.zeros((5, 3)), np.ones((5, 2)), 0.0).any()
    assert not lasso_batch(np.ones((5, 3)), np.zeros((5, 2)), 0.1).any()
    Y = np.column_stack([np.zeros(4), [1.0, 2.0, 3.0, 4.0], np.zeros(4)])
    B = lasso_batch(np.eye(4), Y, [0.1, 0.1, 0.0])
    assert not B[:, [0, 2]].any()
    assert B[:, 1].all()


def test_tables_are_accepted():
    X, Y, penalty = plug_in_problem(n=40, p=10, replicates=3)
    np.testing.assert_allclose(
        lasso_batch(pd.DataFrame(X), pd.DataFrame(Y), pd.Series(penalty)),
        lasso_batch(X, Y, penalty),
        atol=1e-12,
    )


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"X": [1.0, 2.0]}, "^X: a table"),
        ({"X": [["a", "b"]]}, "^X: numbers"),
        ({"X": [[1.0, np.nan], [0, 1], [1, 1]]}, "^X: finite values .* row 1, column 2"),
        ({"X": np.zeros((3, 0))}, "^X: a table"),
        ({"X": np.full((3, 2), 1e200)}, "^X: magnitudes"),
        ({"Y": [1.0, 2.0]}, "^Y: as many rows as X"),
        ({"Y": [1.0, np.inf, 2.0]}, "^Y: finite values"),
        ({"Y": [1e-170, 0.0, 0.0]}, "^Y: magnitudes"),
        ({"Y": np.zeros((3, 2, 2))}, "^Y: a table"),
        ({"penalty": -0.1}, "^penalty: finite numbers of 0 or more.*-0.1"),
        ({"penalty": np.nan}, "^penalty: finite"),
        ({"penalty": np.inf}, "^penalty: finite"),
        ({"penalty": [0.1, 0.2]}, "^penalty: one number or 1 of them"),
        ({"penalty": "large"}, "^penalty: numbers"),
        ({"tol": 0.0}, "^tol: "),
        ({"tol": "tight"}, "^tol: "),
    ],
)
def test_bad_arguments_are_refused_by_name(change, message):
    call = {"X": np.eye(3)[:, :2], "Y": [1.0, 2.0, 3.0], "penalty": 0.1, **change}
    with pytest.raises(InputError, match=message):
        lasso_batch(**call)
