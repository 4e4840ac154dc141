"""Budgets on paper: risk against plain simulation, refusals, reproducibility, memory."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

import scantling
from scantling.core.streams import serial_map, stream
from scantling.errors import InputError
from scantling.law.families import normal_law, student_law
from scantling.planning import paper
from scantling.planning.paper import budget, simulate, together
from scantling.simulation.scores import passers

SMALL = {"rows": 40, "columns": 30, "law": "student-t:df=3", "replicates": 100}


@pytest.mark.parametrize(
    ("law", "at_50", "at_1000"),
    [
        # Plain simulation, 20 000 and 4000 draws of 50 rows with fresh columns of the same law.
        ("student-t:df=3", 0.0486, 0.103),
        ("student-t:df=4", 0.0200, 0.0213),
        ("normal", 0.0069, 0.0005),
    ],
)
def test_risk_at_fifty_rows_against_plain_simulation(law, at_50, at_1000):
    wide = budget(rows=50, columns=1000, law=law, replicates=2000)
    assert wide.curve[-1].p == 1000
    assert wide.risk_at_design.value == pytest.approx(at_1000, abs=0.015)
    narrow = budget(rows=50, columns=50, law=law, replicates=2000)
    assert narrow.risk_at_design.value == pytest.approx(at_50, abs=0.015)
    # Fifty of a thousand alike columns are fifty columns.
    near = min(wide.curve, key=lambda point: abs(point.p - 50))
    assert near.risk == pytest.approx(at_50, abs=0.015)


def test_heavy_columns_and_not_errors_alone_make_the_risk():
    # METHODS 5.5: heavy errors cost little with light columns.
    light = budget(rows=50, columns=200, law="student-t:df=3", column_law="normal", replicates=600)
    heavy = budget(rows=50, columns=200, law="student-t:df=3", replicates=600)
    assert light.risk_at_design.value < 0.03 < heavy.risk_at_design.value
    safe = budget(
        rows=50, columns=200, law="student-t:df=3", rule="self-normalised", replicates=600
    )
    assert safe.risk_at_design.value < 0.01


def test_a_budget_on_paper_is_of_noise_and_signal():
    found = budget(rows=400, columns=60, law="student-t:df=5", smallest_effect=0.3)
    assert (found.asked, found.rows) == (60, 400)
    for limit in (found.noise, found.signal, found.stability, found.geometry, found.assured):
        assert limit.mode == "generative"
    for limit in (found.stability, found.geometry, found.assured):
        assert limit.columns is None
        assert limit.note
    assert found.allowed.columns == min(found.noise.columns, found.signal.columns)
    # n^(q/2-1) = 400^1.5 = 8000, q = 5 of the scores of like columns.
    assert found.ceiling.columns == 8000


def test_the_detectable_effect_of_normal_errors_by_hand():
    found = budget(
        rows=500, columns=100, law="normal", smallest_effect=0.2, power=0.9, explained=0.36
    )
    level = 1.1 * norm.isf(0.05 / 200)
    # sd(y) = sd(e) / sqrt(1 - .36); the loading is the draw's rms, 1 within a hundredth.
    expected = 0.8 * (level + norm.ppf(0.9)) / math.sqrt(500)
    assert found.detectable == pytest.approx(expected, rel=0.01)
    assert found.signal.columns == 100
    assert found.rows_needed == pytest.approx(500 * (expected / 0.2) ** 2, rel=0.02)
    tighter = budget(rows=500, columns=100, law="normal", smallest_effect=0.19)
    small = budget(rows=500, columns=100, law="normal", smallest_effect=0.01)
    assert tighter.signal.reached
    loading = tighter.detectable * math.sqrt(500) - norm.ppf(0.8)
    p = tighter.signal.columns

    def effect(p):
        return (1.1 * norm.isf(0.05 / (2 * p)) * loading / level + norm.ppf(0.8)) / math.sqrt(500)

    assert effect(p) <= 0.19 < effect(p + 1)
    assert small.signal.columns == 0
    assert small.rows_needed is None
    assert "64 times" in small.rows_note


def test_a_large_accepted_risk_is_still_exact():
    # L(1) at risk 0.4 is 0.93, below the usual floor: P(|N| > .9258) = .3546.
    found = budget(rows=200, columns=3, law="normal", risk=0.4, replicates=4000)
    assert found.curve[0].p == 1
    assert found.curve[0].risk == pytest.approx(0.3546, abs=0.03)


def test_penalty_ratio_against_the_normal_twin():
    heavy = budget(rows=50, columns=200, law="student-t:df=3", replicates=800)
    assert heavy.penalty_ratio > 1.05
    assert heavy.equivalent_rows == int(50 / heavy.penalty_ratio**2)
    # Same columns and same error streams: a normal law is its own twin.
    calm = budget(rows=50, columns=200, law="normal", replicates=100)
    assert calm.penalty_ratio == 1.0
    assert calm.equivalent_rows == 50


def test_a_law_without_variance():
    found = budget(**SMALL | {"law": "student-t:df=1.5"})
    assert found.signal.columns is None
    assert "no variance" in found.signal.note
    assert found.allowed.columns is None
    assert found.rows_needed is None
    assert found.noise.columns is not None
    assert found.ceiling.columns == 0


def test_bands_hold_simulation_error_and_shrink_with_it():
    few = budget(rows=40, columns=200, law="student-t:df=3", replicates=100).risk_at_design
    many = budget(rows=40, columns=200, law="student-t:df=3", replicates=2000).risk_at_design
    assert few.low <= few.value <= few.high
    assert many.low < many.value < many.high
    assert many.high - many.low < (few.high - few.low) / 2.5
    # Binomial: the 90 % band is 2 * 1.645 standard errors wide.
    error = math.sqrt(many.value * (1 - many.value) / 2000)
    assert many.high - many.low == pytest.approx(3.29 * error, rel=0.4)


def test_draws_share_columns_only_where_fresh_ones_cost_too_much():
    assert together(50, 1000, 400) == 1
    assert together(500, 1000, 400) == 5  # 80 tables of half a million values
    assert together(1000, 5000, 400) == 50  # eight tables at least


def test_draws_that_share_columns_are_resampled_together():
    # Four of eight tables break through in each of their ten draws.
    ratios = np.zeros((6, 80))
    ratios[:, :40] = 9.0
    found = passers(ratios, 1.0)
    _, shared = paper._noise(found, 10, 0.05, 1)
    _, alone = paper._noise(found, 1, 0.05, 1)
    assert shared[-1].risk == alone[-1].risk == 0.5
    # 90 % of the mean of 8 fair coins lies in 2/8..6/8; of 80, within 1.645 * .056 of a half.
    assert shared[-1].high - shared[-1].low == pytest.approx(0.5, abs=0.13)
    assert alone[-1].high - alone[-1].low == pytest.approx(3.29 * math.sqrt(0.25 / 80), rel=0.35)
    assert all(0 <= point.low <= point.high <= 1 for point in shared)


def test_workers_do_not_matter_and_the_seed_does():
    one = budget(**SMALL)
    assert one == budget(**SMALL, workers=3)
    assert one == budget(**SMALL | {"law": student_law(3, sd=1.0)})
    assert one != budget(**SMALL, seed=2)
    assert scantling.budget(**SMALL) == one


def test_the_same_columns_meet_every_law():
    law = student_law(3, sd=1.0)
    one, two = simulate(30, 5, (law, normal_law(1.0)), law, "plug-in", 60, 1, serial_map, 0.0)
    alone = simulate(30, 5, (normal_law(1.0),), law, "plug-in", 60, 1, serial_map, 0.0)[0]
    np.testing.assert_array_equal(two[0].ratio, alone[0].ratio)
    assert one[0].draws == 60
    X = law.draw((30, 5), stream(1, "stated columns", 0))
    X = X - X.mean(axis=0)
    e = law.draw((30, 1), stream(1, "stated errors", 0))[:, 0]
    e = e - e.mean()
    ratios = np.abs(e @ X) / np.sqrt((X**2).mean(axis=0) * 30 * (e**2).mean())
    np.testing.assert_allclose(one[0].ratio[one[0].draw == 0], ratios, rtol=1e-10)
    assert not np.array_equal(one[0].ratio, two[0].ratio)


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("rows", 29), ("rows", 40.0), ("rows", True), ("rows", "40"),
        ("columns", 0), ("columns", -3), ("columns", 2.5), ("columns", None),
        ("replicates", 49), ("replicates", 1e3),
        ("risk", 0), ("risk", 0.5), ("risk", math.nan), ("risk", "much"), ("risk", None),
        ("power", 0), ("power", 1), ("power", -0.1),
        ("explained", -0.01), ("explained", 1.0),
        ("smallest_effect", 0), ("smallest_effect", 6), ("smallest_effect", math.inf),
        ("rule", "bic"), ("rule", None),
        ("law", "cauchy"), ("law", "student-t"), ("law", "student-t:df=-1"), ("law", 3),
        ("law", None), ("column_law", "normal:sd=2"), ("column_law", 1.5),
        ("seed", -1), ("seed", 1.5), ("seed", None),
        ("workers", 0), ("workers", "two"),
    ],
)  # fmt: skip
def test_each_argument_is_refused_by_name(name, value):
    with pytest.raises(InputError) as refusal:
        budget(**SMALL | {name: value})
    message = str(refusal.value)
    assert message.startswith(name)
    assert "\n" not in message


def test_numbers_as_numpy_or_text_are_read_as_numbers():
    one = budget(**SMALL)
    two = budget(**SMALL | {"rows": np.int64(40), "columns": np.int32(30)}, risk=np.float64(0.05))
    assert one == two


@pytest.mark.parametrize(
    ("rows", "columns", "replicates"),
    [(100_000, 10_000, 50), (30, 3_000_000, 50), (30, 200_000, 100_000)],
)
def test_what_would_exceed_the_memory_bound_is_refused_before_it_is_drawn(
    rows, columns, replicates, monkeypatch
):
    monkeypatch.setattr(paper, "simulate", lambda *args: pytest.fail("drawn"))
    with pytest.raises(InputError, match=r"columns: .* GiB; the bound is 2 GiB"):
        budget(rows=rows, columns=columns, law="normal", replicates=replicates)


def test_large_tables_are_not_held_by_many_workers_at_once(monkeypatch):
    held = []
    pool = paper.worker_pool

    def record(workers):
        held.append(workers)
        return pool(1)

    monkeypatch.setattr(paper, "worker_pool", record)
    budget(**SMALL, workers=2)
    monkeypatch.setattr(paper, "MEMORY_BOUND", 100_000)
    budget(**SMALL, workers=4)
    # 32 bytes a cell and 8 a ratio: 62 400 of 100 000.
    assert held == [2, 1]


def test_records_are_frozen():
    found = budget(**SMALL)
    assert replace(found, rows=1).rows == 1
    with pytest.raises(AttributeError):
        found.rows = 1
