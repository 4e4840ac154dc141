"""The ceiling: the rates by regime, exact floors, caps, and which regime applies."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest

from scantling.diagnostics.column_tails import ColumnTails
from scantling.planning.ceiling import MOST, ceiling, heavy_rate, light_rate, rate_by_regime


def same(index):
    return (index, index, index)


def rate(rows, *, rule="plug-in", share=1.0, errors=None, scores=None):
    return rate_by_regime(rows=rows, rule=rule, heavy_share=share, errors=errors, scores=scores)


@pytest.mark.parametrize(("q", "expected"), [(3, 15), (4, 250), (6, 62_500), (2, 1), (1.5, 0)])
def test_heavy_columns_by_hand(q, expected):
    # METHODS 5.3: n^(q/2-1) at n = 250 is 15.8, 250, 62 500; q = 2 gives 1, below it less.
    found = rate(250, scores=same(q))
    assert (found.columns, found.low, found.high) == (expected,) * 3
    assert not found.capped


def test_whole_rates_lose_nothing_to_rounding():
    # int(exp(log 250)) is 249.
    assert [rate(n, scores=same(4)).columns for n in range(30, 700)] == list(range(30, 700))
    assert [rate(n, scores=same(6)).columns for n in range(30, 700)] == [
        n * n for n in range(30, 700)
    ]
    assert int(math.exp(math.log(250))) == 249  # why this test is needed


def test_floors_are_floors():
    for n in range(30, 400):
        assert rate(n, scores=same(3)).columns == math.isqrt(n)


def test_the_ends_of_the_index_give_the_ends_of_the_rate():
    found = rate(100, scores=(4.0, 3.0, 6.0))
    assert (found.columns, found.low, found.high) == (100, 10, 10_000)
    open_ended = rate(100, scores=(4.0, 3.0, math.inf))
    assert (open_ended.columns, open_ended.high) == (100, None)


def test_light_columns_by_hand():
    # exp(n^(1-2/q)): n = 100, q = 4 gives e^10 = 22026.47; q = 3 gives e^4.64 = 103.6.
    found = rate(100, share=0.0, errors=(4.0, 3.0, 4.0))
    assert (found.columns, found.low, found.high) == (22_026, 103, 22_026)
    assert "light" in found.regime
    assert "heavy" not in found.regime
    # Below two moments the exponent is negative: one column, not none.
    assert rate(100, share=0.0, errors=same(1.5)).columns == 1


def test_no_finite_index_is_capped():
    found = rate(100, share=0.0, errors=same(math.inf))
    assert found.columns == MOST
    assert found.capped
    assert found.high is None
    assert rate(10_000, scores=same(12)).capped


def test_one_heavy_column_in_a_thousand_sets_the_rate():
    # n^(q/2-1) = 100 at q = 4 of the scores, however few; e^10 = 22026 by the errors with none.
    for share in (0.001, 0.5, 1.0):
        found = rate(100, share=share, errors=same(4), scores=same(4))
        assert found.columns == 100
        assert f"heavy or sparse columns ({100 * share:.0f} %)" in found.regime
        assert "light" not in found.regime
    assert rate(100, share=0.0, errors=same(4), scores=same(4)).columns == 22_026


def test_self_normalised_columns_by_hand():
    # exp(n^(1/3)): n = 1000 gives e^10, n = 64 gives e^4 = 54.6.
    for rows, expected in ((1000, 22_026), (64, 54), (27, 20)):
        found = rate(rows, rule="self-normalised")
        assert (found.columns, found.low, found.high) == (expected,) * 3
    assert "self-normalised" in found.regime
    assert rate(30_000, rule="self-normalised").capped


def test_what_is_unknown_is_null_with_its_reason():
    found = rate(100, errors=same(4))
    assert (found.columns, found.low, found.high) == (None, None, None)
    assert "scores' tail index is unknown" in found.regime
    assert "errors' tail index is unknown" in rate(100, share=0.0, scores=same(4)).regime
    assert rate(100, share=0.5, scores=same(4)).columns == 100  # the errors are not needed
    assert rate(100, share=0.0, errors=same(4)).columns == 22_026  # scores are not needed


def test_rates_in_logs():
    assert heavy_rate(100, 5) == pytest.approx(1.5 * math.log(100))
    assert light_rate(100, 4) == pytest.approx(10)
    assert heavy_rate(100, math.inf) == math.inf
    assert light_rate(100, math.inf) == 100


def diagnosed(weight, gammas, errors):
    gamma = np.array(gammas, dtype=float)
    tails = ColumnTails(
        gamma=gamma, error=np.where(np.isfinite(gamma), 0.03, np.nan), gamma_low=gamma - 0.15,
        gamma_high=gamma + 0.1, hill_gamma=gamma,
        hill_error=gamma, p_value=gamma, active_share=np.ones(gamma.size), threshold_count=10,
    )  # fmt: skip
    return SimpleNamespace(weight=weight, errors=errors, scores=SimpleNamespace(tails=tails))


def test_a_diagnosed_design_uses_the_median_heavy_columns_scores():
    errors = SimpleNamespace(index=4.0, low=3.0, high=8.0)
    weight = ("light", "heavy", "sparse", "heavy", "heavy", "heavy")
    # Heavy and sparse columns: gammas .5, .25, .4, .8 and one unknown; the lower median is .4.
    diagnosis = diagnosed(weight, [0.01, 0.5, 0.25, 0.4, np.nan, 0.8], errors)
    found = ceiling(diagnosis, 200, "plug-in")
    low, high = 1 / (0.4 + 0.1), 1 / (0.4 - 0.15)  # that column's own interval
    expected = rate(200, share=5 / 6, errors=(4.0, 3.0, 8.0), scores=(2.5, low, high))
    assert found == expected
    assert (found.columns, found.low, found.high) == (int(200**0.25), 1, 200)


def test_a_diagnosed_design_of_light_columns_needs_the_errors_alone():
    errors = SimpleNamespace(index=4.0, low=3.0, high=math.inf)
    found = ceiling(diagnosed(("light", "light"), [0.1, 0.1], errors), 100, "plug-in")
    assert (found.columns, found.low) == (22_026, 103)
    assert ceiling(diagnosed(("light",), [0.1], None), 100, "plug-in").columns is None
    heavy = diagnosed(("heavy",), [np.nan], errors)
    assert ceiling(heavy, 100, "plug-in").columns is None
    assert ceiling(heavy, 1000, "self-normalised").columns == 22_026
