"""Allowed columns: the smallest limit under each draw, what binds, and what is missing."""

from __future__ import annotations

import math

import numpy as np
import pytest

from scantling.design.spec import TargetSpec
from scantling.planning.breakthrough import BreakThrough, CurvePoint, ScoreSample
from scantling.planning.budget import Allowed, assemble, combine, standing
from scantling.planning.ceiling import rate_by_regime
from scantling.planning.limit import make_limit, missing_limit
from scantling.planning.rows import Needed, RowsPlan
from scantling.planning.signal import Signal
from scantling.simulation.scores import passers


def limit(point, draws):
    return make_limit(point, draws, 100, mode="conditional")


OPEN = limit(math.inf, [math.inf] * 50)


def test_the_band_is_of_the_smallest_under_each_draw():
    # Two limits that mirror each other: each band spans 3..48 of 1..50, but their minimum
    # never exceeds 25.
    up = limit(25.0, [float(d) for d in range(1, 51)])
    down = limit(30.0, [float(d) for d in range(50, 0, -1)])
    allowed, binding = combine({"noise": up, "signal": down, "stability": OPEN}, 100)
    assert (up.low, up.high) == (down.low, down.high) == (3, 48)
    # Minima 1, 1, 2, 2, ..., 25, 25: third smallest 2, third largest 24; the point 25 is in it.
    assert (allowed.columns, allowed.low, allowed.high) == (25, 2, 25)
    assert binding == "noise"
    assert allowed.note == ""


@pytest.mark.parametrize("name", ["noise", "signal", "stability"])
def test_the_smallest_binds(name):
    limits = dict.fromkeys(("noise", "signal", "stability"), limit(40.0, [40.0] * 50))
    limits[name] = limit(12.0, [12.0] * 50)
    allowed, binding = combine(limits, 100)
    assert (allowed.columns, allowed.low, allowed.high, binding) == (12, 12, 12, name)


def test_ties_go_to_the_first_named():
    equal = limit(20.0, [20.0] * 50)
    for names in (("noise", "signal"), ("signal", "stability")):
        _, binding = combine(dict.fromkeys(names, equal), 100)
        assert binding == names[0]


def test_a_limit_of_none_binds():
    _, binding = combine({"noise": limit(5.0, [5.0] * 50), "signal": limit(0.0, [0.0] * 50)}, 100)
    assert binding == "signal"


def test_no_limit_reached_is_at_least_all():
    allowed, binding = combine({"noise": OPEN, "signal": OPEN}, 100)
    assert (allowed.columns, allowed.low, allowed.high) == (100, 100, None)
    assert (allowed.note, binding) == ("at least", None)


def test_at_least_has_no_upper_end_though_other_laws_reach_a_limit():
    leaning = limit(math.inf, [50.0] * 49 + [math.inf])
    allowed, binding = combine({"noise": leaning, "signal": OPEN}, 100)
    assert (allowed.columns, allowed.low, allowed.high) == (100, 50, None)
    assert binding is None


def test_an_unreached_limit_never_binds_over_a_reached_one():
    low = limit(99.0, [99.0] * 30 + [math.inf] * 20)
    allowed, binding = combine({"noise": OPEN, "signal": low}, 100)
    assert (allowed.columns, allowed.low, allowed.high, binding) == (99, 99, None, "signal")


@pytest.mark.parametrize(
    ("low", "high", "answer"),
    [
        (100, None, "within budget"),
        (100, 100, "within budget"),
        (99, 100, "borderline"),
        (99, 99, "over budget"),
        (0, 0, "over budget"),
        (0, None, "borderline"),
        (None, None, "borderline"),
        (None, 99, "over budget"),
    ],
)
def test_standing_by_the_band(low, high, answer):
    assert standing(Allowed(columns=50, low=low, high=high), 100) == answer


def test_a_missing_limit_leaves_nothing_allowed_and_nothing_binding():
    allowed, binding = combine(
        {"noise": limit(5.0, [5.0] * 50), "stability": missing_limit("no variance")}, 100
    )
    assert (allowed.columns, allowed.low, allowed.high) == (None, None, None)
    assert allowed.note == "stability: no variance"
    assert binding is None


def assembled(**given):
    sample = ScoreSample(found=passers(np.zeros((2, 2)), 1.0), loadings=np.ones(1))
    noise = BreakThrough(
        noise=limit(30.0, [30.0] * 50),
        curve=(
            CurvePoint(p=1, risk=0.01, low=0.0, high=0.02),
            CurvePoint(p=100, risk=0.3, low=0.2, high=0.4),
        ),
        penalty_ratio=1.25, equivalent_rows=128, worst_columns=(4,), worst_shares=(1.0,),
        fitted=sample, drawn=(),
    )  # fmt: skip
    given = {"stability": OPEN} | given
    return assemble(
        target=TargetSpec(),
        rows=200, asked=100, noise=noise,
        signal=Signal(
            limit=limit(60.0, [20.0] * 50), detectable=0.2, detectable_worst=0.3
        ),
        geometry=limit(90.0, [90.0] * 50),
        ceiling=rate_by_regime(
            rows=200, rule="plug-in", heavy_share=1.0, errors=None, scores=(4.0, 4.0, 4.0)
        ),
        assured=limit(7.0, [3.0] * 50), **given,
    )  # fmt: skip


def test_assemble_puts_each_figure_in_its_place():
    found = assembled(
        plan=RowsPlan(
            needed=Needed(rows=350), by_limit=(("noise", Needed(rows=350)),), searched_to=800,
            table=(), falls=False,
        )
    )  # fmt: skip
    assert (found.asked, found.rows) == (100, 200)
    assert (found.allowed.columns, found.allowed.low, found.allowed.high) == (30, 20, 30)
    assert found.binding == "noise"
    risk = found.risk_at_design
    assert (risk.value, risk.low, risk.high) == (0.3, 0.2, 0.4)
    assert (found.penalty_ratio, found.equivalent_rows, found.rows_needed) == (1.25, 128, 350)
    assert found.geometry.columns == 90  # it never enters what is allowed
    assert found.draws == 2  # of the sample behind the risk
    assert found.ceiling.columns == 200
    assert (found.assured.columns, found.assured.low) == (7, 3)
    assert found.rows_note == ""


def test_rows_needed_are_none_where_no_plan_was_made_or_it_found_none():
    assert assembled().rows_needed is None
    assert assembled().rows_note == "rows needed were not searched"
    note = "signal: more rows do not lift the limit up to 64 times the present"
    without = RowsPlan(
        needed=Needed(rows=None, note=note), by_limit=(), searched_to=800, table=(), falls=False
    )
    assert (assembled(plan=without).rows_needed, assembled(plan=without).rows_note) == (None, note)


def test_without_refits_a_missing_stability_limit_is_no_obstacle():
    missing = missing_limit("selection was not simulated")
    assert assembled(stability=missing, refits=False).allowed.columns == 30
    assert assembled(stability=missing).allowed.columns is None
