"""Penalty rules for many responses against the same rules written out for one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import gammaln, ndtri
from sklearn.linear_model import LassoCV, LassoLarsIC

from scantling.errors import InputError
from scantling.simulation import rules
from scantling.simulation.huber import huber_batch
from scantling.simulation.lasso import lasso_batch
from scantling.simulation.losses import LOSSES, deviance, row_losses, walk_loss
from scantling.simulation.path import lasso_path_batch
from scantling.simulation.rules import RULES, fold_of_rows, select_batch
from scantling.simulation.square_root import square_root_batch


def problem(n=120, p=60, replicates=6, seed=1, df=4):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    errors = rng.standard_t(df, (n, replicates))
    errors -= errors.mean(axis=0)
    return X, X[:, :5] @ np.full((5, 1), 0.5) + errors, errors


def grid_of(X, Y, points=rules.GRID_POINTS, ratio=rules.GRID_RATIO):
    top = np.abs(X.T @ (Y - Y.mean(axis=0))).max(axis=0) / len(Y)
    return top * ratio ** (np.arange(points) / (points - 1))[:, None]


def until_patience_ends(values):
    """The least value's place, given up 20 points after the last improvement."""
    best = 0
    for step, value in enumerate(values):
        if step - best > 20:
            break
        if value < values[best]:
            best = step
    return best


def test_plug_in_and_self_normalised_levels_by_formula():
    X, Y, errors = problem()
    level = 1.1 * ndtri(1 - 0.05 / 120) / np.sqrt(120)
    found = select_batch(X, Y, rule="plug-in", errors=errors, tol=1e-10)
    rms = np.sqrt((errors**2).mean(axis=0))
    np.testing.assert_allclose(found.penalties, level * rms, rtol=1e-12)
    expected = lasso_batch(X, Y - Y.mean(axis=0), level * rms, tol=1e-10)
    np.testing.assert_allclose(found.coefficients, expected, atol=1e-8)
    np.testing.assert_array_equal(found.selected, expected != 0)
    found = select_batch(X, Y, rule="self-normalised", errors=errors, tol=1e-10)
    weights = level * np.sqrt((X**2).T @ errors**2 / 120)
    for r in range(6):
        own = lasso_batch(X / weights[:, [r]].T, Y[:, r] - Y[:, r].mean(), 1.0, tol=1e-10)
        np.testing.assert_allclose(found.coefficients[:, r], own[:, 0] / weights[:, r], atol=1e-6)


def test_levels_of_the_other_losses_by_formula():
    X, Y, errors = problem(df=2.5)
    level = 1.1 * ndtri(1 - 0.05 / 120) / np.sqrt(120)
    found = select_batch(X, Y, rule="plug-in", loss="square-root")
    np.testing.assert_allclose(found.penalties, level, rtol=1e-12)
    np.testing.assert_allclose(
        found.coefficients, square_root_batch(X, Y - Y.mean(axis=0), level), atol=1e-4
    )
    found = select_batch(X, Y, rule="plug-in", loss="huber", tau=1.5, errors=errors)
    clipped = np.sqrt((np.clip(errors, -1.5, 1.5) ** 2).mean(axis=0))
    np.testing.assert_allclose(found.penalties, level * clipped, rtol=1e-12)
    B, A = huber_batch(X, Y, level * clipped, tau=1.5)
    np.testing.assert_allclose(found.coefficients, B, atol=1e-4)
    np.testing.assert_allclose(found.intercepts, A, atol=1e-4)
    assert select_batch(X, Y, rule="plug-in", loss="absolute").penalties == pytest.approx(
        np.full(6, level)
    )
    # METHODS: lambda/n = (c/2) Phi^-1(1 - g/(2p)) / sqrt(n) for logistic loss.
    found = select_batch(X, (Y > 0).astype(float), rule="plug-in", loss="logistic")
    np.testing.assert_allclose(found.penalties, level / 2, rtol=1e-12)
    X = np.random.default_rng(3).standard_normal((500, 100))
    Y = (X[:, :1] > 0).astype(float)
    found = select_batch(X, Y, rule="self-normalised", loss="logistic")
    assert 500 * found.penalties[0] == pytest.approx(42.8076436, abs=1e-6)  # CHECKS 49


