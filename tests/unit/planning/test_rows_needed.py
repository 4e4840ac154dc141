"""Rows needed: the search on made-up predicates, and where the answer is known in closed form."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

from scantling.core.streams import serial_map
from scantling.planning.generative import Tables
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import plan_effect, plan_noise, plan_scores
from scantling.planning.rows import (
    BRIEF,
    LIMITS,
    PRECISION,
    THOROUGH,
    Effort,
    RowSearch,
    _joint_note,
    _none_in_range,
    fewest_rows,
    plan_cases,
    row_steps,
    rows_plan,
)
from scantling.simulation.scores import penalty_level

QUICK = Effort(tables=Tables(400_000, 1, 6), largest=3_000_000, times=64, refits=20, refit_tables=2)
STEPS = [32, 64, 128, 256, 512, 1024]


def plan_for(rows=200, columns=100, law="normal", **given):
    parts = {
        "relevant": 5, "smallest_effect": 0.2, "risk": 0.05, "power": 0.8, "stability": 0.75,
        "false_share": 0.2,
    }  # fmt: skip
    target = target_of(**{k: given.pop(k, value) for k, value in parts.items()})
    rest = {
        "column_law": None, "correlation": 0.0, "rule": "plug-in", "loss": "squared",
        "explained": 0.0, "replicates": 100, "seed": 1,
    }  # fmt: skip
    return stated_plan(rows=rows, columns=columns, law=law, target=target, **rest | given)


@pytest.mark.parametrize("first", [1, 33, 64, 65, 100, 129, 500, 513, 700, 1023, 1024])
def test_a_threshold_is_found_to_the_precision_and_the_answer_passes(first):
    asked = []

    def holds(n):
        asked.append(n)
        return n >= first

    found = fewest_rows(holds, STEPS)
    assert found >= first
    assert found <= max(STEPS[0], PRECISION * first + 1)
    assert found in asked
    assert len(asked) == len(set(asked)) <= len(STEPS) + 5


def test_none_where_the_last_step_fails_whatever_comes_before():
    assert fewest_rows(lambda n: False, STEPS) is None
    assert fewest_rows(lambda n: n < 1000, STEPS) is None
    assert fewest_rows(lambda n: True, STEPS) == 32
    assert fewest_rows(lambda n: n >= 50, [50]) == 50
    assert fewest_rows(lambda n: n >= 51, [50]) is None


def test_a_limit_that_comes_back_counts_from_where_it_stays():
    # Passes in tiny samples (columns are capped at sqrt(n)), fails, and passes for good from 300.
    found = fewest_rows(lambda n: n < 100 or n >= 300, STEPS)
    assert 300 <= found <= 315
    # A gap between steps is not seen; one at a step is.
    assert fewest_rows(lambda n: n != 256, STEPS) > 256
    assert fewest_rows(lambda n: n != 256, STEPS) <= 256 * PRECISION + 1


@pytest.mark.parametrize("seed", range(30))
def test_on_any_pattern_every_step_from_the_answer_on_passes(seed):
    rng = np.random.default_rng(seed)
    passing = {n: bool(rng.random() < 0.7) for n in range(1, 1025)}
    found = fewest_rows(lambda n: passing[n], STEPS)
    if not passing[1024]:
        assert found is None
        return
    assert passing[found]
    later = [n for n in STEPS if n >= found]
    assert all(passing[n] for n in later)
    earlier = [n for n in STEPS if n < found]
    assert not earlier or not passing[earlier[-1]] or found in STEPS


def test_neighbouring_whole_numbers_end_the_search():
    assert fewest_rows(lambda n: n >= 4, [3, 4]) == 4
    assert fewest_rows(lambda n: n >= 4, [2, 8]) in (4, 5)
    assert fewest_rows(lambda n: n >= 3, [1, 2, 3]) == 3


def test_steps_double_around_the_present_rows_from_the_least_that_theory_takes():
    plan = plan_for(200, 100)
    steps = row_steps(plan, THOROUGH)
    least = math.ceil(4 * (1.1 * norm.isf(0.05 / 200)) ** 2)
    assert steps[0] == least == 59
    assert 200 in steps
    assert steps[-1] == 64 * 200
    assert all(b <= 2 * a for a, b in itertools.pairwise(steps))
    # Large tables end it sooner, but never before four times the present rows.
    assert row_steps(plan_for(200, 10_000), THOROUGH)[-1] == 1600  # 2400 fit
    assert row_steps(plan_for(200, 10**6), THOROUGH)[-1] == 800
    assert row_steps(plan, BRIEF)[-1] == 8 * 200
    # Fewer rows than the least: it is still the first step.
    assert row_steps(plan_for(30, 10**6), THOROUGH)[0] == math.ceil(
        4 * float(penalty_level(10**6, 0.05)) ** 2
    )


@pytest.mark.parametrize("effect", [0.12, 0.2, 0.3])
def test_signal_rows_under_normal_errors_in_closed_form(effect):
    """(L(p) + Phi^-1(power)) / sqrt(n) = effect, the draw's rms being 1 within a few per cent."""
    plan = plan_for(100, 60, smallest_effect=effect)
    found = rows_plan(plan, serial_map, refits=False, effort=QUICK)
    level = 1.1 * norm.isf(0.05 / 120)
    expected = max(((level + norm.ppf(0.8)) / effect) ** 2, 4 * level**2)
    needed = dict(found.by_limit)["signal"]
    assert needed.note == ""
    assert needed.rows == pytest.approx(expected, rel=0.06)
    # Noise does not bind under normal errors: the least rows do, and signal sets the joint figure.
    assert dict(found.by_limit)["noise"].rows == math.ceil(4 * level**2)
    assert dict(found.by_limit)["stability"].rows is None
    assert dict(found.by_limit)["stability"].note == "selection was not simulated"
    assert found.needed.rows == needed.rows
    assert not found.falls


