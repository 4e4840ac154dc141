"""Further estimators of the tail index, and Hill's index over thresholds."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import levy_stable

from scantling.diagnostics.second_opinion import pareto_excess_gamma, second_opinions
from scantling.diagnostics.tail_estimators import hill
from scantling.diagnostics.tail_index import one_side, tail_index
from scantling.diagnostics.threshold_path import threshold_path

IDEAL = (np.arange(1, 101) / 100) ** (-1 / 3)


def test_generalised_pareto_shape_of_the_ideal_sample():
    """scipy genpareto.fit(floc=0) on X_i = (i/100)^(-1/3), k = 20: shape 0.06494."""
    assert pareto_excess_gamma(IDEAL, 20) == pytest.approx(0.06494, abs=5e-4)


def test_generalised_pareto_shape_has_no_unit():
    sample = np.sort(np.abs(np.random.default_rng(2).standard_t(3, 1000)))[::-1]
    plain = pareto_excess_gamma(sample, 100)
    assert pareto_excess_gamma(1e9 * sample, 100) == pytest.approx(plain, abs=1e-6)
    assert pareto_excess_gamma(np.ones(50), 10) == 0.0


def test_hill_is_the_tail_index_records_own():
    x = np.random.default_rng(3).standard_t(4, 800)
    found = tail_index(x)
    first, _ = second_opinions(x, found)
    assert first.count == found.hill_count == 40
    assert 1 / first.index == pytest.approx(float(hill(one_side(x, "both"), 40)), rel=1e-12)
    assert 1 / first.low - 1 / first.high == pytest.approx(2 * 1.6448536 * found.hill_error)


def test_student_samples_agree_and_stable_ones_do_not():
    """Student t(3): agreement in at least 18 of 20 samples. Stable laws look lighter in range
    than they are: the regression extrapolates what Hill on the largest 5 % does not."""
    rng = np.random.default_rng(4)
    agree = 0
    for _ in range(20):
        x = rng.standard_t(3, 1000)
        agree += all(o.agrees for o in second_opinions(x, tail_index(x)))
    assert agree >= 18
    x = levy_stable.rvs(1.7, 0, size=10_000, random_state=rng)
    assert not second_opinions(x, tail_index(x))[0].agrees


def test_bounded_samples_have_no_finite_index_by_the_excess_fit():
    x = np.random.default_rng(5).uniform(-1, 1, 2000)
    _, second = second_opinions(x, tail_index(x))
    assert second.index == math.inf


def test_path_of_an_exact_pareto_sample_is_stable_almost_throughout():
    sample = (np.arange(1, 2001) / 2000) ** (-1 / 3)
    found = threshold_path(np.concatenate([sample, -sample]))
    assert found.stable_to / found.stable_from > 40
    assert found.stable_index == pytest.approx(3, abs=0.3)
    assert found.counts[0] == 10
    assert found.counts[-1] == 1000


def test_path_equals_hill_at_each_count():
    x = np.random.default_rng(6).standard_t(3, 600)
    found = threshold_path(x)
    ordered = one_side(x, "both")
    for k, index in zip(found.counts.astype(int), found.index, strict=True):
        assert index == pytest.approx(1 / float(hill(ordered, k)), rel=1e-9)


def test_path_of_a_normal_sample_drifts():
    """A normal sample has no stable stretch as long as the t(3) sample's: its index falls."""
    rng = np.random.default_rng(7)
    normal = threshold_path(rng.standard_normal(5000))
    heavy = threshold_path(rng.standard_t(2, 5000))
    assert normal.index[0] > 1.5 * normal.index[-1]
    assert np.log(heavy.stable_to / heavy.stable_from) > np.log(
        normal.stable_to / normal.stable_from
    )


def test_small_samples_have_a_path():
    found = threshold_path(np.random.default_rng(8).standard_t(3, 30))
    assert found.counts.size >= 1
    assert np.isfinite(found.index).all()