@pytest.mark.parametrize(("rule", "gamma"), [("bic", 0.0), ("extended-bic", 1.0)])
def test_information_criteria_by_hand_over_the_whole_grid(rule, gamma):
    X, Y, _ = problem()
    found = select_batch(X, Y, rule=rule, tol=1e-10)
    grid = grid_of(X, Y)
    centred = Y - Y.mean(axis=0)
    path = lasso_path_batch(X, centred, grid, tol=1e-10)
    for r in range(6):
        values = []
        for B in path[:, :, r]:
            k = np.count_nonzero(B)
            rss = ((centred[:, r] - X @ B) ** 2).sum()
            choose = gammaln(61) - gammaln(k + 1) - gammaln(61 - k)
            values.append(
                120 * np.log(rss / 120) + k * np.log(120) + 2 * gamma * choose
                if k <= 60
                else np.inf
            )
        best = until_patience_ends(values)
        assert found.penalties[r] == pytest.approx(grid[best, r], rel=1e-12)
        np.testing.assert_allclose(found.coefficients[:, r], path[best, :, r], atol=1e-7)


def test_bic_finds_about_what_lars_with_bic_finds():
    # scikit-learn's criterion needs the noise variance: with the true one the two differ little.
    X, Y, errors = problem(n=400, p=30, replicates=4)
    found = select_batch(X, Y, rule="bic")
    for r in range(4):
        fit = LassoLarsIC(criterion="bic", noise_variance=(errors[:, r] ** 2).mean())
        theirs = fit.fit(X, Y[:, r]).coef_ != 0
        assert (found.selected[:, r] != theirs).sum() <= 2
        assert found.selected[:5, r].all()


@pytest.mark.parametrize("time_ordered", [False, True])
def test_cross_validation_agrees_with_sklearn_on_the_same_folds(time_ordered):
    X, Y, _ = problem()
    found = select_batch(X, Y, rule="cross-validated", time_ordered=time_ordered, seed=7, tol=1e-10)
    sparse = select_batch(
        X, Y, rule="cross-validated-sparse", time_ordered=time_ordered, seed=7, tol=1e-10
    )
    fold = fold_of_rows(120, 5, time_ordered, 7)
    splits = [(np.flatnonzero(fold != k), np.flatnonzero(fold == k)) for k in range(5)]
    for r in range(6):
        grid = grid_of(X, Y)[:, r]
        theirs = LassoCV(alphas=grid, cv=splits, tol=1e-10, max_iter=10**6).fit(X, Y[:, r])
        assert found.penalties[r] == pytest.approx(theirs.alpha_, rel=1e-9)
        np.testing.assert_allclose(found.coefficients[:, r], theirs.coef_, atol=1e-5)
        assert found.intercepts[r] == pytest.approx(theirs.intercept_, abs=1e-6)
        errors = theirs.mse_path_
        mean, spread = errors.mean(axis=1), errors.std(axis=1, ddof=1) / np.sqrt(5)
        at = mean.argmin()
        within = np.flatnonzero(mean <= mean[at] + spread[at])[0]
        assert sparse.penalties[r] == pytest.approx(theirs.alphas_[within], rel=1e-9)
    assert (sparse.selected.sum(axis=0) <= found.selected.sum(axis=0)).all()
    assert sparse.selected.sum() < found.selected.sum()


def test_folds_are_blocks_in_time_and_random_otherwise():
    blocks = fold_of_rows(11, 4, True, 0)
    np.testing.assert_array_equal(blocks, [0, 0, 0, 1, 1, 1, 2, 2, 2, 3, 3])
    mixed = fold_of_rows(11, 4, False, 0)
    np.testing.assert_array_equal(np.sort(mixed), blocks)
    assert (np.diff(mixed) < 0).any()
    np.testing.assert_array_equal(mixed, fold_of_rows(11, 4, False, 0))
    assert (mixed != fold_of_rows(11, 4, False, 1)).any()
    for folds in (1, 12):
        with pytest.raises(InputError, match=f"^folds: 2 to 11 .* found {folds}"):
            fold_of_rows(11, folds, True, 0)


def test_how_responses_are_split_does_not_matter(monkeypatch):
    monkeypatch.setattr(rules, "GRID_POINTS", 15)
    X, Y, errors = problem(replicates=20)
    for rule in RULES:
        usual = select_batch(X, Y, rule=rule, errors=errors, tol=1e-11)
        with monkeypatch.context() as patch:
            patch.setattr(rules, "BLOCK_CELLS", 1)
            split = select_batch(X, Y, rule=rule, errors=errors, tol=1e-11)
        np.testing.assert_allclose(split.coefficients, usual.coefficients, atol=1e-7)
        np.testing.assert_allclose(split.penalties, usual.penalties, rtol=1e-12)


