"""Empirical body with Pareto tails: inverse functions, moments, the index it carries."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import genpareto

from scantling.core.record import read_only
from scantling.diagnostics.tail_estimators import hill
from scantling.law.splice import Splice, enough_for_splice, excess_scale, fit_splice

GRID = np.array([1e-9, 1e-4, 0.05, 0.0999, 0.1, 0.1001, 0.3, 0.5, 0.77, 0.9, 0.93, 0.999, 1 - 1e-9])


def splice(gamma: float, seed: int = 1) -> Splice:
    return fit_splice(np.random.default_rng(seed).standard_t(4, 800), gamma)


@pytest.mark.parametrize("gamma", [0.0, 1e-7, 0.1, 0.3, 0.7, 1.5])
def test_quantile_and_cdf_are_inverse(gamma: float) -> None:
    law = splice(gamma)
    x = law.quantile(GRID)
    assert (np.diff(x) > 0).all()
    assert law.cdf(x) == pytest.approx(GRID, rel=1e-6)
    assert law.quantile(law.cdf(x)) == pytest.approx(x, rel=1e-5, abs=1e-9)


def test_any_shape_is_answered_in_its_shape() -> None:
    law = splice(0.3)
    probability = GRID[:12].reshape(3, 4)
    assert np.array_equal(law.quantile(probability), law.quantile(GRID[:12]).reshape(3, 4))
    assert np.array_equal(
        law.cdf(law.quantile(probability)).ravel(), law.cdf(law.quantile(GRID[:12]))
    )


@pytest.mark.parametrize("gamma", [0.0, 0.1, 0.25, 0.4])
def test_mean_and_variance_against_integration(gamma: float) -> None:
    """Of the quantile function over (0, 1), by adaptive quadrature in the tails."""
    law = splice(gamma)

    mirrored = Splice(
        body=read_only(-law.body[::-1]), gamma=gamma, left_scale=law.right_scale,
        right_scale=law.left_scale,
    )  # fmt: skip

    def lower_tail(of: Splice, order: int) -> float:
        def part(u: float) -> float:  # p = 0.1 u^8 spreads the singularity at p = 0 out
            return float(of.quantile(np.array([0.1 * u**8]))[0]) ** order * 0.8 * u**7

        return float(quad(part, 1e-30, 1, limit=200)[0])

    def whole(order: int) -> float:
        a, b = law.body[:-1], law.body[1:]
        body = (a + b) / 2 if order == 1 else (a * a + a * b + b * b) / 3
        upper = lower_tail(mirrored, order) * (-1) ** order
        return 0.8 * float(body.mean()) + lower_tail(law, order) + upper

    mean, variance = law.mean_and_variance()
    assert mean == pytest.approx(whole(1), abs=1e-5)
    assert variance == pytest.approx(whole(2) - mean**2, rel=1e-5)


def test_moments_that_do_not_exist_are_said_not_to() -> None:
    assert splice(0.5).mean_and_variance()[1] == math.inf
    assert math.isfinite(splice(0.99).mean_and_variance()[0])
    mean, variance = splice(1.0).mean_and_variance()
    assert math.isnan(mean)
    assert variance == math.inf


@pytest.mark.parametrize("gamma", [0.2, 0.4])
def test_draws_carry_the_index(gamma: float) -> None:
    """Excesses plus scale/gamma are exactly Pareto, so Hill on them has no bias; 4 errors."""
    law = splice(gamma)
    draws = law.quantile(np.random.default_rng(2).random(300_000))
    for sign, edge, scale in (
        (1, law.body[-1], law.right_scale),
        (-1, -law.body[0], law.left_scale),
    ):
        beyond = np.sort(sign * draws)[::-1] - edge + scale / gamma
        assert float(hill(beyond, 20_000)) == pytest.approx(gamma, rel=4 / math.sqrt(20_000))
    assert np.mean(draws < law.body[0]) == pytest.approx(0.1, abs=0.002)


def test_draws_have_the_stated_moments() -> None:
    law = splice(0.2)
    draws = law.quantile(np.random.default_rng(3).random(400_000))
    mean, variance = law.mean_and_variance()
    assert draws.mean() == pytest.approx(mean, abs=4 * math.sqrt(variance / 400_000))
    assert draws.var() == pytest.approx(variance, rel=0.03)


@pytest.mark.parametrize("factor", [1e-6, 3.0, 1e6])
def test_fits_follow_the_unit(factor: float) -> None:
    x = np.random.default_rng(4).standard_t(4, 500)
    plain, scaled = fit_splice(x, 0.3), fit_splice(factor * x, 0.3)
    assert scaled.body == pytest.approx(factor * plain.body, rel=1e-12)
    assert scaled.left_scale == pytest.approx(factor * plain.left_scale, rel=1e-4)
    assert scaled.right_scale == pytest.approx(factor * plain.right_scale, rel=1e-4)


def test_the_tails_are_the_samples_own() -> None:
    rng = np.random.default_rng(5)
    x = np.where(rng.random(4000) < 0.5, 1.0, -5.0) * rng.exponential(size=4000)
    law = fit_splice(x, 0.0)
    assert law.left_scale == pytest.approx(5 * law.right_scale, rel=0.2)
    assert law.quantile(np.array([0.01]))[0] == pytest.approx(np.quantile(x, 0.01), rel=0.1)
    assert law.quantile(np.array([0.99]))[0] == pytest.approx(np.quantile(x, 0.99), rel=0.1)


@pytest.mark.parametrize("shape", [0.1, 0.4])
def test_excess_scale_is_the_maximum_given_the_shape(shape: float) -> None:
    """scipy.stats.genpareto with the shape fixed."""
    excess = genpareto.rvs(shape, scale=2, size=300, random_state=np.random.default_rng(6))
    best = genpareto.fit(excess, f0=shape, floc=0)[2]
    assert excess_scale(excess, shape) == pytest.approx(best, rel=1e-3)
    assert excess_scale(excess, 0.0) == excess.mean()


def test_negative_shapes_are_taken_as_zero() -> None:
    assert splice(-0.4).gamma == 0
    assert np.array_equal(splice(-0.4).quantile(GRID), splice(0.0).quantile(GRID))


def test_two_hundred_and_fifty_rows_are_enough() -> None:
    assert enough_for_splice(250)
    assert not enough_for_splice(249)


def test_tied_bodies_stay_increasing() -> None:
    x = np.r_[np.zeros(100), np.random.default_rng(7).standard_t(3, 200)]
    law = fit_splice(x, 0.3)
    assert (np.diff(law.body) >= 0).all()
    assert np.isfinite(law.quantile(GRID)).all()
    with pytest.raises(ValueError, match="read-only"):
        law.body[0] = 0
    assert read_only(law.body) is not law.body