def test_the_answer_passes_and_clearly_fewer_rows_do_not():
    plan = plan_for(100, 60)
    rows = dict(rows_plan(plan, serial_map, refits=False, effort=QUICK).by_limit)["signal"].rows
    search = RowSearch(plan, serial_map, refits=False, effort=QUICK)
    assert search.holds("signal", rows)
    assert not search.holds("signal", int(rows / 1.1))
    sample = plan_scores(plan.at(rows), serial_map, draws=200, twin=False, tables=QUICK.tables)[0]
    assert plan_effect(plan.at(rows), sample, 60) <= 0.2


def test_an_effect_beyond_reach_is_null_with_the_range_in_its_note():
    found = rows_plan(plan_for(60, 20, smallest_effect=0.02), serial_map, refits=False,
                      effort=QUICK)  # fmt: skip
    assert found.needed.rows is None
    assert found.needed.note == "64 times as many are not enough for the signal limit"
    assert found.searched_to == 64 * 60
    # Stability is not searched where effects are never detectable; the reason is given once.
    both = rows_plan(plan_for(60, 20, smallest_effect=0.02), serial_map, refits=True,
                     effort=QUICK)  # fmt: skip
    assert dict(both.by_limit)["stability"].rows is None
    assert both.needed.note == found.needed.note


def test_limits_not_lifted_are_named_in_one_sentence():
    plan, steps = plan_for(60, 20), [60, 480]
    alone = {name: _none_in_range(plan, steps, name) for name in LIMITS}
    assert alone["noise"] == "8 times as many are not enough for the noise limit"
    both = "8 times as many are not enough for the noise and stability limits"
    assert _joint_note(plan, steps, [alone["noise"], alone["stability"]]) == both
    # Stability that was not searched repeats the signal's note; other reasons follow, each once.
    assert _joint_note(plan, steps, [alone["signal"]] * 2) == alone["signal"]
    other = "the error law has no variance"
    assert _joint_note(plan, steps, [alone["noise"], other, other]) == f"{alone['noise']}; {other}"
    assert _joint_note(plan, steps, [other]) == other
    assert _joint_note(plan, steps, list(alone.values())).startswith(
        "8 times as many are not enough for the noise, signal and stability limits"
    )


def test_without_variance_only_noise_is_searched():
    found = rows_plan(plan_for(60, 20, law="student-t:df=1.5"), serial_map, refits=True,
                      effort=QUICK)  # fmt: skip
    by = dict(found.by_limit)
    for name in ("signal", "stability"):
        assert by[name].rows is None
        assert "no variance" in by[name].note
    assert found.needed.rows is None
    assert "no variance" in found.needed.note
    assert {(e.signal, e.stability, e.allowed) for e in found.table} == {(None, None, None)}
    assert all(entry.noise is not None for entry in found.table)


