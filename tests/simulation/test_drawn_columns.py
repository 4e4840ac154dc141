"""Tables drawn from a fitted column law against the tables it was fitted to (small versions of
tests/validation/column_law.py)."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from scantling.diagnostics.column_tails import column_tails
from scantling.diagnostics.volatility import Volatility
from scantling.law.column_copula import unit
from scantling.law.column_law import draw_joint, fit_column_law
from scantling.law.families import ErrorLaw, normal_law, student_law
from scantling.simulation.scores import centre, score_ratios

ROWS, COLUMNS, ERRORS, TABLES, SAMPLES = 400, 80, 20, 25, 4
Table = tuple[np.ndarray, np.ndarray]
Draw = Callable[[np.random.Generator], Table]


def volatile(rng: np.random.Generator, count: int) -> tuple[np.ndarray, np.ndarray]:
    """GARCH(1,1) (0.15, 0.80) errors on one path, and the path."""
    path, variance = np.empty(ROWS), 1.0
    first = rng.standard_normal(ROWS)
    for t, z in enumerate(first):
        path[t] = np.sqrt(variance)
        variance = 0.05 + (0.15 * z**2 + 0.80) * variance
    errors = path[:, None] * rng.standard_normal((ROWS, count))
    errors[:, 0] = path * first
    return errors, path


def known_path(path: np.ndarray) -> ErrorLaw:
    return ErrorLaw(
        innovation=normal_law(1.0).innovation,
        volatility=Volatility(
            omega=0.05, alpha=0.15, beta=0.8, innovation="normal", nu=None, persistence=0.95,
            tail_index=5.76, path=path, path_draws=path[None], log_likelihood=None,
        ),
    )  # fmt: skip


class Measured:
    """Score tails, largest correlations and largest score ratios of many tables."""

    def __init__(self, tables: list[Table], rng: np.random.Generator) -> None:
        peaks, twins, largest, sizes, gammas = [], [], [], [], []
        for number, (X, errors) in enumerate(tables):
            r = np.abs(X.T @ X / ROWS) - np.eye(COLUMNS)
            largest.append(float(r.max()))
            sizes.append(float(r.mean()))
            peaks.append(score_ratios(X, centre(errors), "plug-in")[0].max(axis=0))
            normal = centre(rng.standard_normal(errors.shape))
            twins.append(score_ratios(X, normal, "plug-in")[0].max(axis=0))
            if number % 5 == 0:
                scores = X * centre(errors)[:, :1]
                gammas.append(np.nanmedian(column_tails(scores, dependent=False).gamma))
        self.gamma = float(np.mean(gammas))
        self.ratio = float(np.quantile(peaks, 0.95) / np.quantile(twins, 0.95))
        self.correlation = float(np.median(largest))
        self.mean_correlation = float(np.mean(sizes))


def heavy(rng: np.random.Generator) -> Table:
    return unit(rng.standard_t(3, (ROWS, COLUMNS))), rng.standard_t(3, (ROWS, ERRORS))


def driven(rng: np.random.Generator) -> Table:
    factors = rng.standard_t(4, (ROWS, 2)) @ np.array([[0.6] * COLUMNS, [0.4, -0.4] * 40])
    X = unit(factors + 0.7 * rng.standard_t(4, (ROWS, COLUMNS)))
    return X, rng.standard_t(4, (ROWS, ERRORS))


def sparse(rng: np.random.Generator) -> Table:
    X = (rng.random((ROWS, COLUMNS)) < np.linspace(0.02, 0.05, COLUMNS)).astype(float)
    X[0] += X.max(axis=0) == 0
    return unit(X), rng.standard_t(3, (ROWS, ERRORS))


@pytest.mark.parametrize(
    ("draw", "df", "off", "wide"),
    [(heavy, 3, 0.16, 0.08), (driven, 4, 0.10, 0.05), (sparse, 3, 0.16, 0.06)],
)
def test_drawn_tables_behave_like_those_fitted_to(
    draw: Draw, df: float, off: float, wide: float
) -> None:
    """Means over samples; bounds are about three Monte Carlo errors."""
    rng = np.random.default_rng(1)
    truth = Measured([draw(rng) for _ in range(SAMPLES * TABLES)], rng)
    found = []
    for _ in range(SAMPLES):
        X, errors = draw(rng)
        law = student_law(df)
        fitted = fit_column_law(X, errors[:, 0], law, time_ordered=False)
        tables = [draw_joint(fitted, law, ROWS, ERRORS, rng) for _ in range(TABLES)]
        found.append(Measured(tables, rng))
    assert np.mean([m.gamma for m in found]) == pytest.approx(truth.gamma, abs=0.03)
    assert np.mean([m.ratio for m in found]) == pytest.approx(truth.ratio, rel=off)
    assert np.mean([m.correlation for m in found]) == pytest.approx(truth.correlation, abs=wide)
    mean = np.mean([m.mean_correlation for m in found])
    assert mean == pytest.approx(truth.mean_correlation, rel=0.08)


def test_common_volatility_raises_the_penalty_as_in_the_data() -> None:
    rng = np.random.default_rng(2)

    def draw() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        errors, path = volatile(rng, ERRORS)
        return unit(path[:, None] * rng.standard_normal((ROWS, COLUMNS))), errors, path

    truth = Measured([draw()[:2] for _ in range(SAMPLES * TABLES)], rng)
    ratios, apart = [], []
    for _ in range(SAMPLES):
        X, errors, path = draw()
        law = known_path(path)
        fitted = fit_column_law(X, errors[:, 0], law, time_ordered=True)
        assert fitted.exponent.mean() == pytest.approx(1, abs=0.25)
        tables = [draw_joint(fitted, law, ROWS, ERRORS, rng) for _ in range(TABLES)]
        ratios.append(Measured(tables, rng).ratio)
        loose = [(fitted.draw(ROWS, rng), law.draw((ROWS, ERRORS), rng)) for _ in range(TABLES)]
        apart.append(Measured(loose, rng).ratio)
    assert np.mean(ratios) == pytest.approx(truth.ratio, rel=0.12)
    # A control: the same columns with errors on paths of their own need no more than normal ones.
    assert np.mean(apart) < 1.06 < 1.12 < np.mean(ratios)
