"""The whole diagnosis of one design: series with few values, sides, vetoes, warnings."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.diagnostics.battery import column_weights, diagnose, sample_warnings, series_group
from scantling.diagnostics.column_tails import column_tails
from scantling.diagnostics.error_findings import heavier_side
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.tail_index import tail_index


def residuals(e: np.ndarray, fitted: np.ndarray | None = None) -> Residuals:
    values = e - e.mean()
    fitted = np.zeros(e.size) if fitted is None else fitted
    return Residuals(
        values=read_only(values), fitted=read_only(fitted), explained=0.0, selected=(),
        folds="random", response_sd=float(e.std()),
    )  # fmt: skip


def standard(columns: np.ndarray) -> np.ndarray:
    return np.asarray((columns - columns.mean(axis=0)) / columns.std(axis=0))


@pytest.fixture(scope="module")
def mixed() -> tuple[np.ndarray, np.ndarray]:
    """600 rows: t(2.2), normal, a dummy, a sparse dummy, uniform; errors t(3)."""
    rng = np.random.default_rng(1)
    n = 600
    sparse = np.zeros(n)
    sparse[::30] = 1
    columns = np.column_stack([
        rng.standard_t(2.2, n), rng.standard_normal(n), rng.random(n) < 0.5, sparse, rng.random(n),
    ])  # fmt: skip
    return standard(columns), rng.standard_t(3, n)


def test_series_that_take_few_values_have_all_moments(mixed: tuple) -> None:
    group = series_group(mixed[0], dependent=False)
    for order in (1, 2, 3, 4):
        assert group.answer(order, 2) == "exists"
        assert group.answer(order, 4) == "exists"
    assert group.answer(4, 0) == "missing"
    assert group.answer(1, 1) == "exists"


def test_below_a_hundred_rows_moments_are_unclear(mixed: tuple) -> None:
    group = series_group(mixed[0][:99, :2], dependent=False)
    assert all((answers == 0).all() for answers in group.moments.values())


def test_columns_are_weighed(mixed: tuple) -> None:
    tails = column_tails(mixed[0], dependent=False)
    assert column_weights(tails) == ("heavy", "light", "light", "sparse", "light")


def test_a_diagnosis_without_time(mixed: tuple) -> None:
    X, e = mixed
    found = diagnose(X, residuals(e), time_ordered=False, seed=1)
    assert found.errors == tail_index(e - e.mean(), seed=1)
    assert [side.side for side in found.sides] == ["left", "right"]
    assert [answer.order for answer in found.error_moments] == [1, 2, 3, 4]
    assert found.moment(1) == "exists"
    assert found.clustering is None
    assert found.volatility is None
    assert found.dependence == ()
    assert len(found.variance) == 4
    for finding in found.variance:
        needs = finding.result.needs_moment
        granted = finding.result.method == "permutation" or found.moment(needs) == "exists"
        assert finding.valid == granted
        assert finding.lacks == ("" if granted else "4th moment")
    # t(3) has no fourth moment: tests that need it are not to be trusted.
    assert any(not finding.valid for finding in found.variance)
    assert found.co_movement.ratio.shape == (5,)
    assert [o.estimator[:4] for o in found.opinions] == ["Hill", "gene"]
    assert found.worth is None
    assert found.heavier == ""
    assert found.warnings == ()


def test_the_heavier_side_decides_if_the_two_differ() -> None:
    both = tail_index(np.random.default_rng(1).standard_t(3, 600))
    left, right = (replace(both, side=side, gamma_error=0.05) for side in ("left", "right"))
    # Joint standard error .0707: two of them are .1414.
    light, heavy = replace(left, gamma=0.25), replace(right, gamma=0.40)
    assert heavier_side(both, (light, heavy)) is heavy
    mirrored = replace(left, gamma=0.40), replace(right, gamma=0.25)
    assert heavier_side(both, mirrored) is mirrored[0]
    assert heavier_side(both, (light, replace(right, gamma=0.39))) is both
    assert heavier_side(both, ()) is both


def test_moments_are_those_of_the_heavier_side() -> None:
    """Pareto gains of index 1.5 over normal losses ten times as large as the least of them."""
    rng = np.random.default_rng(3)
    gains = rng.pareto(1.5, 4000) + 1
    e = np.where(rng.random(4000) < 0.5, gains, -10 * np.abs(rng.standard_normal(4000)))
    X = standard(rng.random((4000, 2)))
    found = diagnose(X, residuals(e), time_ordered=False, seed=1)
    assert found.moment(2) == "missing"
    second = found.error_moments[1]
    assert "on the right, the heavier side," in second.reason
    mirrored = diagnose(X, residuals(-e), time_ordered=False, seed=1)
    assert "on the left, the heavier side," in mirrored.error_moments[1].reason
    alike = diagnose(X, residuals(rng.standard_t(3, 4000)), time_ordered=False, seed=1)
    assert all("heavier side" not in answer.reason for answer in alike.error_moments)


def test_scores_of_bounded_columns_have_the_errors_tail(mixed: tuple) -> None:
    X, e = mixed
    found = diagnose(X, residuals(e), time_ordered=False, seed=1)
    assert found.errors is not None
    for j in (2, 3):
        assert found.scores.tails.gamma[j] == found.errors.gamma
        assert found.scores.answer(2, j) == found.moment(2)
    assert found.scores.tails.refused == ()
    product = tail_index(X[:, 0] * (e - e.mean()))
    assert found.scores.tails.gamma[0] == pytest.approx(product.gamma, rel=1e-9)
    assert found.scores.borrowed is not None
    assert found.scores.borrowed.tolist() == [False, False, True, True, False]
    assert found.scores.tails.gamma[0] > found.scores.tails.gamma[1]


def test_a_sparse_column_of_many_values_counts_as_bounded_in_its_score() -> None:
    """36 active rows of 800 have an index of their own, but the score's is the errors'."""
    rng = np.random.default_rng(9)
    sparse = np.zeros(800)
    sparse[rng.choice(800, 36, replace=False)] = rng.standard_normal(36)
    e = rng.standard_t(3, 800)
    X = standard(np.column_stack([sparse, rng.standard_normal(800)]))
    found = diagnose(X, residuals(e), time_ordered=False, seed=1)
    assert found.weight[0] == "sparse"
    assert found.columns.tails.assessed[0]
    assert found.errors is not None
    assert found.scores.tails.gamma[0] == found.errors.gamma
    assert found.scores.tails.gamma[1] != found.errors.gamma


def test_scores_without_variance_are_named() -> None:
    rng = np.random.default_rng(2)
    e = rng.standard_t(1.5, 3000)
    columns = standard(np.column_stack([e * np.abs(rng.normal(size=3000)), rng.random(3000)]))
    found = diagnose(columns, residuals(e), time_ordered=False, seed=1)
    assert 0 in found.scores_without_variance
    light = rng.standard_normal(3000)
    clean = diagnose(columns[:, 1:], residuals(light), time_ordered=False, seed=1)
    assert clean.scores_without_variance == ()


def test_a_power_whose_parents_leave_room_for_a_variance_is_unclear() -> None:
    """The square of a t(6) column times a t(4) error: index 3, which looks like 1.9. The same
    square taken for a raw column has index 1.9 itself, and the variance is denied."""
    rng = np.random.default_rng(8)
    x, e = rng.standard_t(6, 1000), rng.standard_t(4, 1000)
    X = standard(np.column_stack([x, x**2]))
    told = diagnose(X, residuals(e), time_ordered=False, seed=1, parents=((0,), (0, 0)))
    untold = diagnose(X, residuals(e), time_ordered=False, seed=1)
    implied = told.scores.implied
    assert implied is not None
    assert implied.gamma[1] == pytest.approx(2 * told.columns.tails.gamma[0])
    assert told.scores.tails.gamma_low[1] <= 1 / 3
    assert untold.scores.tails.gamma_low[1] > told.scores.tails.gamma_low[1]
    assert told.scores.doubted is not None
    alone = series_group(X[:, 1:] * (e - e.mean())[:, None], dependent=False).answer(2, 0)
    assert (alone, told.scores.answer(2, 1)) == ("missing", "unclear")
    assert told.scores.doubted.tolist() == [False, True]


def test_short_samples_have_no_sides_and_no_clear_moments(mixed: tuple) -> None:
    X, e = mixed
    found = diagnose(X[:99], residuals(e[:99]), time_ordered=False, seed=1)
    assert found.sides == ()
    assert {answer.answer for answer in found.error_moments} == {"unclear"}


def test_errors_without_an_index_do_not_stop_the_rest(mixed: tuple) -> None:
    X, _ = mixed
    binary = np.tile([1.0, -1.0], 300)
    found = diagnose(X, residuals(binary), time_ordered=False, seed=1)
    assert found.errors is None
    assert found.errors_note == "two-valued, so it has no tail index"
    assert {answer.answer for answer in found.error_moments} == {"unclear"}
    assert found.scores.tails.gamma.shape == (5,)


def garch(n: int, alpha: float, beta: float, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    out, variance = np.empty(n), 1.0
    for t in range(n):
        out[t] = np.sqrt(variance) * rng.standard_normal()
        variance = (1 - alpha - beta) + alpha * out[t] ** 2 + beta * variance
    return out


def test_clustering_is_found_in_time_order_and_its_index_vetoes() -> None:
    e = garch(1500, 0.25, 0.70, seed=3)
    X = standard(np.random.default_rng(4).standard_normal((1500, 2)))
    found = diagnose(X, residuals(e), time_ordered=True, seed=1)
    path = found.volatility
    assert path is not None
    assert path.persistence == pytest.approx(0.95, abs=0.06)
    assert found.dependence[0].result.method == "permutation"
    assert len(found.dependence) == 6
    assert found.worth is not None and found.worth.extremes is not None
    assert found.worth.extremes.index < 0.9
    assert 1 <= found.worth.tail_rows <= found.worth.rows <= 1500
    assert found.moment(4) != "exists" or path.tail_index > 4
    shuffled = np.random.default_rng(5).permutation(e)
    calm = diagnose(X, residuals(shuffled), time_ordered=True, seed=1)
    assert calm.volatility is None
    # Ljung-Box needs a variance, which both have, and a constant one, which clustering is not.
    plain, steady = (
        next(f for f in each.dependence if f.result.test == "Ljung-Box") for each in (found, calm)
    )
    assert found.moment(2) == calm.moment(2) == "exists"
    assert (plain.valid, plain.lacks) == (False, "constant variance")
    assert (steady.valid, steady.lacks) == (True, "")
    assert all(finding.valid == (not finding.lacks) for finding in found.dependence)


def test_persistent_errors_are_permuted_by_blocks_and_lacked_by_koenker_and_white() -> None:
    """AR(1) errors at 0.9 beside a column alike, both independent of each other."""
    from scipy.signal import lfilter

    from scantling.diagnostics.tail_index import block_length
    from scantling.diagnostics.variance import glejser_permutation, scale_suspects

    rng = np.random.default_rng(31)
    columns = np.column_stack([rng.standard_normal(500), rng.standard_normal((500, 2))])
    columns[:, 0] = lfilter([1], [1, -0.98], columns[:, 0])
    X, e = standard(columns), lfilter([1], [1, -0.9], rng.standard_normal(500))
    made = residuals(e)
    found = diagnose(X, made, time_ordered=True, seed=1)
    assert found.autoregression is not None
    assert found.clustering is not None and found.clustering.test.p_value > 0.05
    by_name = {finding.result.test: finding for finding in found.variance}
    for name in ("White", "Koenker's studentised Breusch-Pagan"):
        assert not by_name[name].valid and by_name[name].lacks == "independent errors"
    suspects = scale_suspects(X, made.fitted, made.selected)
    block = block_length(500)
    expected = glejser_permutation(made.values, suspects, seed=1, block=block)
    glejser = by_name[expected.test]
    assert glejser.valid and glejser.result == expected
    plain = glejser_permutation(made.values, suspects, seed=1)
    assert plain.p_value < expected.p_value
    # Tests of the level and of the shocks' size do not need it.
    assert all(finding.lacks != "independent errors" for finding in found.dependence)
    # The column that persists is known by its first autocorrelation.
    assert found.column_levels is not None
    x = X[:, 0]
    assert found.column_levels[0] == pytest.approx(float(x[1:] @ x[:-1] / (x @ x)), rel=1e-12)
    assert found.column_levels[0] > 0.95 and abs(found.column_levels[1]) < 0.15
    assert diagnose(X, made, time_ordered=False, seed=1).column_levels is None


def test_near_integration_is_warned_of() -> None:
    e = garch(1500, 0.10, 0.895, seed=6)
    X = standard(np.random.default_rng(4).standard_normal((1500, 2)))
    found = diagnose(X, residuals(e), time_ordered=True, seed=1)
    assert found.volatility is not None
    assert found.volatility.persistence > 0.97
    assert any("nearly integrated" in sentence for sentence in found.warnings)


def test_stable_laws_are_warned_of_and_student_laws_are_not() -> None:
    """Index 1.7, n = 5000: in range it looks like 2.5 to 3; heavier on the largest 70 (simulated:
    89 % of samples, at most 4 % of others; 12 samples each here)."""
    from scipy.stats import levy_stable

    rng = np.random.default_rng(7)
    stable = levy_stable.rvs(1.7, 0, size=(12, 5000), random_state=rng)
    assert np.mean([heavier_further_out(e) for e in stable]) > 0.6
    assert np.mean([heavier_further_out(e) for e in rng.standard_t(3, (12, 5000))]) < 0.2


def heavier_further_out(e: np.ndarray) -> bool:
    found = sample_warnings(e, tail_index(e), None)
    return any("heavier further out" in sentence for sentence in found)
