"""A plan's noise and signal limits: the grid against the whole curve, effects by hand."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

from scantling.core.streams import serial_map
from scantling.design.spec import TargetSpec
from scantling.law.families import normal_law, student_law
from scantling.planning import plan as module
from scantling.planning.breakthrough import ScoreSample
from scantling.planning.generative import StatedColumns, Tables
from scantling.planning.plan import (
    Plan,
    plan_effect,
    plan_noise,
    plan_scores,
    plan_signal_limit,
    score_size,
    table_weights,
)
from scantling.simulation.scores import (
    first_above,
    passers,
    penalty_level,
    risk_at,
    risk_curves,
    risks_on_grid,
)

T3 = student_law(3, sd=1.0)


def plan_for(**changes):
    plan = Plan(
        rows=50, columns=300, source=StatedColumns(law=T3), law=T3, target=TargetSpec(),
        rule="plug-in", loss="squared", response_sd=1.2, residual_sd=1.0, replicates=100, seed=1,
    )  # fmt: skip
    return replace(plan, **changes)


def made_up(columns=400, draws=120, seed=0, floor=None, tail=4):
    rng = np.random.default_rng(seed)
    ratios = np.abs(rng.standard_t(tail, (columns, draws)))
    return passers(ratios, float(penalty_level(1, 0.05)) if floor is None else floor)


@pytest.mark.parametrize("risk", [0.01, 0.05, 0.3])
@pytest.mark.parametrize("seed", range(4))
def test_risks_on_a_grid_are_those_of_the_whole_curve(risk, seed):
    found = made_up(seed=seed, floor=float(penalty_level(1, risk)))
    whole = risk_curves(found, risk)[0]
    every = np.arange(1, 401)
    np.testing.assert_allclose(risks_on_grid(found, risk, every)[0], whole, atol=1e-12)
    some = np.array([1, 2, 17, 120, 399, 400])
    np.testing.assert_allclose(risks_on_grid(found, risk, some)[0], whole[some - 1], atol=1e-12)
    np.testing.assert_allclose(risks_on_grid(found, risk, some[2:3])[0], whole[16:17], atol=1e-12)
    weights = np.random.default_rng(seed).multinomial(120, np.full(120, 1 / 120), size=5)
    np.testing.assert_allclose(
        risks_on_grid(found, risk, some, weights.astype(float)),
        risk_curves(found, risk, weights.astype(float))[:, some - 1],
        atol=1e-12,
    )


def test_nothing_kept_is_no_risk():
    quiet = passers(np.zeros((30, 10)), 1.0)
    assert risks_on_grid(quiet, 0.05, np.array([1, 9, 30])).tolist() == [[0.0, 0.0, 0.0]]


@pytest.mark.parametrize("tail", [3, 4, 6, 30])
def test_the_limit_on_a_grid_is_the_exact_one(tail, monkeypatch):
    plan, found = plan_for(columns=400), made_up(tail=tail)
    exact, points = plan_noise(plan, found)
    monkeypatch.setattr(module, "EXACT_COLUMNS", 10)
    coarse, same = plan_noise(plan, found)
    assert exact.columns == coarse.columns
    assert exact.reached == coarse.reached
    assert [point.p for point in points] == [point.p for point in same]
    for one, other in zip(points, same, strict=True):
        assert one.risk == pytest.approx(other.risk, abs=1e-12)
        assert one.low == pytest.approx(other.low, abs=1e-12)
    # Bands are interpolated in log p between neighbours 2.5 % apart.
    assert coarse.low == pytest.approx(exact.low, rel=0.06, abs=1.1)
    assert exact.columns == min(first_above(risk_curves(found, 0.05)[0], 0.05), 400)


def test_the_limit_meets_none_some_and_all():
    rng = np.random.default_rng(0)
    # Of normal ratios, one in some draws is far larger than every level.
    few = np.abs(rng.standard_normal((400, 120)))
    few[0, :30] = 9.0
    samples = [made_up(tail=2), passers(few, 2.0), passers(np.minimum(few, 3.0), 2.0)]
    limits = [plan_noise(plan_for(columns=400), found)[0] for found in samples]
    assert limits[0].columns == 0
    assert 0 < limits[1].columns < 400
    assert (limits[2].columns, limits[2].high, limits[2].note) == (400, None, "at least")
    assert {limit.mode for limit in limits} == {"generative"}


def test_the_limit_of_simulated_scores_by_a_scan():
    plan = plan_for()
    found = plan_scores(plan, serial_map, draws=400, twin=False)[0].found
    limit, curve = plan_noise(plan, found)
    risks = [risk_at(found, p, float(penalty_level(p, 0.05)))[0] for p in range(1, 301)]
    over = [p for p, risk in enumerate(risks, start=1) if risk > 0.05]
    assert limit.columns == (over[0] - 1 if over else 300)
    assert limit.reached == bool(over)
    assert curve[-1].risk == pytest.approx(risks[-1], abs=1e-12)


def test_resamples_take_whole_tables():
    plan = plan_for(rows=4000, columns=4000)  # five tables of four draws
    weights = table_weights(plan, 20)
    assert weights.shape == (50, 20)
    np.testing.assert_allclose(weights.sum(axis=1), 20)
    for k in range(5):
        assert (weights[:, 4 * k : 4 * k + 4] == weights[:, [4 * k]]).all()
    assert len(np.unique(weights[:, ::4])) > 2
    # One table of many independent columns: the draws themselves are resampled.
    alone = table_weights(plan_for(columns=20_000, rows=2000), 20)
    np.testing.assert_allclose(alone.sum(axis=1), 20)
    assert (alone != alone[:, [0]]).any(axis=1).all()
    fewer = table_weights(plan, 20, Tables(cells=1, fewest=2))
    assert (fewer[:, :10] == fewer[:, [0]]).all()


def sample_of(columns=300, lam=None, **given):
    ratios = np.zeros((columns, 10))
    if lam is not None:
        ratios[:] = lam
    return ScoreSample(found=passers(ratios, 1.4), loadings=np.array([1.9]), typical_sd=2.0,
                       **given)  # fmt: skip


def test_the_detectable_effect_by_hand():
    plan = plan_for(rows=100, response_sd=2.5)
    # L(20) = 1.1 * 3.0233 = 3.3257; (3.3257 * 1.9 + .8416 * 2) / 25 = .3201.
    assert plan_effect(plan, sample_of(), 20) == pytest.approx(0.3201, abs=1e-4)
    # Where noise passes the level its quantile takes over: (7 * 1.9 + .8416 * 2) / 25.
    assert plan_effect(plan, sample_of(lam=7.0), 20) == pytest.approx(0.5993, abs=1e-4)
    # Half of an effect reaches a score of slope 1/2.
    assert plan_effect(plan, sample_of(slope=0.5), 20) == pytest.approx(0.6402, abs=2e-4)
    robust = sample_of(row_squares=np.array([0.64]))
    assert score_size(replace(plan, loss="huber"), robust) == pytest.approx(0.8)
    assert score_size(plan, sample_of()) == 2.0
    assert plan_effect(replace(plan, loss="huber"), robust, 20) == pytest.approx(
        (3.3257 * 1.9 + norm.ppf(0.8) * 0.8) / 25, abs=1e-4
    )


@pytest.mark.parametrize("effect", [0.2, 0.27, 0.31, 0.34, 0.37, 0.5])
def test_the_signal_limit_by_a_scan(effect):
    plan = plan_for(rows=100, response_sd=2.5, target=TargetSpec(smallest_effect=effect))
    sample = sample_of()
    passing = [p for p in range(1, 301) if plan_effect(plan, sample, p) <= effect]
    expected = math.inf if len(passing) == 300 else max(passing, default=0)
    assert plan_signal_limit(plan, sample) == expected


def test_fewer_ratios_are_kept_of_very_many_columns():
    level = float(penalty_level(1, 0.05))
    assert plan_for().floor == 1.4 < level
    assert plan_for(columns=10**6, replicates=200).floor == level
    loose = plan_for(target=TargetSpec(risk=0.4))
    assert loose.floor == float(penalty_level(1, 0.4)) < 1.4


def test_a_plans_case_is_a_drawn_table_of_its_first_columns():
    plan = plan_for(rows=60, law=normal_law(3.0))
    case = plan.case(7, table=2)
    assert case.X.shape == (60, 7)
    np.testing.assert_allclose(case.X.mean(axis=0), 0, atol=1e-12)
    np.testing.assert_allclose((case.X**2).mean(axis=0), 1, rtol=1e-12)
    assert (case.mode, case.rows, case.law) == ("generative", 60, plan.law)
    assert not np.array_equal(case.X, plan.case(7, table=3).X)
    np.testing.assert_array_equal(case.X, replace(plan, law=T3).case(7, table=2).X)