def test_the_table_is_of_the_plan_at_other_rows():
    plan = plan_for(80, 150, law="student-t:df=3", smallest_effect=0.36)
    found = rows_plan(plan, serial_map, refits=False, effort=QUICK)
    assert [entry.rows for entry in found.table] == [40, 80, 160, 320]
    for entry in found.table:
        at = plan.at(entry.rows)
        sample = plan_scores(at, serial_map, draws=200, twin=False, tables=QUICK.tables)[0]
        limit, curve = plan_noise(at, sample.found, tables=QUICK.tables)
        assert entry.noise == limit.columns
        assert entry.risk == pytest.approx(curve[-1].risk, abs=1e-12)
        assert entry.allowed == min(entry.noise, entry.signal)
        assert entry.stability is None
    signals = [entry.signal for entry in found.table]
    assert signals == sorted(signals)
    assert signals[0] < signals[-1] == 150


def test_very_few_rows_are_lifted_to_what_a_budget_takes():
    found = rows_plan(plan_for(36, 12), serial_map, refits=False, effort=QUICK)
    assert [entry.rows for entry in found.table] == [30, 36, 72, 144]
    many = rows_plan(plan_for(36, 80, relevant=50), serial_map, refits=False, effort=QUICK)
    assert [entry.rows for entry in many.table] == [52, 72, 144]


def test_a_noise_limit_that_falls_with_rows_is_said_to():
    # t(4): not reached in 30 rows, where columns are capped at sqrt(n); far lower at 100.
    effort = Effort(tables=Tables(8_000_000, 2), largest=10**6, times=4, refits=20, refit_tables=2)
    found = rows_plan(
        plan_for(60, 3000, law="student-t:df=3", replicates=400), serial_map, refits=False,
        effort=effort,
    )  # fmt: skip
    noise = {entry.rows: entry.noise for entry in found.table}
    assert noise[30] > 2 * noise[120]
    assert found.falls


def test_joint_rows_are_the_largest_of_the_limits():
    plan = plan_for(120, 20, relevant=2, smallest_effect=0.35)
    found = rows_plan(plan, serial_map, refits=True, effort=QUICK)
    by = dict(found.by_limit)
    assert list(by) == ["noise", "signal", "stability"]
    assert found.needed.rows == max(needed.rows for needed in by.values())
    assert by["stability"].rows >= 0.5 * by["signal"].rows
    search = RowSearch(plan, serial_map, refits=True, effort=QUICK)
    assert search.holds("stability", by["stability"].rows)
    allowed = [entry.allowed for entry in found.table]
    assert allowed[0] < 20 == allowed[-1]
    for entry in found.table:
        assert entry.allowed == min(entry.noise, entry.signal, entry.stability)


def test_support_sets_share_as_many_tables_as_the_effort_has():
    cases = plan_cases(plan_for(40, 10), 10, 2)
    assert cases(0) is cases(2) is cases(4)
    assert cases(1) is cases(3)
    assert not np.array_equal(cases(0).X, cases(1).X)
    assert cases(0).mode == "generative"


def test_each_number_of_rows_is_simulated_once():
    plan = plan_for(60, 30, law="student-t:df=4")
    search = RowSearch(plan, serial_map, refits=False, effort=QUICK)
    assert search.scores(60) is search.scores(60)
    one, two = search.risk(60), RowSearch(plan, serial_map, refits=False, effort=QUICK).risk(60)
    assert one == two


def test_the_error_of_a_risk_counts_tables_where_they_decide():
    # Independent normal columns: draws are all there is. Heavy columns: a table decides.
    light = RowSearch(plan_for(law="normal"), serial_map, refits=False, effort=QUICK)
    risk = max(light.risk(200), 1 / 200)
    assert light.risk_error(200) < 3 * 1.645 * math.sqrt(risk * (1 - risk) / 200) + 0.01
    heavy = plan_for(rows=200, columns=1000, law="student-t:df=2.5")
    search = RowSearch(heavy, serial_map, refits=False, effort=QUICK)
    again = [
        RowSearch(
            replace(heavy, seed=seed), serial_map, refits=False, effort=QUICK
        ).risk(200) for seed in range(12)
    ]  # fmt: skip
    # 90 % either side: most of twelve other seeds lie within twice of it.
    error = search.risk_error(200)
    assert sum(abs(each - np.mean(again)) <= 2 * error for each in again) >= 10


def test_rows_needed_come_with_what_simulation_error_leaves():
    found = rows_plan(plan_for(law="student-t:df=4", columns=60), serial_map, refits=False,
                      effort=QUICK)  # fmt: skip
    noise = dict(found.by_limit)["noise"]
    assert noise.rows is not None and noise.low is not None
    assert noise.low <= noise.rows
    assert noise.high is None or noise.rows <= noise.high
    needed = found.needed
    assert needed.low is not None and needed.low <= needed.rows
    assert needed.rows == max(n.rows for name, n in found.by_limit if name != "stability")
    assert all(entry.risk_error > 0 for entry in found.table)
