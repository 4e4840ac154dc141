"""What holds for every budget on paper: more risk, more rows, heavier laws.

The same seed gives the same columns whatever the risk and the target, so what differs between
two budgets of one seed is exact; between laws and between numbers of rows it holds beyond
simulation error only. Two things are not asserted because they are not so. The noise limit is
not monotone in the accepted risk: the level L(p) falls as the risk grows, so both what noise
may do and how low the bar hangs change; what holds is that the risk at a given level grows as the
level falls. And it is not monotone in rows: columns are capped at sqrt(n).
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from scantling.core.streams import serial_map
from scantling.planning.assured import assured_point, column_sizes, first_bound
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import (
    Plan,
    plan_effect,
    plan_noise,
    plan_scores,
    plan_signal_limit,
)
from scantling.simulation.scores import penalty_level, risk_at, risk_curves, risks_on_grid

few = settings(max_examples=12, deadline=None, derandomize=True)
LAWS = st.sampled_from(["normal", "laplace", "student-t:df=3", "student-t:df=5"])
ROWS = st.integers(30, 120)
COLUMNS = st.integers(2, 60)
SEEDS = st.integers(0, 10_000)
RISKS = st.sampled_from([0.02, 0.05, 0.1, 0.2])
LOW = 0.7
"""A floor below every level, so that one sample serves every risk."""


def plan_for(
    law: str, rows: int, columns: int, seed: int, *, risk: float = 0.45, effect: float = 0.3,
    rule: str = "plug-in",
) -> Plan:  # fmt: skip
    return stated_plan(
        rows=rows, columns=columns, law=law, column_law=None, correlation=0.0, rule=rule,
        loss="squared", explained=0.0, replicates=100, seed=seed,
        target=target_of(
            relevant=1, smallest_effect=effect, risk=risk, power=0.8, stability=0.75,
            false_share=0.2,
        ),
    )  # fmt: skip


def sample(plan: Plan, draws: int = 100):
    return plan_scores(plan, serial_map, draws=draws, twin=False)[0]


@few
@given(LAWS, ROWS, COLUMNS, SEEDS, RISKS, st.floats(1.1, 2.0))
def test_more_accepted_risk_never_fewer_columns_by_signal(law, rows, columns, seed, risk, times):
    """Exactly: the level and the quantile of the largest score both fall as the risk grows."""
    wide = plan_for(law, rows, columns, seed)
    scores = sample(wide)
    limits = [
        plan_signal_limit(replace(wide, target=replace(wide.target, risk=each)), scores)
        for each in (risk, min(risk * times, 0.45))
    ]
    assert limits[1] >= limits[0]


@few
@given(LAWS, ROWS, COLUMNS, SEEDS, st.floats(2.0, 5.0), st.floats(0.0, 1.0))
def test_a_lower_level_never_has_less_risk(law, rows, columns, seed, level, lower):
    found = sample(plan_for(law, rows, columns, seed)).found
    for p in (1, columns):
        assert risk_at(found, p, level - lower)[0] >= risk_at(found, p, level)[0] - 1e-12


@few
@given(LAWS, ROWS, COLUMNS, SEEDS, RISKS)
def test_the_noise_limit_accepts_what_it_says(law, rows, columns, seed, risk):
    """Up to the limit the risk is accepted at each p, at the level that goes with that risk."""
    plan = plan_for(law, rows, columns, seed, risk=risk)
    found = sample(plan).found
    limit, points = plan_noise(plan, found)
    curve = risk_curves(found, risk)[0]
    assert (curve[: limit.columns] <= risk + 1e-9).all()
    if limit.reached:
        assert curve[limit.columns] > risk
        assert limit.low <= limit.columns <= (limit.high or columns)
    grid = np.array([point.p for point in points])
    np.testing.assert_allclose(risks_on_grid(found, risk, grid)[0], curve[grid - 1], atol=1e-12)


@few
@given(LAWS, ROWS, COLUMNS, SEEDS, st.floats(0.1, 0.6))
def test_more_rows_never_fewer_columns_by_signal(law, rows, columns, seed, effect):
    """Beyond simulation error: the needed penalty of 100 draws is known to a few per cent."""
    small = plan_for(law, rows, columns, seed, risk=0.05, effect=effect)
    large = small.at(2 * rows)
    effects = [plan_effect(plan, sample(plan), columns) for plan in (small, large)]
    # By sqrt(2), less what heavy scores grow by once the cap sqrt(n) lets them.
    assert effects[1] < 1.03 * effects[0]
    one = plan_signal_limit(replace(small, target=replace(small.target, smallest_effect=effect)),
                            sample(small))  # fmt: skip
    eased = replace(large, target=replace(large.target, smallest_effect=1.03 * effect))
    assert plan_signal_limit(eased, sample(large)) >= one


@few
@given(ROWS, SEEDS, st.sampled_from([(2.5, 4), (3, 6), (2.5, 8), (4, 20)]))
def test_a_heavier_law_never_carries_more_by_noise(rows, seed, pair):
    """In risk at sixty columns, beyond three standard errors, from 60 rows on."""
    rows += 60
    heavy, light = (
        sample(plan_for(f"student-t:df={df}", rows, 60, seed, risk=0.05), 300).found for df in pair
    )
    level = float(penalty_level(60, 0.05))
    (more, error), (less, other) = (risk_at(found, 60, level) for found in (heavy, light))
    assert more >= less - 3 * math.hypot(error, other) - 0.01


@few
@given(LAWS, ROWS, COLUMNS, SEEDS, st.sampled_from(["plug-in", "self-normalised"]))
def test_a_larger_effect_or_more_columns_only_go_one_way(law, rows, columns, seed, rule):
    plan = plan_for(law, rows, columns, seed, risk=0.05, rule=rule)
    scores = sample(plan)
    effects = [plan_effect(plan, scores, p) for p in range(1, columns + 1)]
    assert effects == sorted(effects)
    limits = [
        plan_signal_limit(replace(plan, target=replace(plan.target, smallest_effect=b)), scores)
        for b in (0.1, 0.2, 0.4, 0.8)
    ]
    assert limits == sorted(limits)


@few
@given(LAWS, LAWS, ROWS, st.integers(2, 12), SEEDS, st.floats(2.0, 12.0), st.floats(0, 5))
def test_the_bound_falls_as_the_level_rises_and_assures_more_for_more(
    law, column_law, rows, columns, seed, level, more
):
    plan = plan_for(column_law, rows, columns, seed)
    sizes = column_sizes(plan.case(columns).X)
    errors = plan_for(law, rows, columns, seed).law
    here, higher = (first_bound(sizes, errors, each) for each in (level, level + more))
    assert 0 <= higher <= here * (1 + 1e-12)
    points = [
        assured_point(sizes, errors, target, 1.0)
        for target in (
            target_of(relevant=1, smallest_effect=b, risk=r, power=0.8, stability=0.75,
                      false_share=0.2)
            for b, r in ((0.3, 0.05), (0.3, 0.1), (0.6, 0.1))
        )
    ]  # fmt: skip
    assert points == sorted(points)
