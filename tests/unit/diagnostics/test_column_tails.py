"""Tails of many series: agreement with the single series, odd columns, Holm."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.stats.multitest import multipletests

from scantling.diagnostics.column_tails import (
    COLUMNS_PER_PASS,
    column_tails,
    holm_rejections,
)
from scantling.diagnostics.tail_estimators import hill, weighted_hill
from scantling.diagnostics.tail_index import (
    block_length,
    hill_count,
    magnitudes,
    one_side,
    tail_index,
)


def students(n: int, width: int, df: float = 3, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).standard_t(df, (n, width))


def test_clean_columns_have_the_single_series_estimates() -> None:
    columns = students(300, 6) * np.array([1, 10, 0.1, 1e6, 1e-6, 3])
    many = column_tails(columns, dependent=True)
    for j in range(6):
        one = tail_index(columns[:, j])
        assert many.gamma[j] == pytest.approx(one.gamma, rel=1e-12)
        assert many.hill_gamma[j] == pytest.approx(one.hill_gamma, rel=1e-12)
        assert many.p_value[j] == pytest.approx(one.p_value, rel=1e-12)
        assert many.error[j] == pytest.approx(one.gamma_error, rel=1e-9)
        assert many.hill_error[j] == pytest.approx(one.hill_error, rel=1e-9)
        assert many.interval(j) == pytest.approx((one.low, one.high), rel=1e-9)
    assert many.threshold_count == one.threshold_count
    assert many.refused == ()
    assert many.assessed.all()


@pytest.mark.parametrize("n", [30, 40, 49])
def test_in_a_short_sample_one_row_is_no_mode(n: int) -> None:
    """One row is then more than 2 % of them."""
    columns = students(n, 3)
    columns[0, 0] = 0.0
    many = column_tails(columns, dependent=False)
    assert many.gamma == pytest.approx([tail_index(column).gamma for column in columns.T])
    assert tail_index(columns[:, 0]).rows == n


def bootstrap_errors(x: np.ndarray, draws: int = 199) -> tuple[float, float]:
    """Errors of the weighted Hill and of Hill by the circular moving-block bootstrap.

    Blocks of ceil(n^0.6) rows from uniform starts on the circle, each draw taken about its own
    median: the plain twin of the closed form.
    """
    n, block = x.size, block_length(x.size)
    starts = np.random.default_rng(11).integers(0, n, (draws, -(-n // block), 1))
    rows = (starts + np.arange(block)).reshape(draws, -1)[:, :n] % n
    ordered = np.sort(magnitudes(x[rows].T, "both"), axis=0)[: -n // 2 - 2 : -1]
    ordered = np.maximum(ordered, np.finfo(float).tiny)
    plain = hill(ordered, hill_count(n)).std(ddof=1)
    floor = float(hill(one_side(x, "both"), hill_count(n))) / np.sqrt(hill_count(n))
    return float(weighted_hill(ordered, n // 2).std(ddof=1)), max(float(plain), floor)


@pytest.mark.parametrize("df", [3, 10])
def test_closed_form_errors_follow_the_block_bootstrap(df: float) -> None:
    """Within 5 % on average over 60 series, each within 45 %: 199 draws alone leave 5 %."""
    columns = students(500, 60, df, seed=2)
    many = column_tails(columns, dependent=True)
    twins = np.array([bootstrap_errors(x) for x in columns.T])
    for ratio in (many.error / twins[:, 0], many.hill_error / twins[:, 1]):
        assert ratio.mean() == pytest.approx(1, abs=0.05)
        assert np.abs(ratio - 1).max() < 0.45


def clustered(n: int, width: int, seed: int) -> np.ndarray:
    """GARCH(1,1), normal shocks, alpha .15, beta .80."""
    rng = np.random.default_rng(seed)
    out = np.empty((n, width))
    variance = np.ones(width)
    for t in range(n):
        out[t] = np.sqrt(variance) * rng.standard_normal(width)
        variance = 0.05 + 0.15 * out[t] ** 2 + 0.80 * variance
    return out


def test_closed_form_errors_follow_the_bootstrap_under_clustering_too() -> None:
    """Within 10 % on average over 80 series."""
    columns = clustered(1000, 80, 3)
    many = column_tails(columns, dependent=True)
    twins = np.array([bootstrap_errors(x) for x in columns.T])
    assert np.mean(many.error / twins[:, 0]) == pytest.approx(1, abs=0.10)
    assert np.mean(many.hill_error / twins[:, 1]) == pytest.approx(1, abs=0.10)
    # Rows taken as independent, the errors come out clearly smaller: the control.
    independent = column_tails(columns, dependent=False)
    assert np.mean(independent.error / many.error) < 0.9
    assert np.array_equal(independent.gamma, many.gamma)


def test_independent_errors_are_near_the_pareto_constant() -> None:
    """kappa Var(gamma)/gamma^2 = 4.8 under the exact Pareto law (simulated); 4 in the limit."""
    rng = np.random.default_rng(4)
    columns = (rng.pareto(3, (2000, 30)) + 1) * rng.choice([-1.0, 1.0], (2000, 30))
    many = column_tails(columns, dependent=False)
    assert np.sqrt(1000) * np.median(many.error) * 3 == pytest.approx(np.sqrt(4.8), rel=0.15)


def test_passes_do_not_change_anything() -> None:
    columns = students(60, COLUMNS_PER_PASS + 3)
    whole = column_tails(columns, dependent=True)
    last = column_tails(columns[:, -3:], dependent=True)
    assert whole.gamma[-3:] == pytest.approx(last.gamma, rel=1e-12)
    assert whole.error[-3:] == pytest.approx(last.error, rel=1e-9)


def odd_columns(n: int = 400) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(5)
    x = rng.standard_t(3, n)
    sparse = np.zeros(n)
    sparse[::25] = 1
    spikes = np.full(n, 2.0)
    spikes[:12] = x[:12]
    return {
        "plain": x,
        "dummy": (np.arange(n) % 2).astype(float),
        "sparse dummy": sparse,
        "spikes": spikes,
        "many zeros": np.where(rng.random(n) < 0.4, 0.0, x),
        "rounded": np.round(4 * x) / 4,
        "constant": np.ones(n),
        "counts": rng.poisson(2, n).astype(float),
        "signs": np.sign(x),
    }


def test_odd_columns_are_refused_with_a_reason_or_mended() -> None:
    columns = odd_columns()
    names = list(columns)
    many = column_tails(np.column_stack(list(columns.values())), dependent=False)
    refused = {names[j]: reason for j, reason in many.refused}
    assert set(refused) == {"dummy", "sparse dummy", "spikes", "constant", "counts", "signs"}
    assert "values besides the commonest" in refused["sparse dummy"]
    assert "values besides the commonest" in refused["spikes"]
    assert refused["dummy"] == "two-valued, so it has no tail"
    assert "constant" in refused["constant"]
    assert "discrete" in refused["counts"]
    mended = [names.index(name) for name in ("plain", "many zeros", "rounded")]
    assert np.flatnonzero(many.assessed).tolist() == sorted(mended)
    assert np.isfinite(many.gamma[mended]).all()
    assert many.gamma[names.index("rounded")] == pytest.approx(many.gamma[0], abs=0.06)
    assert (many.p_value[[j for j, _ in many.refused]] == 1).all()


def test_sparse_is_below_five_per_cent_of_active_rows() -> None:
    n = 400
    below, at = np.zeros(n), np.zeros(n)
    below[:19] = students(19, 1)[:, 0]
    at[:20] = students(20, 1)[:, 0]
    many = column_tails(np.column_stack([below, at, students(n, 1)[:, 0]]), dependent=False)
    assert many.active_share[:2] == pytest.approx([19 / 400, 20 / 400])
    assert many.sparse.tolist() == [True, False, False]


def test_zeros_are_dropped_as_for_one_series() -> None:
    x = students(400, 1)[:, 0]
    x[::4] = 0
    standard = (x - x.mean()) / x.std()
    many = column_tails(np.column_stack([x, standard]), dependent=False)
    assert many.gamma == pytest.approx(tail_index(x).gamma, rel=1e-9)


def test_differences_of_rounded_levels_are_treated_as_rounded() -> None:
    rng = np.random.default_rng(5)
    changes = np.diff(np.round(5 + np.cumsum(rng.standard_t(3, 800)) * 0.05, 2))
    standard = (changes - changes.mean()) / changes.std()
    many = column_tails(np.column_stack([changes, standard]), dependent=False)
    assert many.assessed.all()
    assert many.gamma == pytest.approx(tail_index(changes).gamma, abs=0.05)


@pytest.mark.parametrize("scale", [1e-300, 1e300])
def test_extreme_columns_are_answered(scale: float) -> None:
    columns = students(200, 2)
    plain = column_tails(columns, dependent=True)
    extreme = column_tails(np.column_stack([columns[:, 0] * scale, columns[:, 1]]), dependent=True)
    for name in ("gamma", "error", "hill_gamma", "hill_error", "p_value"):
        assert getattr(extreme, name) == pytest.approx(getattr(plain, name), rel=1e-9)


def test_intervals_and_the_median_column() -> None:
    columns = np.column_stack([students(300, 5), np.ones(300)])
    many = column_tails(columns, dependent=True)
    assert np.isnan([many.gamma_low[5], many.gamma_high[5]]).all()
    for j in range(5):
        assert many.interval(j) == (1 / many.gamma_high[j], 1 / many.gamma_low[j])
        assert many.gamma_low[j] < many.gamma[j] < many.gamma_high[j]
    middle = many.median_column()
    assert middle is not None
    assert many.gamma[middle] == np.sort(many.gamma[:5])[2]
    assert column_tails(np.ones((50, 2)), dependent=False).median_column() is None


P_VALUES = st.sampled_from([0.0, 1e-4, 0.004, 0.01, 0.03, 0.05, 0.4, 1.0])


@settings(max_examples=25, deadline=None)
@given(p_values=st.lists(P_VALUES, min_size=1, max_size=25))
def test_holm_agrees_with_statsmodels(p_values: list[float]) -> None:
    expected = multipletests(p_values, alpha=0.05, method="holm")[0]
    assert holm_rejections(np.array(p_values)).tolist() == expected.tolist()


def test_holm_stops_at_the_first_it_keeps() -> None:
    """0.012 passes 0.05/4, 0.02 fails 0.05/3, and nothing after it can pass."""
    assert holm_rejections(np.array([0.04, 0.012, 0.02, 0.03])).tolist() == [
        False, True, False, False,
    ]  # fmt: skip
