"""Limits with their bands: order statistics of the draws, open ends, missing limits."""

from __future__ import annotations

import math

import pytest

from scantling.planning.limit import AT_LEAST, band, last_below, make_limit, missing_limit


def test_the_band_of_fifty_draws_is_their_third_and_forty_eighth():
    # (50 - 1) * .05 = 2.45 rounded down, * .95 = 46.55 rounded up: outwards on both sides.
    draws = [float(d) for d in range(50)]
    assert band(draws[::-1]) == (2.0, 47.0)


def test_the_band_of_one_draw_is_that_draw():
    assert band([7.0]) == (7.0, 7.0)


def test_a_limit_reached_everywhere():
    limit = make_limit(30.0, [float(d) for d in range(10, 60)], 100, mode="conditional")
    assert (limit.columns, limit.low, limit.high) == (30, 12, 57)
    assert limit.reached
    assert limit.note == ""
    assert limit.draws == tuple(float(d) for d in range(10, 60))


def test_a_limit_reached_with_an_open_end():
    draws = [40.0] * 40 + [math.inf] * 10
    limit = make_limit(50.0, draws, 100, mode="generative")
    assert (limit.columns, limit.low, limit.high) == (50, 40, None)
    assert limit.mode == "generative"


def test_a_limit_not_reached_is_all_columns_and_has_no_upper_end():
    limit = make_limit(math.inf, [math.inf] * 50, 100, mode="conditional")
    assert (limit.columns, limit.low, limit.high) == (100, 100, None)
    assert not limit.reached
    assert limit.note == AT_LEAST == "at least"


def test_a_limit_not_reached_has_no_upper_end_even_if_its_draws_have():
    # "At least 100, high 60" would put the estimate outside of its own band.
    limit = make_limit(math.inf, [60.0] * 50, 100, mode="conditional")
    assert (limit.columns, limit.low, limit.high) == (100, 60, None)


def test_a_limit_of_no_columns():
    limit = make_limit(0.0, [0.0] * 50, 100, mode="conditional")
    assert (limit.columns, limit.low, limit.high, limit.reached) == (0, 0, 0, True)


def test_a_missing_limit_carries_its_reason():
    limit = missing_limit("no variance")
    assert (limit.columns, limit.low, limit.high) == (None, None, None)
    assert limit.note == "no variance"
    assert not limit.reached


@pytest.mark.parametrize("last", [1, 2, 57, 98, 99])
def test_last_below_finds_the_last_that_passes(last):
    seen = []

    def passes(p):
        seen.append(p)
        return p <= last

    assert last_below(passes, 1, 100) == last
    assert len(seen) <= 7
    assert all(1 < p < 100 for p in seen)
