"""The cross-fitted pilot: near the true errors, blind to noise, unmoved by one outlier."""

from __future__ import annotations

import numpy as np
import pytest

from scantling.diagnostics import residuals
from scantling.diagnostics.residuals import (
    FOLDS,
    fit_pilot,
    fitted_level,
    fold_labels,
    levelled_residuals,
    student_regression,
    textbook_residuals,
)
from scantling.errors import InputError


def design(seed: int, n: int = 300, p: int = 800) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Columns and errors t(3); five columns of effect 0.3 sd of the error."""
    rng = np.random.default_rng(seed)
    X = rng.standard_t(3, (n, p))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    e = rng.standard_t(3, n)
    return X, X[:, :5].sum(axis=1) * 0.3 * np.sqrt(3) + e, e


@pytest.mark.parametrize("seed", [1, 4, 5])
def test_residuals_are_close_to_the_errors(seed: int) -> None:
    X, y, e = design(seed)
    found = fit_pilot(X, y, time_ordered=False, seed=1)
    assert set(found.selected) == {0, 1, 2, 3, 4}
    assert np.corrcoef(found.values, e)[0, 1] > 0.95
    assert found.explained == pytest.approx(1 - e.var() / y.var(), abs=0.06)
    assert found.sd == pytest.approx(e.std(), rel=0.05)
    assert found.response_sd == pytest.approx(y.std())
    # Out-of-fold predictions and residuals add up, up to the residuals' mean.
    gap = y - found.fitted - found.values
    assert np.ptp(gap) < 1e-10
    assert abs(found.values.mean()) < 1e-12


def test_no_signal_leaves_the_centred_response() -> None:
    X, _, e = design(1)
    found = fit_pilot(X, e, time_ordered=False, seed=1)
    assert found.explained == 0
    assert found.values == pytest.approx(e - e.mean(), abs=1e-12)
    assert (found.fitted == e.mean()).all()


@pytest.mark.parametrize("seed", [3, 4])
def test_one_huge_outlier_changes_no_other_residual_much(seed: int) -> None:
    X, y, e = design(seed, p=300)
    y[7] += 1e4
    found = fit_pilot(X, y, time_ordered=True, seed=1)
    assert set(found.selected) >= {0, 1, 2, 3, 4}
    others = np.arange(300) != 7
    assert np.corrcoef(found.values[others], e[others])[0, 1] > 0.95
    assert found.values[7] == pytest.approx(1e4, rel=0.01)


def test_help_is_judged_by_absolute_errors() -> None:
    rng = np.random.default_rng(2)
    signal, e = rng.standard_normal((2, 400))
    y = signal + e
    assert residuals.helps(y, e)
    assert not residuals.helps(e, e)
    assert not residuals.helps(e, e + 0.05 * signal)
    y[3], rest = 1e6, e.copy()
    rest[3] = 1e6 + 1  # the squares alone would say that the fit does harm
    assert np.var(rest) > np.var(y)
    assert residuals.helps(y, rest)


@pytest.mark.parametrize("n", [30, 101, 300])
def test_folds(n: int) -> None:
    ordered = fold_labels(n, time_ordered=True, seed=1)
    assert (np.diff(ordered) >= 0).all()
    shuffled = fold_labels(n, time_ordered=False, seed=1)
    assert not (np.diff(shuffled) >= 0).all()
    assert np.array_equal(shuffled, fold_labels(n, time_ordered=False, seed=1))
    assert not np.array_equal(shuffled, fold_labels(n, time_ordered=False, seed=2))
    for labels in (ordered, shuffled):
        counts = np.bincount(labels, minlength=FOLDS)
        assert counts.size == FOLDS
        assert counts.max() - counts.min() <= 1


def test_the_kind_of_folds_is_recorded_and_used() -> None:
    X, y, _ = design(1, n=120, p=8)
    ordered = fit_pilot(X, y, time_ordered=True, seed=1)
    shuffled = fit_pilot(X, y, time_ordered=False, seed=1)
    assert (ordered.folds, shuffled.folds) == ("contiguous", "random")
    assert not np.allclose(ordered.values, shuffled.values)
    assert np.array_equal(ordered.values, fit_pilot(X, y, time_ordered=True, seed=9).values)


def test_a_row_has_no_part_in_its_own_prediction() -> None:
    X, y, _ = design(1, n=120, p=8)
    first = fit_pilot(X, y, time_ordered=True, seed=1).fitted
    y[3] += 5
    second = fit_pilot(X, y, time_ordered=True, seed=1).fitted
    assert second[:12] == pytest.approx(first[:12], rel=1e-12)  # the first of ten folds
    assert not np.allclose(second[12:], first[12:], rtol=1e-12)


def test_rescaling_the_response_rescales_the_residuals() -> None:
    X, y, _ = design(1, n=150, p=20)
    plain = fit_pilot(X, y, time_ordered=True, seed=1)
    scaled = fit_pilot(X, 1e-6 * y, time_ordered=True, seed=1)
    assert scaled.values == pytest.approx(1e-6 * plain.values, rel=1e-7)
    assert scaled.explained == pytest.approx(plain.explained, rel=1e-7)
    assert scaled.selected == plain.selected


def test_predictions_carry_the_level_of_the_response() -> None:
    X, y, _ = design(1, n=150, p=20)
    plain = fit_pilot(X, y, time_ordered=True, seed=1)
    raised = fit_pilot(X, y + 50, time_ordered=True, seed=1)
    assert raised.fitted == pytest.approx(plain.fitted + 50, rel=1e-6)
    assert raised.values == pytest.approx(plain.values, abs=1e-6)


def test_student_regression_is_the_maximum_of_its_likelihood() -> None:
    from scipy.optimize import minimize
    from scipy.stats import t as student

    rng = np.random.default_rng(6)
    X = rng.standard_normal((400, 2))
    y = 1 + X @ np.array([2.0, -1.0]) + rng.standard_t(4, 400)
    design_rows = np.column_stack([np.ones(400), X])

    def negative(parameters: np.ndarray) -> float:
        rest = y - design_rows @ parameters[:3]
        return -float(student.logpdf(rest, 4, 0, np.exp(parameters[3])).sum())

    best = minimize(negative, np.zeros(4), method="Nelder-Mead",
                    options={"maxiter": 4000, "xatol": 1e-8, "fatol": 1e-10})  # fmt: skip
    found, weights = residuals.student_regression(X, y)
    assert found == pytest.approx(best.x[:3], abs=1e-4)
    assert weights.max() <= 1.25 + 1e-9  # (df + 1)/df at a residual of 0


@pytest.mark.parametrize(
    ("y", "words"),
    [
        (np.full(60, 3.0), "response: constant"),
        (np.zeros(60), "response: constant"),
        (np.arange(60.0) * 1e200, "response: a largest size between"),
        (np.arange(60.0) * 1e-200, "response: a largest size between"),
    ],
)
def test_a_response_with_nothing_to_explain_is_refused(y: np.ndarray, words: str) -> None:
    with pytest.raises(InputError, match=words):
        fit_pilot(design(1, n=60, p=3)[0], y, time_ordered=True, seed=1)


def test_a_perfect_fit_and_collinear_columns_are_answered() -> None:
    X, y, _ = design(1, n=100, p=4)
    doubled = np.column_stack([X, X[:, :2], np.zeros(100)])
    found = fit_pilot(doubled, X[:, 0] * 2 + 1, time_ordered=True, seed=1)
    assert found.explained == pytest.approx(1, abs=1e-9)
    noisy = fit_pilot(doubled, y, time_ordered=True, seed=1)
    assert np.isfinite(noisy.values).all()


def test_levelled_residuals_are_those_of_all_rows_over_the_root_of_what_leverage_leaves() -> None:
    X, y, _ = design(1)
    found = fit_pilot(X, y, time_ordered=False, seed=1)
    chosen = X[:, list(found.selected)]
    coefficients, _ = student_regression(chosen, found.fitted + found.values)
    plain = found.fitted + found.values - coefficients[0] - chosen @ coefficients[1:]
    rows = np.column_stack([np.ones(300), chosen])
    hat = rows @ np.linalg.solve(rows.T @ rows, rows.T)
    expected = plain / np.sqrt(1 - np.diag(hat))
    assert levelled_residuals(X, found) == pytest.approx(expected - expected.mean(), abs=1e-9)


def test_a_pilot_that_does_not_help_leaves_residuals_as_they_are() -> None:
    rng = np.random.default_rng(2)
    X, y = rng.standard_normal((200, 20)), rng.standard_t(3, 200)
    found = fit_pilot((X - X.mean(axis=0)) / X.std(axis=0), y, time_ordered=False, seed=1)
    assert found.explained == 0
    assert np.array_equal(levelled_residuals(X, found), found.values)
    assert np.array_equal(textbook_residuals(X, found), found.values)


def test_a_row_that_a_column_has_for_itself_has_no_residual() -> None:
    """Leverage 1 there: 0 over 0 without a floor."""
    column = np.zeros((50, 1))
    column[7] = 1
    found = fitted_level(column, np.random.default_rng(3).standard_normal(50))
    assert np.isfinite(found).all()
    assert abs(found[7] - found.mean()) < 0.2


def test_textbook_residuals_are_those_of_least_squares_on_all_rows() -> None:
    X, y, _ = design(4)
    found = fit_pilot(X, y, time_ordered=False, seed=1)
    left = textbook_residuals(X, found)
    chosen = X[:, list(found.selected)]
    # Orthogonal to the columns and the constant, and no further from the response than any fit.
    assert np.abs(chosen.T @ left).max() < 1e-9 * 300
    assert abs(left.sum()) < 1e-9
    assert (left**2).sum() < (found.values**2).sum()
