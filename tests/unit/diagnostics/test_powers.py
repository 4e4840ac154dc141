"""Index of a powered column's score and the highest power allowed, by hand and by property."""

from __future__ import annotations

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scantling.diagnostics.powers import highest_power, power_rule, power_score_index
from scantling.errors import InputError

INDICES = st.one_of(st.floats(0.1, 60), st.just(math.inf))


@pytest.mark.parametrize(
    ("column", "error", "power", "independent", "shared"),
    [
        (4, 4, 1, 4, 2),  # X = Y: half
        (4, 4, 2, 2, 4 / 3),  # squared index-4 column, index-4 error: no variance if shared
        (8, 4, 2, 4, 2),
        (6, 3, 1, 3, 2),
        (9, 2.5, 3, 2.5, 1 / (1 / 3 + 1 / 2.5)),
        (math.inf, 4, 5, 4, 4),
        (4, math.inf, 2, 2, 2),
        (math.inf, math.inf, 6, math.inf, math.inf),
    ],
)
def test_index_by_hand(
    column: float, error: float, power: int, independent: float, shared: float
) -> None:
    assert power_score_index(column, error, power, shared_volatility=False) == pytest.approx(
        independent, rel=1e-14
    )
    assert power_score_index(column, error, power, shared_volatility=True) == pytest.approx(
        shared, rel=1e-14
    )


@pytest.mark.parametrize(
    ("column", "error", "order", "independent", "shared"),
    [
        (9, 5, 2, 4, 2),  # 9/5 = 1.8; shared: 1/(2/9 + .2) = 2.37, 1/(3/9 + .2) = 1.875
        (4, 4, 2, 1, 0),  # equality is not enough: x^2 e has index 2, shared x e has index 2
        (6, 3, 2, 2, 0),  # 1/(1/6 + 1/3) = 2 up to rounding
        (40, 1.9, 2, 0, 0),  # the error itself has no variance
        (math.inf, 3, 2, 6, 6),
        (math.inf, math.inf, 4, 6, 6),
        (13, math.inf, 2, 6, 6),
        (12, math.inf, 2, 5, 5),
    ],
)
def test_highest_power_by_hand(
    column: float, error: float, order: float, independent: int, shared: int
) -> None:
    assert highest_power(column, error, order, shared_volatility=False) == independent
    assert highest_power(column, error, order, shared_volatility=True) == shared


def test_most_caps_the_power() -> None:
    assert highest_power(math.inf, 5, 2, shared_volatility=True, most=2) == 2
    assert highest_power(41, 5, 2, shared_volatility=False, most=50) == 20


@given(INDICES, INDICES, st.integers(1, 8), st.booleans())
def test_index_falls_with_power_and_with_sharing(
    column: float, error: float, power: int, shared: bool
) -> None:
    here = power_score_index(column, error, power, shared_volatility=shared)
    slack = 1 + 1e-12
    assert power_score_index(column, error, power + 1, shared_volatility=shared) <= here * slack
    assert here <= power_score_index(column, error, power, shared_volatility=False) * slack
    assert here >= min(column / power, error) / 2 / slack
    assert power_score_index(2 * column, error, power, shared_volatility=shared) * slack >= here
    assert power_score_index(column, 2 * error, power, shared_volatility=shared) * slack >= here


@given(INDICES, INDICES, st.floats(0.5, 8), st.booleans())
def test_highest_power_is_the_last_that_keeps_the_moment(
    column: float, error: float, order: float, shared: bool
) -> None:
    got = highest_power(column, error, order, shared_volatility=shared)
    kept = [
        power_score_index(column, error, m, shared_volatility=shared) > order * (1 + 1e-12)
        for m in range(1, 7)
    ]
    assert kept == [m <= got for m in range(1, 7)]
    assert got <= highest_power(column, error, order / 2, shared_volatility=shared)
    assert got <= highest_power(2 * column, error, order, shared_volatility=shared)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"column_index": 0}, "column_index: a number above 0 is needed; found 0"),
        ({"column_index": math.nan}, "column_index: a number above 0"),
        ({"error_index": -1}, "error_index: a number above 0"),
        ({"error_index": "four"}, "error_index: a number above 0 is needed; found 'four'"),
        ({"power": 0}, "power: 1 or more is needed; found 0"),
        ({"power": 1.5}, "power: a whole number is needed; found 1.5"),
    ],
)
def test_bad_index_or_power_is_refused(change: dict[str, Any], message: str) -> None:
    given_: dict[str, Any] = {"column_index": 4, "error_index": 4, "power": 1} | change
    with pytest.raises(InputError, match=message):
        power_score_index(**given_, shared_volatility=True)


def test_bad_order_or_most_is_refused() -> None:
    with pytest.raises(InputError, match="order: "):
        highest_power(4, 4, 0, shared_volatility=True)
    with pytest.raises(InputError, match="most: 1 or more"):
        highest_power(4, 4, 2, shared_volatility=True, most=0)


@pytest.mark.parametrize(
    ("column", "error", "shared", "variance", "fourth"),
    [
        (9, 5, False, 4, 2),  # 9/4 > 2 and 9/2 > 4, but 9/3 < 4
        (9, 5, True, 2, 0),  # 1/(1/9 + 1/5) = 3.21; the square 2.37 > 2, the cube 1.875
        (9, 1.5, False, 0, 0),
        (math.inf, math.inf, True, 6, 6),
        (8, 9, False, 3, 1),  # 8/4 = 2 is not above 2
    ],
)
def test_the_rule_at_orders_two_and_four(
    column: float, error: float, shared: bool, variance: int, fourth: int
) -> None:
    rule = power_rule(column, error, shared_volatility=shared)
    assert (rule.keeping_variance, rule.keeping_fourth) == (variance, fourth)
    assert (rule.column_index, rule.error_index) == (column, error)
    assert rule.shared_volatility is shared
