"""The column law: what drawn tables must keep exactly, and its parts against closed forms."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtri, stdtr, stdtrit

from scantling.diagnostics.volatility import Volatility
from scantling.errors import InputError
from scantling.law.column_copula import autocorrelations, shrinkage, unit
from scantling.law.column_draw import recursion
from scantling.law.column_law import draw_blocks, draw_joint, fit_column_law
from scantling.law.column_lineage import Origin, instances, trace
from scantling.law.column_margins import (
    count_values,
    fit_margins,
    pooled,
    quantile_table,
    tail_shapes,
)
from scantling.law.families import ErrorLaw, normal_law, student_law
from scantling.law.shared_scale import CommonScale, exponents, log_mix, log_sizes, squeeze

NORMAL = normal_law(1.0)


def lagged(series: np.ndarray, lags: int) -> np.ndarray:
    """Lags 1 to `lags` of each column, side by side; `lags` rows are lost."""
    n = len(series) - lags
    parts = [series[lags - lag : lags - lag + n] for lag in range(1, lags + 1)]
    return unit(np.stack(parts, axis=2).reshape(n, -1))


def lag_origins(columns: int, lags: int) -> list[Origin]:
    return [(place // lags, place % lags + 1) for place in range(columns)]


def same(one: np.ndarray, two: np.ndarray) -> float:
    """Absolute correlation."""
    return abs(float(np.corrcoef(one, two)[0, 1]))


def garch_law(path: np.ndarray, alpha: float = 0.15, beta: float = 0.8) -> ErrorLaw:
    fitted = Volatility(
        omega=1 - alpha - beta, alpha=alpha, beta=beta, innovation="normal", nu=None,
        persistence=alpha + beta, tail_index=5.8, path=path, path_draws=path[None],
        log_likelihood=0.0,
    )  # fmt: skip
    return replace(NORMAL, volatility=fitted)


def garch_path(rng: np.random.Generator, n: int) -> tuple[np.ndarray, np.ndarray]:
    errors, path, variance = np.empty(n), np.empty(n), 1.0
    for t, z in enumerate(rng.standard_normal(n)):
        path[t] = math.sqrt(variance)
        errors[t] = path[t] * z
        variance = 0.05 + 0.15 * errors[t] ** 2 + 0.8 * variance
    return errors, path


@settings(max_examples=25, deadline=None)
@given(
    n=st.integers(30, 80), p=st.integers(1, 12), rows=st.integers(20, 90),
    seed=st.integers(0, 1000), ordered=st.booleans(),
)  # fmt: skip
def test_tables_are_standardised_and_repeatable(
    n: int, p: int, rows: int, seed: int, ordered: bool
) -> None:
    rng = np.random.default_rng(seed)
    X = unit(rng.standard_t(3, (n, p)))
    law = fit_column_law(X, rng.standard_normal(n), NORMAL, time_ordered=ordered)
    one, two = (law.draw(rows, np.random.default_rng(seed + 1)) for _ in range(2))
    assert one.shape == (rows, p)
    assert np.array_equal(one, two)
    assert np.abs(one.mean(axis=0)).max() < 1e-10
    assert np.abs((one**2).mean(axis=0) - 1).max() < 1e-10


def test_lags_stay_lags() -> None:
    rng = np.random.default_rng(1)
    X = lagged(rng.standard_t(4, (210, 3)), 4)
    law = fit_column_law(
        X, rng.standard_normal(206), NORMAL, time_ordered=True, lag_groups=lag_origins(12, 4)
    )
    assert law.lineage.source.size == 3
    D = law.draw(150, rng)
    for series in range(3):
        for lag in range(1, 4):
            now, before = D[:, 4 * series + lag - 1], D[:, 4 * series + lag]
            assert same(now[:-1], before[1:]) > 1 - 1e-10
    assert same(D[:, 0], D[:, 4]) < 0.4


def test_powers_stay_powers() -> None:
    rng = np.random.default_rng(2)
    x = unit(rng.standard_t(4, (200, 2)))
    X = unit(np.column_stack([x, x**2, x[:, 0] ** 3]))
    groups = [(0, 0, 1), (1, 0, 1), (0, 0, 2), (1, 0, 2), (0, 0, 3)]
    law = fit_column_law(X, rng.standard_normal(200), NORMAL, time_ordered=False, lag_groups=groups)
    D = law.draw(300, rng)
    assert same(D[:, 2], D[:, 0] ** 2) > 1 - 1e-10
    assert same(D[:, 3], D[:, 1] ** 2) > 1 - 1e-10
    assert same(D[:, 4], D[:, 0] ** 3) > 1 - 1e-10


def test_a_power_without_its_base_is_a_series_of_its_own() -> None:
    rng = np.random.default_rng(3)
    X = unit(rng.standard_normal((60, 2)))
    lineage = trace(X, [(0, 0, 1), (7, 0, 2)])
    assert lineage.source.tolist() == [0, 1]
    assert lineage.power.tolist() == [1, 1]


def test_dummies_keep_their_values_and_shares() -> None:
    rng = np.random.default_rng(4)
    raw = np.zeros((400, 40))
    for j in range(40):
        raw[rng.choice(400, j % 8 + 1, replace=False), j] = 1.0
    raw[:, 0] = rng.integers(-1, 2, 400)
    law = fit_column_law(unit(raw), rng.standard_normal(400), NORMAL, time_ordered=False)
    D = law.draw(400, rng)
    assert [np.unique(column).size for column in D.T] == [3, *[2] * 39]
    active = (D > 0).sum(axis=0)[1:]
    assert np.abs(active - (raw[:, 1:] > 0).sum(axis=0)).max() <= 1
    few = law.draw(30, rng)  # most have no active row there, and yet vary
    assert np.abs((few**2).mean(axis=0) - 1).max() < 1e-10


def test_sparse_columns_stay_sparse_and_atoms_stay_atoms() -> None:
    rng = np.random.default_rng(5)
    raw = rng.standard_t(3, (500, 2))
    raw[rng.random(500) < 0.97, 0] = 0.0
    raw[rng.random(500) < 0.40, 1] = 0.0
    law = fit_column_law(unit(raw), rng.standard_normal(500), NORMAL, time_ordered=False)
    kinds = count_values(law.draw(2000, rng))
    truth = (raw != 0).mean(axis=0)
    assert kinds.active[0] == pytest.approx(truth[0], abs=0.001)
    assert kinds.active[1] == pytest.approx(truth[1], abs=0.05)


def test_picked_columns() -> None:
    rng = np.random.default_rng(6)
    X = lagged(rng.standard_t(4, (103, 2)), 3)
    law = fit_column_law(
        X, rng.standard_normal(100), NORMAL, time_ordered=True, lag_groups=lag_origins(6, 3)
    )
    D = law.draw(100, rng, pick=[0, 1, 0, 1, 4])
    assert same(D[:-1, 0], D[1:, 1]) > 1 - 1e-10
    assert same(D[:-1, 2], D[1:, 3]) > 1 - 1e-10
    assert same(D[:, 0], D[:, 2]) < 0.5
    series, copies, where = instances(law.lineage, np.array([0, 1, 0, 1, 4]))
    assert series.tolist() == [0, 1, 0] and copies.tolist() == [0, 0, 1]
    assert where.tolist() == [0, 0, 2, 2, 1]
    for bad in ([], [6], [-1], [0.5], [[0]]):
        with pytest.raises(InputError, match="pick"):
            law.draw(100, rng, pick=bad)


def test_blocks_hold_whole_series_and_depend_on_their_number_only() -> None:
    rng = np.random.default_rng(7)
    X = lagged(rng.standard_t(4, (103, 5)), 3)
    law = fit_column_law(
        X, rng.standard_normal(100), NORMAL, time_ordered=True, lag_groups=lag_origins(15, 3)
    )
    setting = law.setting(NORMAL, 60, rng)
    parts = list(draw_blocks(law, setting, 40, seed=3, size=7))
    assert [part.shape[1] for part in parts] == [9, 9, 9, 9, 4]
    again = list(draw_blocks(law, setting, 20, seed=3, size=7))
    assert np.array_equal(again[1], parts[1])
    for part in parts[:4]:
        for first in (0, 3, 6):
            assert same(part[:-1, first], part[1:, first + 1]) > 1 - 1e-10


def test_own_lags_hold_the_errors_drawn_with_them() -> None:
    rng = np.random.default_rng(8)
    errors, path = garch_path(rng, 605)
    X = lagged(errors[:, None], 5)
    law = garch_law(path[5:])
    fitted = fit_column_law(X, errors[5:], law, time_ordered=True, lag_groups=lag_origins(5, 5))
    assert fitted.copula.error_share[0] == pytest.approx(1, abs=0.01)
    assert fitted.exponent[0] == pytest.approx(1, abs=0.02)
    D, E = draw_joint(fitted, law, 600, 3, rng)
    assert same(D[5:, 0], E[4:-1, 0]) > 0.99
    assert same(D[5:, 0], E[4:-1, 1]) < 0.2


def test_a_stated_volatility_is_run_over_the_errors_at_hand() -> None:
    """The recursion on errors, line by line; and the same on their innovations."""
    rng = np.random.default_rng(20)
    errors, path = garch_path(rng, 300)
    fitted = replace(garch_law(np.ones(1)).volatility, leverage=0.0)
    assert recursion(fitted, errors**2, errors) == pytest.approx(path)
    z = errors / path
    assert recursion(fitted, z**2, z, unit=True) == pytest.approx(path)
    levered = replace(fitted, alpha=0.10, leverage=0.10)
    variance = np.ones(300)
    for t in range(1, 300):
        weight = 0.10 + (0.10 if errors[t - 1] < 0 else 0.0)
        variance[t] = 0.05 + weight * errors[t - 1] ** 2 + 0.8 * variance[t - 1]
    assert recursion(levered, errors**2, errors) == pytest.approx(np.sqrt(variance))
    X = unit(path[:, None] * rng.standard_normal((300, 40)))
    law = replace(NORMAL, volatility=fitted)
    assert fit_column_law(X, errors, law, time_ordered=True).exponent.mean() > 0.7


def test_own_lags_hold_errors_linked_to_the_columns_too() -> None:
    rng = np.random.default_rng(21)
    mix = np.sqrt(4 / rng.chisquare(4, (602, 1)))
    errors = mix * rng.standard_normal((602, 1))
    others = mix * rng.standard_normal((602, 30))
    X = lagged(np.column_stack([errors, others]), 2)
    fitted = fit_column_law(
        X, errors[2:, 0], student_law(4), time_ordered=True, lag_groups=lag_origins(62, 2)
    )
    assert fitted.copula.scale.errors > 0.25
    D, E = draw_joint(fitted, student_law(4), 600, 2, rng)
    assert same(D[5:, 0], E[4:-1, 0]) > 0.98
    assert same(D[5:, 0], E[4:-1, 1]) < 0.2


def test_errors_are_untouched_where_nothing_is_shared() -> None:
    rng = np.random.default_rng(9)
    X = unit(rng.standard_normal((200, 20)))
    fitted = fit_column_law(X, rng.standard_t(3, 200), student_law(3), time_ordered=False)
    assert not fitted.shares_path and not fitted.copula.scale.errors
    _, E = draw_joint(fitted, student_law(3), 5000, 40, rng)
    for p in (0.001, 0.05, 0.5, 0.95, 0.999):
        assert float((stdtrit(3, p) > E).mean()) == pytest.approx(p, abs=4 * 0.0012)


def test_linked_errors_keep_their_law_and_are_large_with_the_columns() -> None:
    rng = np.random.default_rng(10)
    mix = np.sqrt(4 / rng.chisquare(4, (600, 1)))
    X, e = unit(mix * rng.standard_normal((600, 80))), (mix * rng.standard_normal((600, 1)))[:, 0]
    fitted = fit_column_law(X, e, student_law(4), time_ordered=False)
    scale = fitted.copula.scale
    # t(4): sd of ln sqrt(4/chi^2) is sqrt(psi'(2))/2 = 0.4015.
    assert scale.heavy
    assert scale.shared == pytest.approx(0.4015, abs=0.07)
    assert scale.errors == pytest.approx(0.4015, abs=0.15)
    D, E = draw_joint(fitted, student_law(4), 4000, 20, rng)
    for p in (0.001, 0.05, 0.95, 0.999):  # rows share a scale: 4000 of them count, not 80000
        assert float((stdtrit(4, p) > E).mean()) == pytest.approx(p, abs=0.006)
    sizes = log_sizes(D).mean(axis=1)
    assert np.corrcoef(sizes, log_sizes(E).mean(axis=1))[0, 1] > 0.4


def test_squeeze_is_the_t_copula() -> None:
    """Exact: with df = 4 the scale of sd sqrt(psi'(2))/2 gives T(w) = Phi^-1(F_4(w))."""
    scale = math.sqrt(math.pi**2 / 6 - 1) / 2
    law = CommonScale(shared=scale, own=0.0, persistence=0.0, errors=0.0, heavy=True)
    points, values = squeeze(law)
    w = np.array([0.1, 0.5, 1.0, 3.0, 10.0, 30.0])
    # The log scale is ln sqrt(df/chi^2), so that exp of it times z is Student itself.
    expected = -ndtri(stdtr(4, -w))
    assert np.interp(w, points, values) == pytest.approx(expected, abs=2e-3)
    assert float(log_mix(np.array([0.0]), scale, True)[0]) == pytest.approx(
        0.5 * math.log(4 / 3.356694),
        abs=1e-6,  # median of chi^2(4): 3.356694
    )


def test_shrinkage_agrees_with_scikit_learn() -> None:
    from sklearn.covariance import ledoit_wolf

    rng = np.random.default_rng(11)
    for n, p in ((50, 8), (40, 90)):
        X = unit(rng.standard_normal((n, p)) + rng.standard_normal((n, 1)))
        assert shrinkage(X) == pytest.approx(ledoit_wolf(X, assume_centered=True)[1], rel=1e-10)


def test_tails_of_exact_student_quantiles() -> None:
    """Fitted to the mid-quantiles of t(3), the law's far quantiles are t(3)'s."""
    n = 1000
    sample = stdtrit(3, (np.arange(n) + 0.5) / n)[:, None]
    gamma = tail_shapes(sample)
    assert gamma[:, 0] == pytest.approx(1 / 3, abs=0.02)
    table = quantile_table(sample, gamma)[0]
    grid = np.linspace(-9, 9, table.size)
    for p in (0.5, 0.9, 0.99, 0.999, 1e-4, 1e-5):
        assert np.interp(ndtri(p), grid, table) == pytest.approx(
            stdtrit(3, p), rel=0.06, abs=0.01
        ), p


def test_tails_of_exact_normal_quantiles() -> None:
    sample = ndtri((np.arange(500) + 0.5) / 500)[:, None]
    assert tail_shapes(sample).max() < 0.03
    table = quantile_table(sample, tail_shapes(sample))[0]
    grid = np.linspace(-9, 9, table.size)
    assert np.abs(table - grid)[np.abs(grid) < 4.5].max() < 0.25


def test_each_side_has_its_own_tail() -> None:
    rng = np.random.default_rng(12)
    X = np.exp(rng.standard_normal((1000, 30)))
    left, right = fit_margins(X, count_values(X)).gamma
    assert left.max() < 0.1 < 0.25 < right.min()


def test_pooled_estimates() -> None:
    values = np.array([0.1, 0.2, 0.3, 0.4])
    assert pooled(values, np.full(4, 1.0)) == pytest.approx(np.full(4, 0.25))
    assert pooled(values, np.full(4, 1e-6)) == pytest.approx(values, abs=1e-9)
    # variance 1/60, error variance 1/120: half way.
    half = pooled(values, np.full(4, math.sqrt(1 / 120)))
    assert half == pytest.approx(0.25 + (values - 0.25) / 2)


def test_exponents_of_a_known_path() -> None:
    rng = np.random.default_rng(13)
    path = np.exp(0.5 * rng.standard_normal(800))
    z = rng.standard_normal((800, 40))
    assert exponents(path[:, None] ** 0.8 * z, path).mean() == pytest.approx(0.8, abs=0.05)
    assert not exponents(z, path).any()
    mixed = z * np.where(np.arange(40) < 20, path[:, None], 1.0)
    found = exponents(mixed, path)
    assert found[:20].mean() == pytest.approx(1, abs=0.12)
    assert found[20:].mean() < 0.15


def test_autocorrelations() -> None:
    rng = np.random.default_rng(14)
    x = rng.standard_normal((600, 30))
    for t in range(1, 600):
        x[t] += 0.6 * x[t - 1]
    found = autocorrelations(unit(x))
    assert found.mean() == pytest.approx(0.6, abs=0.02)
    assert found.std() < 0.03
    assert autocorrelations(unit(np.cumsum(x, axis=0))).max() <= 0.99
    assert not autocorrelations(unit(rng.standard_normal((600, 30)))).any()


def test_serial_dependence_is_drawn() -> None:
    rng = np.random.default_rng(15)
    x = rng.standard_t(4, (600, 10))
    for t in range(1, 600):
        x[t] += 0.7 * x[t - 1]
    fitted = fit_column_law(unit(x), rng.standard_normal(600), NORMAL, time_ordered=True)
    D = fitted.draw(3000, rng)
    assert (D[1:] * D[:-1]).mean() == pytest.approx(0.7, abs=0.05)
    shuffled = fit_column_law(unit(x), rng.standard_normal(600), NORMAL, time_ordered=False)
    D = shuffled.draw(3000, rng)
    assert abs((D[1:] * D[:-1]).mean()) < 0.03


def test_close_pairs_and_factors_are_drawn_at_more_columns_than_rows() -> None:
    rng = np.random.default_rng(16)
    raw = rng.standard_normal((120, 200))
    raw[:, 1] = 0.9 * raw[:, 0] + math.sqrt(1 - 0.81) * raw[:, 1]
    fitted = fit_column_law(unit(raw), rng.standard_normal(120), NORMAL, time_ordered=False)
    assert [c.members.tolist() for c in fitted.copula.clusters] == [[0, 1]]
    D = fitted.draw(2000, rng)
    assert float(np.corrcoef(D[:, 0], D[:, 1])[0, 1]) == pytest.approx(0.9, abs=0.04)
    raw += rng.standard_normal((120, 1))
    fitted = fit_column_law(unit(raw), rng.standard_normal(120), NORMAL, time_ordered=False)
    D = fitted.draw(2000, rng)
    inner = np.corrcoef(D[:, 10:].T)[np.triu_indices(190, 1)]
    assert inner.mean() == pytest.approx(0.5, abs=0.06)


def test_refusals() -> None:
    rng = np.random.default_rng(17)
    X, e = unit(rng.standard_normal((50, 3))), rng.standard_normal(50)
    flat = X.copy()
    flat[:, 1] = 0.0
    path = garch_law(np.ones(40))
    cases = (
        (X[:20], e[:20], NORMAL, None, "X: at least 30 rows"),
        (X, e[:40], NORMAL, None, "residuals: at least 50"),
        (X, np.append(e, 1.0), NORMAL, None, "residuals: one value for each of 50"),
        (X, e, path, None, "law: one value for each of 50"),
        (flat, e, NORMAL, None, "column 2 is constant"),
        (X, e, NORMAL, [(0, 1), (0, 2)], "lag_groups: one entry a column"),
        (X, e, NORMAL, [(0, 1), (0, 2), (1, 1)], "column 2 is not column 1 lagged by 1"),
        (X, e, NORMAL, [(0, 1), (0, 1), (1, 1)], "lag_groups: distinct"),
        (X, e, NORMAL, [(0, 1), (1, 30), (2, 1)], "column 2 has lag 30"),
    )
    for columns, errors, law, groups, message in cases:
        with pytest.raises(InputError, match=message):
            fit_column_law(columns, errors, law, time_ordered=True, lag_groups=groups)
    fitted = fit_column_law(X, e, NORMAL, time_ordered=False)
    with pytest.raises(InputError, match="rows: at least 2"):
        fitted.draw(1, rng)


def test_log_sizes_of_correlated_normals() -> None:
    """Exact: cov(ln|x|, ln|y|) = arcsin(r)^2/2 for standard normals of correlation r."""
    rng = np.random.default_rng(18)
    z = rng.standard_normal((400_000, 2))
    y = 0.8 * z[:, 0] + 0.6 * z[:, 1]
    found = float(np.cov(np.log(np.abs(z[:, 0])), np.log(np.abs(y)))[0, 1])
    assert found == pytest.approx(math.asin(0.8) ** 2 / 2, abs=0.01)
