"""Break-through: the noise limit by a brute scan, the penalty ratio, worst columns, bands."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from scantling.core.streams import MEMORY_BOUND, serial_map, stream, worker_pool
from scantling.design.spec import TargetSpec
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import ErrorLaw, normal_law, student_law
from scantling.law.notation import parse_law
from scantling.planning import breakthrough as module
from scantling.planning.breakthrough import (
    BLOCK,
    DRAWS_PER_LAW,
    LEAST_RISK,
    break_through,
    curve_points,
    needed_penalty,
    sample_scores,
    score_draws,
    simulation_variance,
    steadied,
)
from scantling.planning.case import Case, column_grid
from scantling.planning.recipe import standardise
from scantling.simulation.scores import (
    centre,
    first_above,
    largest_quantile,
    passers,
    penalty_level,
    ranked,
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
    grid = column_grid(90)
    assert [point.p for point in found.curve] == grid.tolist()
    moved = stream(3, "risk error").standard_normal(50)
    draws, per_law = found.fitted.found.draws, found.drawn[0].found.draws
    many = []
    for point in found.curve:
        level = float(penalty_level(point.p, 0.05))
        risk, error = risk_at(found.fitted.found, point.p, level)
        risks = np.array([risk_at(s.found, point.p, level)[0] for s in found.drawn])
        # Of their spread only what chance does not explain is kept; the point's own is added.
        chance = draws * error**2 / per_law
        kept = max(0.0, 1 - chance / risks.var())
        steady = risks.mean() + kept * (risks - risks.mean()) + moved * error
        many.append(np.clip(steady, LEAST_RISK, 1))
        ordered = np.sort(many[-1])
        expected = (min(ordered[2], risk), max(ordered[47], risk))
        assert (point.low, point.high) == pytest.approx(expected, abs=1e-12)
        assert point.risk == pytest.approx(risk)
        assert point.low <= point.risk <= point.high
    # The same curves decide the limit's band; between grid points they are checked by their ends.
    over = np.array(many) > 0.05
    first = np.array([math.inf if not row.any() else row.argmax() for row in over.T])
    low, high = np.sort(first)[[2, 47]]
    # A point of the curve between grid points may cross a little earlier.
    assert grid[int(low) - 2] <= found.noise.low < grid[int(low)]
    if math.isinf(high):
        assert found.noise.high is None
    else:
        assert grid[int(high) - 1] <= found.noise.high < grid[int(high)]
    assert found.noise.low < found.noise.columns


def test_curve_points_by_hand():
    curve = np.array([0.1, 0.2, 0.3])
    many = np.vstack([curve - 0.05, curve + 0.05])
    points = curve_points(curve, many, np.array([1, 3]))
    assert [(q.p, q.risk, q.low, q.high) for q in points] == [
        (1, 0.1, pytest.approx(0.05), pytest.approx(0.15)),
        (3, 0.3, pytest.approx(0.25), pytest.approx(0.35)),
    ]


def test_a_band_contains_its_point():
    points = curve_points(np.array([0.1, 0.4]), np.full((50, 2), 0.2), np.array([1, 2]))
    assert [(q.low, q.high) for q in points] == [(0.1, 0.2), (0.2, 0.4)]


def test_steadied_curves_by_hand():
    # Means .2 and .3; variances .01 and .0025, chance .0025 each: 3/4 and nothing of them kept.
    curves = np.array([[0.1, 0.25], [0.3, 0.35]])
    found = steadied(curves, np.full(2, 0.0025))
    np.testing.assert_allclose(found, [[0.125, 0.3], [0.275, 0.3]], atol=1e-15)
    np.testing.assert_array_equal(steadied(curves, np.zeros(2)), curves)
    # More chance than spread, as between laws that are one; and no spread at all.
    assert np.ptp(steadied(curves, np.ones(2)), axis=0).tolist() == [0, 0]
    assert steadied(np.full((3, 1), 0.2), np.array([0.1])).tolist() == [[pytest.approx(0.2)]] * 3
    assert steadied(np.zeros((3, 1)), np.zeros(1)).tolist() == [[0.0]] * 3


def test_steadied_curves_are_nearer_the_truth_than_what_was_simulated():
    # Risks of 2000 laws between .03 and .07, each estimated from 200 draws.
    rng = np.random.default_rng(11)
    truth = rng.uniform(0.03, 0.07, (2000, 1))
    seen = rng.binomial(200, truth) / 200
    found = steadied(seen, np.array([0.05 * 0.95 / 200]))
    before, after = (float(((x - truth) ** 2).mean()) for x in (seen, found))
    # Variance of the truth 1.33e-4, of chance 2.37e-4: the best predictor leaves 8.5e-5.
    assert before == pytest.approx(2.37e-4, rel=0.1)
    assert after == pytest.approx(1.33e-4 * 2.37e-4 / 3.70e-4, rel=0.1)
    assert found.mean() == pytest.approx(seen.mean())


def test_simulation_variance_is_that_of_repeated_simulations():
    case = case_of(student_law(3, sd=1.0), t_columns(60, 40))
    sample = sample_scores(case, (case.law,), 20_000, 1.4, "any", serial_map)[0].found
    spread = simulation_variance(sample, 0.05, np.array([1, 5, 40]))
    assert spread.shape == (40,)
    for p in (1, 5, 40):
        level = float(penalty_level(p, 0.05))
        parts = []
        for k in range(200):
            mine = sample.draw // 100 == k
            part = replace(sample, draws=100, draw=sample.draw[mine] % 100,
                           column=sample.column[mine], ratio=sample.ratio[mine])  # fmt: skip
            parts.append(risk_at(part, p, level)[0])
        # 200 repeats: the variance is known to 10 %.
        assert spread[p - 1] == pytest.approx(100 * np.var(parts), rel=0.4)
    # A draw's risk at one column is an average over forty: far below risk (1 - risk).
    risk = risk_at(sample, 1, float(penalty_level(1, 0.05)))[0]
    assert spread[0] < 0.3 * risk * (1 - risk)
    whole = risk_at(sample, 40, float(penalty_level(40, 0.05)))[0]
    assert spread[39] == pytest.approx(whole * (1 - whole), rel=1e-9)
    # Between grid points straight in log p.
    share = math.log(2) / math.log(5)
    roots = np.sqrt(spread[[0, 1, 4]])
    assert roots[1] == pytest.approx((1 - share) * roots[0] + share * roots[2], rel=1e-9)


def test_one_law_drawn_fifty_times_leaves_the_points_own_error_alone():
    case = case_of(student_law(3, sd=1.0), t_columns(60, 90), replicates=400)
    found = break_through(case, serial_map)
    last = found.curve[-1]
    error = math.sqrt(last.risk * (1 - last.risk) / found.fitted.found.draws)
    assert last.risk - 4 * error < last.low < last.risk < last.high < last.risk + 4 * error
    raw = [risk_at(s.found, 90, float(penalty_level(90, 0.05)))[0] for s in found.drawn]
    # Unsteadied, few draws under each law would make a band several times as wide.
    assert last.high - last.low < 0.6 * (np.sort(raw)[47] - np.sort(raw)[2])


def test_draws_are_more_where_cheap_and_fewer_where_they_fill_the_memory():
    def draws(n, width, replicates=400):
        X = np.broadcast_to(np.zeros((1, 1)), (n, width))
        return score_draws(replace(case_of(normal_law(1.0), t_columns(9, 2)), X=X,
                                   replicates=replicates))  # fmt: skip

    assert draws(100, 10) == (4000, 800)  # ten and two times what is asked
    assert draws(300, 1000) == (400, DRAWS_PER_LAW)
    assert draws(300, 1000, 60) == (200, 120)
    assert draws(2000, 20_000, 60) == (60, 60)  # no more than asked
    few = draws(500, 200_000)[1]
    assert 50 <= few < DRAWS_PER_LAW
    # 5 % of the ratios of 50 laws, 16 bytes each, are to fill half of the bound at most.
    assert few == MEMORY_BOUND // 2 // (8 * 10**6 + 1)
    assert few * 50 * 0.05 * 16 * 200_000 <= MEMORY_BOUND / 2
    assert draws(500, 10**6)[1] == module.FEWEST_DRAWS == 50


def test_the_typical_sd_is_the_median_of_the_draws_own():
    case = case_of(student_law(2.05, sd=1.0), t_columns(80, 5))
    sample = sample_scores(case, (case.law,), 300, 1.4, "any purpose", serial_map)[0]
    own = []
    for block in range(3):
        rng = stream(3, "any purpose", 0, block)
        own += list(case.law.draw_given_path(80, 100, rng).std(axis=0))
    assert sample.typical_sd == pytest.approx(np.median(own), rel=1e-12)
    # Near two moments hardly any sample shows the law's sd.
    assert sample.typical_sd < 0.5 * case.law.sd


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
    bounded = parse_law("ged:shape=19")  # all but uniform
    found = break_through(case_of(bounded, X), serial_map, bands=False)
    assert found.penalty_ratio < 1
    assert found.equivalent_rows == 60


def test_self_normalised_ratio_uses_penalties_and_median_loadings():
    case = case_of(
        student_law(3, sd=1.0), t_columns(80, 100), rule="self-normalised", replicates=300
    )
    found = break_through(case, serial_map, bands=False)
    assert found.fitted.loadings.shape == (100,)
    draws = found.fitted.found.draws
    twin = sample_scores(case, (case.twin,), draws, 1.4, "scores, twin", serial_map)[0]
    needed = [
        needed_penalty(s.found, 100, 0.05) * float(np.median(s.loadings)) / s.typical_sd
        for s in (found.fitted, twin)
    ]
    assert found.penalty_ratio == pytest.approx(needed[0] / needed[1], rel=1e-12)
    # The unit of either law is no part of it.
    other = break_through(replace(case, law=student_law(3, sd=7.0)), serial_map, bands=False)
    assert other.penalty_ratio == pytest.approx(found.penalty_ratio, rel=1e-9)
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
    assert needed_penalty(ranked(passers(ratios, 1.0)), 30, 0.05) == level + 2


def test_worst_columns_are_the_heavy_ones():
    X = np.random.default_rng(1).standard_normal((100, 40))
    X[:, [7, 21]] = np.random.default_rng(2).standard_t(1.5, (100, 2))
    found = break_through(case_of(student_law(3, sd=1.0), X), serial_map)
    assert set(found.worst_columns[:2]) == {7, 21}
    assert sum(found.worst_shares) == pytest.approx(1.0)
    assert list(found.worst_shares) == sorted(found.worst_shares, reverse=True)


def test_worst_shares_are_the_mean_over_the_drawn_laws_and_all_columns_are_named():
    X = t_columns(60, 90, seed=3)
    laws = (student_law(2.3, sd=1.0),) * 25 + (student_law(5, sd=1.0),) * 25
    found = break_through(case_of(student_law(3, sd=1.0), X, law_draws=laws), serial_map)
    level = float(penalty_level(90, 0.05))
    each = []
    for sample in found.drawn:
        counts = np.bincount(sample.found.column[sample.found.ratio > level], minlength=90)
        each.append(counts / max(1, counts.sum()))
    mean = np.mean(each, axis=0)
    # A law with few break-throughs counts as much as one with many.
    assert list(found.worst_shares) == pytest.approx(np.sort(mean[mean > 0])[::-1].tolist())
    assert mean[list(found.worst_columns)].tolist() == pytest.approx(list(found.worst_shares))
    assert len(found.worst_columns) == (mean > 0).sum() > 50


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
