"""Designs on paper against brute force: risk at fifty rows, thin tails with many columns."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from scantling.core.streams import serial_map
from scantling.planning.paper import budget, stated_plan, target_of
from scantling.planning.plan import plan_noise, plan_scores
from scantling.simulation.scores import penalty_level

QUICK = {"refits": False, "tables": False}


def scores_of(law, rows, columns, draws, seed=1, tables=None):
    plan = stated_plan(
        rows=rows, columns=columns, law=law, column_law=None, correlation=0.0, rule="plug-in",
        loss="squared", explained=None, replicates=draws, seed=seed,
        target=target_of(
            relevant=10, smallest_effect=0.15, risk=0.05, power=0.8, stability=0.75,
            false_share=0.2,
        ),
    )  # fmt: skip
    return plan, plan_scores(plan, serial_map, draws=draws, twin=False)[0].found


@pytest.mark.parametrize(
    ("law", "at_50", "at_1000"),
    [
        # Brute force of 50 rows, columns and errors of one law, drawn afresh each time.
        ("student-t:df=3", 0.054, 0.100),
        ("student-t:df=4", 0.021, 0.025),
        ("normal", 0.008, 0.001),
    ],
)
def test_risk_at_fifty_rows(law, at_50, at_1000):
    wide = budget(rows=50, columns=1000, law=law, replicates=2000, **QUICK)
    assert wide.curve[-1].p == 1000
    assert wide.risk_at_design.value == pytest.approx(at_1000, abs=0.015)
    narrow = budget(rows=50, columns=50, law=law, replicates=200, **QUICK)
    assert narrow.draws == 2000
    assert narrow.risk_at_design.value == pytest.approx(at_50, abs=0.015)
    # Fifty of a thousand alike columns are fifty columns.
    near = min(wide.curve, key=lambda point: abs(point.p - 50))
    assert near.risk == pytest.approx(at_50, abs=0.015)


def test_a_plain_simulation_with_its_own_draws():
    rng = np.random.default_rng(8)
    level, passing, tries = float(penalty_level(200, 0.05)), 0, 1500
    for _ in range(tries):
        X, e = rng.standard_t(3, (60, 200)), rng.standard_t(3, 60)
        X, e = X - X.mean(axis=0), e - e.mean()
        ratios = np.abs(e @ X) / np.sqrt(60 * (X**2).mean(axis=0) * (e**2).mean())
        passing += ratios.max() > level
    share = passing / tries
    found = budget(rows=60, columns=200, law="student-t:df=3", replicates=150, **QUICK)
    error = math.sqrt(share * (1 - share) * (1 / tries + 1 / found.draws))
    assert found.risk_at_design.value == pytest.approx(share, abs=4 * error)
    assert share > 0.05


def test_with_fifty_rows_heavy_tails_do_not_carry_a_thousand_columns_and_thin_ones_do():
    """Common practice, no source."""
    heavy = budget(rows=50, columns=1000, law="student-t:df=3", replicates=600, **QUICK).noise
    assert heavy.reached
    assert heavy.high < 1000
    # A number near the rows is not clearly too many: the band holds it.
    assert heavy.low <= 50 <= heavy.high
    thin = budget(rows=50, columns=1000, law="normal", replicates=600, **QUICK).noise
    assert (thin.columns, thin.reached, thin.high) == (1000, False, None)


@pytest.mark.parametrize("law", ["normal", "student-t:df=6"])
def test_thin_tails_have_no_noise_limit_up_to_twenty_thousand_columns(law):
    plan, found = scores_of(law, 200, 20_000, 200)
    limit, curve = plan_noise(plan, found)
    assert (limit.columns, limit.reached, limit.note) == (20_000, False, "at least")
    assert limit.low == 20_000
    # Under normal errors the risk falls with p, from P(|N| > L(1)) = .031 on.
    assert curve[0].risk == pytest.approx(0.031, abs=0.006)
    if law == "normal":
        # p P(|N| > L(p)) at 20 000 is .0011: L = 1.1 * 4.708 = 5.18.
        assert curve[-1].risk < 0.01
        risks = [point.risk for point in curve]
        assert all(b <= a + 0.004 for a, b in itertools.pairwise(risks))
    # Negative control: heavy tails have one.
    heavy, sample = scores_of("student-t:df=3", 200, 20_000, 60)
    assert plan_noise(heavy, sample)[0].columns < 200


def test_heavy_columns_and_errors_together_make_the_risk():
    # Simulated beforehand with other code: n = 250, p = 1000, level Phi^-1(1 - .1/2p), columns
    # and errors t(2.5): .74 under equal loadings, .007 self-normalised.
    law = "student-t:df=2.5"
    level = float(penalty_level(1000, 0.1, 1.0))
    shares = {}
    for rule in ("plug-in", "self-normalised"):
        plan = stated_plan(
            rows=250, columns=1000, law=law, column_law=None, correlation=0.0, rule=rule,
            loss="squared", explained=None, replicates=200, seed=3,
            target=target_of(
                relevant=10, smallest_effect=0.15, risk=0.1, power=0.8, stability=0.75,
                false_share=0.2,
            ),
        )  # fmt: skip
        found = plan_scores(plan, serial_map, draws=200, twin=False)[0].found
        shares[rule] = len(set(found.draw[found.ratio > level].tolist())) / 200
    assert shares["plug-in"] == pytest.approx(0.74, abs=0.12)
    assert shares["self-normalised"] < 0.04