@pytest.mark.parametrize("loss", LOSSES)
@pytest.mark.parametrize("rule", RULES)
def test_every_rule_with_every_loss_finds_strong_columns(rule, loss, monkeypatch):
    monkeypatch.setattr(rules, "GRID_POINTS", 12)
    n = 400 if loss == "logistic" else 150
    X, Y, errors = problem(n=n, p=20, replicates=2, seed=5, df=6)
    Y = 2.0 * Y - 1.5 * errors
    if loss == "logistic":
        Y = (Y > 0).astype(float)
    found = select_batch(X, Y, rule=rule, loss=loss, errors=errors)
    assert found.selected[:5].mean() >= 0.9
    assert found.selected[5:].mean() < (0.7 if rule == "cross-validated" else 0.35)
    np.testing.assert_array_equal(found.selected, found.coefficients != 0)


def test_rules_do_not_depend_on_units_or_levels(monkeypatch):
    monkeypatch.setattr(rules, "GRID_POINTS", 15)
    X, Y, errors = problem()
    scale = 10.0 ** np.random.default_rng(6).uniform(-3, 3, 60)
    for rule in RULES:
        usual = select_batch(X, Y, rule=rule, errors=errors, tol=1e-10)
        moved = select_batch(X * scale + 3 * scale, 50 * Y + 9, rule=rule, errors=50 * errors,
                             tol=1e-10)  # fmt: skip
        np.testing.assert_array_equal(moved.selected, usual.selected)
        np.testing.assert_allclose(
            moved.coefficients * scale[:, None], 50 * usual.coefficients, atol=1e-4
        )


@pytest.mark.parametrize("rule", ["plug-in", "bic"])
def test_an_adaptive_second_stage_lets_large_coefficients_be(rule):
    X, Y, errors = problem(n=300, p=80, replicates=10)
    first = select_batch(X, Y, rule=rule, errors=errors)
    second = select_batch(X, Y, rule=rule, errors=errors, adaptive=True)
    assert second.coefficients[:5].mean() > first.coefficients[:5].mean() + 0.05
    assert second.selected[5:].sum() <= first.selected[5:].sum()


def test_losses_and_deviances_by_hand():
    Y, fitted = np.array([[1.0], [0.0], [1.0]]), np.array([[3.0], [0.5], [1.0]])
    for loss, expected in [
        ("squared", [4.0, 0.25, 0.0]),
        ("absolute", [2.0, 0.5, 0.0]),
        ("huber", [1.5, 0.125, 0.0]),
        ("logistic", np.log1p(np.exp([3.0, 0.5, 1.0])) - [3.0, 0.0, 1.0]),
    ]:
        np.testing.assert_allclose(row_losses(Y, fitted, loss, np.ones(1))[:, 0], expected)
    assert deviance(np.array([2.0]), 10, "absolute")[0] == pytest.approx(20 * np.log(2))
    assert deviance(np.array([2.0]), 10, "squared")[0] == pytest.approx(10 * np.log(2))
    assert deviance(np.array([0.4]), 10, "logistic")[0] == pytest.approx(8.0)


@pytest.mark.parametrize("loss", LOSSES)
def test_nothing_is_selected_at_the_top_of_a_grid(loss):
    X, Y, _ = problem(replicates=3)
    Y = (Y > 0).astype(float) if loss == "logistic" else Y
    tau = np.full(3, 1.5)
    top = np.abs(rules.null_scores(X, Y, loss, tau)).max(axis=0)
    one = np.ones((60, 1))
    steps = walk_loss(X, Y, np.array([1.02 * top, 0.7 * top]), one, loss=loss, tau=tau, tol=1e-8)
    (first, _), (second, _) = steps
    assert not first.any() and second.any(axis=0).all()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"rule": "aic"}, "^rule: one of plug-in, .* found 'aic'"),
        ({"loss": "cubic"}, "^loss: one of squared, .* found 'cubic'"),
        ({"errors": None}, "^errors: rule 'plug-in' needs the errors"),
        ({"errors": np.ones((120, 2))}, "^errors: shape"),
        ({"loss": "huber", "adaptive": True}, "^adaptive: only squared loss"),
        ({"loss": "huber", "tau": 0.0}, "^tau: positive"),
        ({"folds": 1}, "^folds: 2 to 120"),
    ],
)
def test_bad_arguments_are_refused_by_name(change, message):
    X, Y, errors = problem()
    with pytest.raises(InputError, match=message):
        select_batch(X, Y, **{"rule": "plug-in", "errors": errors, **change})
