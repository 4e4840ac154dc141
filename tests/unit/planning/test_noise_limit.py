"""Break-through: the noise limit by a brute scan, the penalty ratio, worst columns, bands."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from scantling.core.streams import serial_map, stream, worker_pool
from scantling.design.spec import TargetSpec
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import ErrorLaw, normal_law, student_law
from scantling.planning.breakthrough import (
    BLOCK,
    break_through,
    curve_points,
    needed_penalty,
    sample_scores,
)
from scantling.planning.case import Case, column_grid
from scantling.planning.remedies import standardise
from scantling.simulation.scores import (
    centre,
    first_above,
    largest_quantile,
    passers,
    penalty_level,
    risk_at,
    risk_curves,
    score_ratios,
)


def case_of(law: ErrorLaw, X: np.ndarray, **changes) -> Case:
    case = Case(
        X=standardise(X), law=law, law_draws=(law,) * 50, response_sd=1.2, residual_sd=1.0,
        target=TargetSpec(), rule="plug-in", replicates=200, seed=3,
    )  # fmt: skip
    return replace(case, **changes)


def t_columns(n, width, seed=0):
    return np.random.default_rng(seed).standard_t(3, (n, width))


def scanned_limit(found, risk):
    """Largest p with r(p') <= risk for every p' <= p, by trying them one after another."""
    for p in range(1, found.columns + 1):
        if risk_at(found, p, float(penalty_level(p, risk)))[0] > risk + 1e-12:
            return p - 1
    return math.inf


@pytest.mark.parametrize("seed", range(6))
def test_noise_limit_by_a_brute_scan(seed):
    rng = np.random.default_rng(seed)
    ratios = np.abs(rng.standard_normal((200, 60))) * rng.uniform(0.8, 1.6, 200)[:, None]
    found = passers(ratios, float(penalty_level(1, 0.05)))
    limit = first_above(risk_curves(found, 0.05)[0], 0.05)
    assert limit == scanned_limit(found, 0.05)
    assert 0 <= limit < 200


def test_the_first_excess_counts_even_if_the_risk_comes_back():
    # Five of the hundred draws have a ratio just above L(2) in every column: r(2) is over the
    # risk, while L(3) and all later levels stop them.
    levels = penalty_level(np.arange(1.0, 41), 0.05)
    ratios = np.zeros((40, 100))
    ratios[:, :6] = (levels[1] + levels[2]) / 2
    found = passers(ratios, float(levels[0]))
    curve = risk_curves(found, 0.05)[0]
    assert curve[:2].tolist() == pytest.approx([0.06, 0.06])
    assert curve[2:].max() == 0
    assert first_above(curve, 0.05) == 0
    ratios[:, 5] = 0
    assert first_above(risk_curves(passers(ratios, 1.0), 0.05)[0], 0.05) == math.inf


def test_noise_limit_is_infinite_when_nothing_passes_and_zero_when_one_column_fails():
    quiet = passers(np.full((30, 50), 0.5), 0.1)
    assert first_above(risk_curves(quiet, 0.05)[0], 0.05) == math.inf
    loud = passers(np.full((30, 50), 9.0), 0.1)
    assert first_above(risk_curves(loud, 0.05)[0], 0.05) == 0


def test_curve_and_limit_are_those_of_a_plain_simulation():
    # Own draws of the same law on the same columns.
    X = t_columns(80, 150)
    case = case_of(student_law(3, sd=1.0), X, replicates=400)
    found = break_through(case, serial_map, bands=False)
    rng = np.random.default_rng(77)
    largest = score_ratios(case.X, centre(rng.standard_t(3, (80, 4000))), "plug-in")[0].max(axis=0)
    truth = (largest > float(penalty_level(150, 0.05))).mean()
    error = math.sqrt(truth * (1 - truth) * (1 / found.fitted.found.draws + 1 / 4000))
    assert found.curve[-1].p == 150
    assert found.curve[-1].risk == pytest.approx(truth, abs=4 * error)
    assert truth > 0.08
    assert found.noise.reached
    assert found.noise.columns == scanned_limit(found.fitted.found, 0.05)
    # Negative control: normal errors on these columns have no such risk.
    calm = break_through(replace(case, law=normal_law(1.0)), serial_map, bands=False)
    assert calm.curve[-1].risk < truth - 4 * error


def test_the_curve_is_the_risk_on_the_grid_with_its_band_from_the_drawn_laws():
    X = t_columns(60, 90)
    laws = tuple(student_law(df, sd=1.0) for df in np.linspace(2.3, 8, 50))
    case = case_of(student_law(3, sd=1.0), X, law_draws=laws)
    found = break_through(case, serial_map)
    assert [point.p for point in found.curve] == column_grid(90).tolist()
    for point in found.curve[::7]:
        level = float(penalty_level(point.p, 0.05))
        risks = np.sort([risk_at(s.found, point.p, level)[0] for s in found.drawn])
        assert (point.low, point.high) == pytest.approx((risks[2], risks[47]), abs=1e-12)
        assert point.risk == pytest.approx(risk_at(found.fitted.found, point.p, level)[0])
    scanned = np.sort([scanned_limit(s.found, 0.05) for s in found.drawn])
    assert found.noise.low == scanned[2]
    assert found.noise.high == (None if math.isinf(scanned[47]) else scanned[47])


def test_curve_points_by_hand():
    curve = np.array([0.1, 0.2, 0.3])
    many = np.vstack([curve - 0.05, curve + 0.05])
    points = curve_points(curve, many, np.array([1, 3]))
    assert [(q.p, q.risk, q.low, q.high) for q in points] == [
        (1, 0.1, pytest.approx(0.05), pytest.approx(0.15)),
        (3, 0.3, pytest.approx(0.25), pytest.approx(0.35)),
    ]


def test_penalty_ratio_is_the_quantile_over_the_twins_and_rows_follow():
    case = case_of(student_law(3, sd=1.0), t_columns(80, 150), replicates=400)
    found = break_through(case, serial_map, bands=False)
    mine = largest_quantile(found.fitted.found, 150, 0.95)
    rng = np.random.default_rng(5)
    twins = score_ratios(case.X, centre(rng.standard_normal((80, 6000))), "plug-in")[0]
    assert found.penalty_ratio == pytest.approx(
        mine / np.quantile(twins.max(axis=0), 0.95), rel=0.04
    )
    assert found.penalty_ratio > 1.05
    assert found.equivalent_rows == int(80 / found.penalty_ratio**2)


def test_equivalent_rows_never_exceed_the_rows():
    # Bounded errors need a smaller penalty than normal ones on sparse columns.
    X = np.zeros((60, 20))
    X[np.arange(40), np.arange(40) % 20] = 1.0
    law = normal_law(1.0)
    bounded = replace(law, family="student-t", df=200.0)
    found = break_through(case_of(bounded, X), serial_map, bands=False)
    assert found.equivalent_rows is not None
    assert found.equivalent_rows <= 60


def test_self_normalised_ratio_uses_penalties_and_median_loadings():
    case = case_of(
        student_law(3, sd=1.0), t_columns(80, 100), rule="self-normalised", replicates=300
    )
    found = break_through(case, serial_map, bands=False)
    assert found.fitted.loadings.shape == (100,)
    draws = found.fitted.found.draws
    twin = sample_scores(case, (case.twin,), draws, 1.4, "scores, twin", serial_map)[0]
    needed = [
        needed_penalty(s.found, 100, 0.05) * float(np.median(s.loadings))
        for s in (found.fitted, twin)
    ]
    assert found.penalty_ratio == pytest.approx(needed[0] / needed[1], rel=1e-12)
    # The plug-in rule on the same data breaks through far more often.
    plug_in = break_through(replace(case, rule="plug-in"), serial_map, bands=False)
    assert found.curve[-1].risk < 0.03 < plug_in.curve[-1].risk


def test_needed_penalty_is_the_larger_of_level_and_quantile():
    level = float(penalty_level(30, 0.05))
    calm = passers(np.full((30, 100), level - 0.5), 1.0)
    assert needed_penalty(calm, 30, 0.05) == level
    ratios = np.full((30, 100), level - 0.5)
    ratios[4, :7] = level + np.arange(1, 8)
    # Seven draws of a hundred break through; the 95 % point is the sixth largest of all.
    assert needed_penalty(passers(ratios, 1.0), 30, 0.05) == level + 2


def test_worst_columns_are_the_heavy_ones():
    X = np.random.default_rng(1).standard_normal((100, 40))
    X[:, [7, 21]] = np.random.default_rng(2).standard_t(1.5, (100, 2))
    found = break_through(case_of(student_law(3, sd=1.0), X), serial_map)
    assert set(found.worst_columns[:2]) == {7, 21}
    assert sum(found.worst_shares) == pytest.approx(1.0)
    assert list(found.worst_shares) == sorted(found.worst_shares, reverse=True)


def test_the_fitted_path_is_kept():
    # All the volatility on ten rows: a column active there alone breaks through.
    path = np.full(100, 0.1)
    path[:10] = 5.0
    volatility = Volatility(
        omega=0.1, alpha=0.1, beta=0.8, innovation="normal", nu=None, persistence=0.9,
        tail_index=9.0, path=path, path_draws=path[None], log_likelihood=0.0,
    )  # fmt: skip
    X = np.random.default_rng(4).standard_normal((100, 2))
    X[:10, 0] *= 4
    X[10:, 0] = 0
    X[:10, 1] = 0
    case = case_of(replace(normal_law(1.0), volatility=volatility), X)
    sample = sample_scores(case, (case.law,), 400, 0.0, "scores, fitted law", serial_map)[0]
    means = [sample.found.ratio[sample.found.column == j].mean() for j in (0, 1)]
    assert means[0] > 5 * means[1]


def test_each_block_of_draws_is_centred_and_comes_from_its_own_stream():
    case = case_of(student_law(3), t_columns(30, 6))
    sample = sample_scores(case, (case.law,), 60, 0.0, "any purpose", serial_map)[0]
    errors = case.law.draw_given_path(30, 60, stream(3, "any purpose", 0, 0))
    errors = errors - errors.mean(axis=0)
    loadings = np.sqrt((errors**2).mean(axis=0))
    assert sample.loadings.tolist() == [pytest.approx(np.median(loadings), rel=1e-12)]
    ratios = np.abs(case.X.T @ errors) / math.sqrt(30) / loadings
    np.testing.assert_allclose(
        sample.found.ratio, ratios[sample.found.column, sample.found.draw], rtol=1e-10
    )
    assert sample.found.ratio.size == 360


def test_more_replicates_keep_the_first_blocks_and_workers_change_nothing():
    case = case_of(student_law(3, sd=1.0), t_columns(50, 30))
    args = ("scores, fitted law", serial_map)
    few = sample_scores(case, (case.law,), BLOCK, 1.4, *args)[0].found
    many = sample_scores(case, (case.law,), 2 * BLOCK + 30, 1.4, *args)[0].found
    assert many.draws == 2 * BLOCK + 30
    np.testing.assert_array_equal(np.sort(many.ratio[many.draw < BLOCK]), np.sort(few.ratio))
    one = break_through(case, serial_map)
    with worker_pool(2) as mapper:
        two = break_through(case, mapper)
    assert (one.noise, one.curve, one.penalty_ratio) == (two.noise, two.curve, two.penalty_ratio)
    assert one.worst_columns == two.worst_columns


def test_without_bands_they_are_the_point_itself():
    found = break_through(case_of(student_law(3), t_columns(60, 80)), serial_map, bands=False)
    assert found.noise.low == found.noise.high == found.noise.columns
    assert all(q.low == q.risk == q.high for q in found.curve)


def test_a_single_column():
    found = break_through(case_of(student_law(4), t_columns(60, 1)), serial_map)
    assert [q.p for q in found.curve] == [1]
    assert found.noise.columns == 1
    assert not found.noise.reached


def test_a_large_accepted_risk_lowers_the_floor_of_what_is_kept():
    # L(1) at risk 0.4 is 0.93: ratios between it and 1.4 must be seen.
    case = case_of(normal_law(1.0), t_columns(60, 5), target=TargetSpec(risk=0.4))
    found = break_through(case, serial_map, bands=False)
    # P(|N| > 0.9258) = .3546, a little less at 60 rows.
    assert found.curve[0].risk == pytest.approx(0.3546, abs=0.03)
