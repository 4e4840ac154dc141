"""Which moments exist: the rule at its bounds, the vetoes, refusals."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import norm

from scantling.diagnostics import moments
from scantling.diagnostics.moments import interval_answers, moment_answer, moment_exists
from scantling.diagnostics.tail_index import TailIndex, tail_index
from scantling.errors import InputError

Z = norm.ppf(0.95)


def verdict(order: float, gamma: float, hill: float, p_value: float = 0.01) -> int:
    """Rule with standard errors of 0.02 for both."""
    columns = (np.array([v]) for v in (gamma, 0.02, hill, 0.02, p_value))
    return int(interval_answers(order, *columns)[0])


@pytest.mark.parametrize("order", [1.0, 2.0, 2.5])
def test_low_orders_rest_on_hill_alone(order: float) -> None:
    bar, half = 1 / order, 0.02 * Z
    for far in (0.0, 2.0):  # whatever the weighted Hill says
        assert verdict(order, far, bar - half - 1e-6) == 1
        assert verdict(order, far, bar - half + 1e-6) == 0
        assert verdict(order, far, bar + half - 1e-6) == 0
        assert verdict(order, far, bar + half + 1e-6) == -1


@pytest.mark.parametrize(("order", "margin"), [(2.6, 0.02), (3.0, 0.02), (3.5, 0.0), (4.0, 0.0)])
def test_higher_orders_rest_on_the_weighted_hill_with_margins(order: float, margin: float) -> None:
    bar, half = 1 / order, 0.02 * Z
    for far in (0.0, 2.0):
        assert verdict(order, bar - half - margin - 1e-6, far) == 1
        assert verdict(order, bar - half - margin + 1e-6, far) == 0
        assert verdict(order, bar + half + 0.03 - 1e-6, far) == 0
        assert verdict(order, bar + half + 0.03 + 1e-6, far) == -1


def test_from_order_six_missing_needs_a_finite_index() -> None:
    assert verdict(6, 0.5, 0.5, p_value=0.05) == -1
    assert verdict(6, 0.5, 0.5, p_value=0.06) == 0
    assert verdict(5.9, 0.5, 0.5, p_value=0.9) == -1


def test_an_order_that_exists_at_a_higher_order_exists_at_a_lower() -> None:
    rng = np.random.default_rng(1)
    gamma, hill, p_value = rng.uniform(0, 1.5, (3, 500))
    error = np.full(500, 0.02)
    for lower, higher in ((1, 2), (3, 4), (4, 6)):
        first, second = (
            interval_answers(order, gamma, error, hill, error, p_value) for order in (lower, higher)
        )
        assert (first[second == 1] == 1).all()
        assert (second[first == -1] <= 0).all()
        assert {-1, 0, 1} == set(first)


@pytest.mark.parametrize("order", [1, 2, 3, 4, 6.5])
def test_normal_moments_against_integration(order: float) -> None:
    expected = 2 * quad(lambda x: x**order * norm.pdf(x), 0, 40)[0]
    assert moments.normal_moment(order) == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("order", [2, 4])
def test_the_scaled_moment_is_one_for_normal_data_and_has_no_unit(order: float) -> None:
    x = norm.ppf((np.arange(1, 200_001) - 0.5) / 200_000)
    assert moments.scaled_moment(x, order) == pytest.approx(1, abs=2e-3)
    y = np.random.default_rng(2).standard_t(3, 500)
    found = moments.scaled_moment(y, order)
    for scale in (1e-300, 1e-3, 50, 1e300):
        assert moments.scaled_moment(y * scale, order) == pytest.approx(found, rel=1e-9)


def test_the_coin_is_fair_only_for_a_diverging_moment() -> None:
    assert moments.coin_share(0) == pytest.approx(norm.cdf(1))
    assert moments.coin_share(1e9) == 0.5
    assert moments.coin_share(math.inf) == 0.5


def test_the_randomised_test_keeps_its_size_and_has_power() -> None:
    """The fourth moment of t(2.2) is infinite, of the normal finite; n = 1000."""
    rng = np.random.default_rng(3)
    heavy = moments.infinite_moment_share(rng.standard_t(1.5, 1000), 4, seed=0)
    light = moments.infinite_moment_share(rng.standard_normal(1000), 4, seed=0)
    assert heavy == pytest.approx(0.95, abs=0.03)
    assert heavy >= moments.veto_bar()
    assert light == 0


def test_the_veto_bar() -> None:
    """0.95 - sqrt(.95 * .05) sqrt(2 ln ln 1000 / 1000)."""
    assert moments.veto_bar() == pytest.approx(0.93645, abs=1e-4)


def light_tail(x: np.ndarray) -> TailIndex:
    """A tail said to be light, so that the rule alone says 'exists'."""
    return replace(tail_index(x), gamma=0.05, gamma_error=0.01, hill_gamma=0.1, hill_error=0.01)


def test_the_randomised_test_vetoes_but_never_establishes() -> None:
    x = np.random.default_rng(3).standard_t(1.5, 1000)
    assert moment_answer(x, light_tail(x), 4, seed=0).answer == "unclear"
    y = np.random.default_rng(3).standard_normal(1000)
    assert moment_answer(y, light_tail(y), 4, seed=0).answer == "exists"
    unsure = replace(light_tail(y), gamma=0.25)
    assert moment_answer(y, unsure, 4, seed=0).answer == "unclear"
    heavy = replace(light_tail(y), gamma=0.5)
    assert moment_answer(y, heavy, 4, seed=0).answer == "missing"


@pytest.mark.parametrize(
    ("order", "implied", "answer"),
    [(4, 3.9, "unclear"), (4, 4.0, "unclear"), (4, 4.1, "exists"), (3, 2.0, "exists"),
     (4, math.inf, "exists"), (4, None, "exists")],
)  # fmt: skip
def test_fitted_volatility_vetoes_from_order_four(
    order: int, implied: float | None, answer: str
) -> None:
    x = np.random.default_rng(3).standard_normal(1000)
    found = moment_answer(x, light_tail(x), order, seed=0, volatility_index=implied)
    assert found.answer == answer
    if answer == "unclear":
        assert f"index {implied:.1f}" in found.reason


def test_below_a_hundred_rows_nothing_is_clear() -> None:
    x = np.random.default_rng(3).standard_normal(99)
    for order in (1, 2, 3, 4):
        found = moment_exists(x, order)
        assert found.answer == "unclear"
        assert "99 rows" in found.reason
    assert moment_exists(np.r_[x, 0.5], 1).answer == "exists"


def test_plain_cases() -> None:
    rng = np.random.default_rng(4)
    cauchy = rng.standard_cauchy(2000)
    assert [moment_exists(cauchy, q).answer for q in (2, 3, 4)] == ["missing"] * 3
    normal = rng.standard_normal(2000)
    assert [moment_exists(normal, q).answer for q in (1, 2, 3, 4)] == ["exists"] * 4
    found = moment_exists(normal, 2)
    assert found.order == 2
    assert "largest 5 %" in found.reason
    assert found == moment_exists(list(normal), 2.0)


@pytest.mark.parametrize("order", [0, -1, 20, float("nan"), "second"])
def test_orders_out_of_range_are_refused(order: object) -> None:
    with pytest.raises(InputError, match="order: "):
        moment_exists(np.arange(100.0), order)  # type: ignore[arg-type]


@pytest.mark.parametrize("values", [np.ones(200), np.zeros(200), [np.inf] * 200, np.arange(20.0)])
def test_what_has_no_tail_is_refused(values: object) -> None:
    with pytest.raises(InputError, match="values: "):
        moment_exists(values, 2)
