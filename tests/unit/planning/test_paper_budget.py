"""Budgets on paper: risk against plain simulation, refusals, reproducibility, memory."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

import scantling
from scantling.errors import InputError
from scantling.law.families import student_law
from scantling.planning import stated
from scantling.planning.assured import assured
from scantling.planning.paper import budget as whole_budget
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import plan_noise
from scantling.planning.stated import draws_of
from scantling.simulation.scores import passers

SMALL = {"rows": 40, "columns": 30, "law": "student-t:df=3", "replicates": 100}


def budget(**given):
    """Noise and signal alone, which take a fraction of a second."""
    return whole_budget(**{"refits": False, "tables": False} | given)


def plan_for(rows=40, columns=30, law="student-t:df=3", replicates=100, **given):
    parts = {"column_law": None, "correlation": 0.0, "rule": "plug-in", "loss": "squared"}
    target = target_of(
        relevant=10, smallest_effect=0.15, risk=0.05, power=0.8, stability=0.75, false_share=0.2
    )
    return stated_plan(
        rows=rows, columns=columns, law=law, replicates=replicates, target=target,
        explained=None, seed=1, **parts | given,
    )  # fmt: skip


def test_heavy_columns_and_not_errors_alone_make_the_risk():
    # METHODS 5.5: heavy errors cost little with light columns.
    light = budget(rows=50, columns=200, law="student-t:df=3", column_law="normal", replicates=100)
    heavy = budget(rows=50, columns=200, law="student-t:df=3", replicates=100)
    assert light.risk_at_design.value < 0.03 < heavy.risk_at_design.value
    safe = budget(
        rows=50, columns=200, law="student-t:df=3", rule="self-normalised", replicates=100
    )
    assert safe.risk_at_design.value < 0.01


def test_without_refits_a_budget_is_of_noise_and_signal():
    found = budget(rows=400, columns=60, law="student-t:df=5", smallest_effect=0.3)
    assert (found.asked, found.rows) == (60, 400)
    for limit in (found.noise, found.signal, found.stability, found.geometry, found.assured):
        assert limit.mode == "generative"
    for limit in (found.stability, found.geometry):
        assert limit.columns is None
        assert limit.note == "selection was not simulated"
    assert found.allowed.columns == min(found.noise.columns, found.signal.columns)
    assert (found.rows_needed, found.rows_plan, found.effects) == (None, None, ())
    # n^(q/2-1) = 400^1.5 = 8000, q = 5 of the scores of like columns.
    assert found.ceiling.columns == 8000


def test_a_whole_budget_has_every_limit_and_both_tables():
    found = whole_budget(
        rows=120, columns=12, law="normal", relevant=2, smallest_effect=0.4, replicates=60
    )
    limits = (found.noise, found.signal, found.stability, found.geometry, found.assured)
    assert all(limit.columns is not None and limit.mode == "generative" for limit in limits)
    assert [entry.rows for entry in found.rows_plan.table] == [60, 120, 240, 480]
    assert found.rows_needed == found.rows_plan.needed.rows
    assert len({(e.smallest_effect, e.relevant) for e in found.effects}) == len(found.effects) == 9
    assert {e.smallest_effect for e in found.effects} == {0.2667, 0.4, 0.6}
    assert {e.relevant for e in found.effects} == {1, 2, 4}
    # Only 4 columns of effect .6 would explain more than all: 4 * .36 = 1.44.
    none = [(e.relevant, e.smallest_effect) for e in found.effects if e.allowed is None]
    assert none == [(4, 0.6)]
    assert all(0 <= e.allowed <= 12 for e in found.effects if e.allowed is not None)
    # A normal law is its own twin.
    assert found.geometry.columns == pytest.approx(found.stability.columns, abs=6)


def test_assured_columns_are_those_of_a_drawn_table():
    given = {"rows": 600, "columns": 40, "law": "laplace", "column_law": "normal"}
    plan = plan_for(**given)
    alone = assured(
        plan.case(40).X, plan.law, (), target=plan.target, response_sd=plan.response_sd,
        loss="squared", mode="generative",
    )  # fmt: skip
    assert budget(**given).assured == alone
    many = budget(**given | {"rows": 1000, "columns": 5000}, smallest_effect=0.6, relevant=2,
                  replicates=50)  # fmt: skip
    assert many.assured.columns == 5000  # though the bound looks at 4000 of them
    assert not many.assured.reached
    for change, words in (
        ({"law": "student-t:df=1.5"}, "variance"),
        ({"loss": "huber"}, "huber"),
        ({"law": "normal:alpha=0.1,beta=0.8"}, "volatility"),
    ):
        none = budget(**given | change).assured
        assert none.columns is None
        assert words in none.note


def test_the_detectable_effect_of_normal_errors_by_hand():
    found = budget(
        rows=500, columns=100, law="normal", smallest_effect=0.2, power=0.9, explained=0.36
    )
    level = 1.1 * norm.isf(0.05 / 200)
    # sd(y) = sd(e) / sqrt(1 - .36); the loading is the draw's rms, 1 within a hundredth.
    expected = 0.8 * (level + norm.ppf(0.9)) / math.sqrt(500)
    assert found.detectable == pytest.approx(expected, rel=0.01)
    assert found.signal.columns == 100
    tighter = budget(rows=500, columns=100, law="normal", smallest_effect=0.19, explained=0.0)
    small = budget(rows=500, columns=100, law="normal", smallest_effect=0.01)
    assert tighter.signal.reached
    # The loading and the score's sd are both the draw's typical rms.
    rms = tighter.detectable * math.sqrt(500) / (level + norm.ppf(0.8))
    assert rms == pytest.approx(1, abs=0.02)
    p = tighter.signal.columns

    def effect(p):
        return rms * (1.1 * norm.isf(0.05 / (2 * p)) + norm.ppf(0.8)) / math.sqrt(500)

    assert effect(p) <= 0.19 < effect(p + 1)
    assert small.signal.columns == 0


def test_relevant_columns_explain_what_so_many_independent_ones_do():
    found = budget(**SMALL | {"law": "normal"}, relevant=5, smallest_effect=0.3)
    # 5 * .3^2 = .45 of the variance.
    stated_share = budget(
        **SMALL | {"law": "normal"}, relevant=5, smallest_effect=0.3, explained=0.45
    )
    assert found == stated_share
    # sd(y) = sd(e) / sqrt(1 - share).
    assert plan_for().response_sd == pytest.approx(1 / math.sqrt(1 - 0.225), rel=1e-12)
    none = budget(**SMALL, explained=0.0).detectable
    # No share is capped: 6 * .4^2 = .96.
    huge = budget(**SMALL, relevant=6, smallest_effect=0.4).detectable
    assert huge / none == pytest.approx(math.sqrt(1 - 0.96), rel=1e-12)


@pytest.mark.parametrize(
    ("relevant", "effect", "share"),
    [(10, 0.4, "160"), (4, 0.5, "100"), (1, 5.0, "2,500"), (25, 0.21, "110")],
)
def test_a_target_that_no_response_allows_is_refused(relevant, effect, share):
    with pytest.raises(InputError) as refusal:
        budget(**SMALL, relevant=relevant, smallest_effect=effect)
    assert str(refusal.value) == (
        f"relevant {relevant} x smallest_effect {effect:g}: they would explain {share} % of the"
        " response's variance; under 100 % is needed"
    )
    # Where the share is said outright, that is what counts: columns may offset one another.
    said = budget(**SMALL, relevant=relevant, smallest_effect=effect, explained=0.5)
    assert said.asked == 30
    just = budget(**SMALL, relevant=10, smallest_effect=0.316)
    assert just.detectable > 0


@pytest.mark.parametrize(("columns", "relevant"), [(100, 150), (100, 100), (8, 10), (1, 2)])
def test_as_many_relevant_columns_as_there_are_are_refused(columns, relevant):
    with pytest.raises(InputError) as refusal:
        budget(rows=200, columns=columns, law="normal", relevant=relevant, smallest_effect=0.01)
    assert str(refusal.value) == (
        f"relevant: {relevant}: there are {columns} columns; a number below {max(2, columns)} is"
        " needed"
    )


def test_one_column_may_be_the_relevant_one():
    assert budget(rows=40, columns=1, law="normal", relevant=1, replicates=50).asked == 1


def test_a_large_accepted_risk_is_still_exact():
    # L(1) at risk 0.4 is 0.93, below the usual floor: P(|N| > .9258) = .3546.
    found = budget(rows=200, columns=3, law="normal", risk=0.4, relevant=1, replicates=400)
    assert found.curve[0].p == 1
    assert found.curve[0].risk == pytest.approx(0.3546, abs=0.03)


def test_penalty_ratio_against_the_normal_twin():
    heavy = budget(rows=50, columns=200, law="student-t:df=3", replicates=200)
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
    heavy = {"rows": 200, "columns": 400, "law": "student-t:df=3"}
    few = budget(**heavy, replicates=50).risk_at_design
    whole = budget(**heavy, replicates=800)
    many = whole.risk_at_design
    assert few.low <= few.value <= few.high
    assert many.low < many.value < many.high
    assert many.high - many.low < (few.high - few.low) / 1.3
    # Binomial: the 90 % band is 2 * 1.645 standard errors wide.
    error = math.sqrt(many.value * (1 - many.value) / whole.draws)
    assert many.high - many.low == pytest.approx(3.29 * error, rel=0.4)


def test_more_draws_are_taken_than_asked_where_they_cost_little():
    # 400 million products, and at most ten times the replicates.
    assert draws_of(plan_for(columns=30)) == 1000
    assert draws_of(plan_for(rows=500, columns=1000)) == 800
    assert draws_of(plan_for(rows=2000, columns=4000)) == 100
    assert budget(**SMALL).draws == 1000


def test_draws_that_share_columns_are_resampled_together():
    # Of 4000 independent columns five tables stand for eight; of 30 by 200 each draw has its own.
    shared, alone = plan_for(4000, 4000), plan_for(30, 200)
    ratios = np.zeros((6, 80))
    ratios[:, :48] = 9.0  # three of the five tables break through in each of their draws
    found = passers(ratios, 1.0)
    _, by_table = plan_noise(shared, found)
    _, by_draw = plan_noise(alone, found)
    assert by_table[-1].risk == by_draw[-1].risk == pytest.approx(0.6)
    # 5 % and 95 % of the mean of five coins of .6 are 1/5 and 1; of 80, .6 -+ 1.645 * .0548.
    assert by_table[-1].high - by_table[-1].low == pytest.approx(0.7, abs=0.15)
    assert by_draw[-1].high - by_draw[-1].low == pytest.approx(0.18, rel=0.35)
    for points in (by_table, by_draw):
        assert all(0 <= point.low <= point.risk <= point.high <= 1 for point in points)


def test_workers_do_not_matter_and_the_seed_does():
    one = budget(**SMALL)
    assert one == budget(**SMALL, workers=3)
    fitted = budget(**SMALL | {"law": student_law(3, sd=1.0)})
    assert (fitted.curve, fitted.noise) == (one.curve, one.noise)
    assert one != budget(**SMALL, seed=2)
    assert scantling.budget(**SMALL, refits=False, tables=False) == one


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("rows", 29), ("rows", 40.0), ("rows", True), ("rows", "40"),
        ("columns", 0), ("columns", -3), ("columns", 2.5), ("columns", None),
        ("replicates", 49), ("replicates", 1e3),
        ("risk", 0), ("risk", 0.5), ("risk", math.nan), ("risk", "much"), ("risk", None),
        ("power", 0), ("power", 1), ("power", -0.1),
        ("explained", -0.01), ("explained", 1.0),
        ("smallest_effect", 0), ("smallest_effect", 5.1),
        ("smallest_effect", 6), ("smallest_effect", math.inf),
        ("rule", "lasso"), ("rule", None), ("loss", "cubic"), ("loss", None),
        ("relevant", 0), ("relevant", 2.0), ("correlation", -0.1), ("correlation", 1.0),
        ("stability", 1.1), ("stability", -0.1), ("false_share", 1.0), ("false_share", -0.1),
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
    [(1000, 3_000_000, 400), (30, 3_000_000, 400), (30, 200_000, 100_000), (10**8, 10, 50)],
)
def test_what_would_exceed_the_memory_bound_is_refused_before_it_is_drawn(
    rows, columns, replicates, monkeypatch
):
    monkeypatch.setattr(stated, "plan_scores", lambda *args, **more: pytest.fail("drawn"))
    with pytest.raises(InputError, match=r"columns: .* GiB; the bound is 2 GiB"):
        budget(rows=rows, columns=columns, law="normal", relevant=1, replicates=replicates)


def test_a_million_columns_are_not_refused(monkeypatch):
    # 200 draws of 1000 rows: what the tool promises to carry.
    stated.refuse_too_large(plan_for(1000, 1_000_000, replicates=200))
    monkeypatch.setattr(stated, "MEMORY_BOUND", 2**29)
    with pytest.raises(InputError, match=r"1,000,000 columns of 1,000 rows and 200 replicates"):
        stated.refuse_too_large(plan_for(1000, 1_000_000, replicates=200))


def test_records_are_frozen():
    found = budget(**SMALL)
    assert replace(found, rows=1).rows == 1
    with pytest.raises(AttributeError):
        found.rows = 1
