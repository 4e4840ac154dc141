"""Student t by maximum likelihood against scipy's optimiser, alone and in batches."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from scantling.law.student import SCAN, fit_student, log_constant, profile


@pytest.mark.parametrize("df", [1.2, 2.5, 4.0, 8.0])
@pytest.mark.parametrize("n", [60, 400])
def test_fit_agrees_with_scipy(df: float, n: int) -> None:
    """scipy.stats.t.fit(floc=0): df and scale to 1e-2, log-likelihood to 0.01."""
    sample = 2 * np.random.default_rng(1).standard_t(df, n)
    best_df, _, best_scale = stats.t.fit(sample, floc=0)
    best = stats.t.logpdf(sample, best_df, 0, best_scale).sum()
    gamma, scale, likelihood = (float(v[0]) for v in fit_student(sample[None]))
    assert 1 / gamma == pytest.approx(best_df, rel=1e-2)
    assert scale == pytest.approx(best_scale, rel=1e-2)
    assert likelihood == pytest.approx(best, abs=0.01)
    # The likelihood reported is that of the parameters reported.
    at_fit = stats.t.logpdf(sample, 1 / gamma, 0, scale).sum()
    assert likelihood == pytest.approx(at_fit, abs=1e-6)


def test_normal_samples_reach_the_end_of_the_scan() -> None:
    """Uniform values are lighter than normal: the normal is the best Student t."""
    sample = np.linspace(-1, 1, 500)
    gamma, scale, likelihood = (float(v[0]) for v in fit_student(sample[None]))
    root = np.sqrt(np.mean(sample**2))
    assert gamma == SCAN[0]
    assert scale == pytest.approx(root, rel=2e-3)
    normal = stats.norm.logpdf(sample, 0, root).sum()
    assert normal - 0.6 < likelihood < normal


def test_the_heaviest_law_is_the_cauchy() -> None:
    sample = np.tan(np.linspace(-1.57, 1.57, 300)) ** 3
    assert fit_student(sample[None])[0][0] == SCAN[-1]


def test_a_batch_gives_what_each_sample_gives() -> None:
    samples = np.random.default_rng(2).standard_t(3, (6, 120))
    together = fit_student(samples)
    for row, sample in enumerate(samples):
        for many, one in zip(together, fit_student(sample[None]), strict=True):
            assert many[row] == pytest.approx(one[0], rel=1e-12)


@pytest.mark.parametrize("factor", [1e-50, 1e-3, 1e50])
def test_the_fit_follows_the_unit(factor: float) -> None:
    sample = np.random.default_rng(3).standard_t(3, 200)
    plain, scaled = fit_student(sample[None]), fit_student(factor * sample[None])
    assert scaled[0] == pytest.approx(plain[0], rel=1e-9)
    assert scaled[1] == pytest.approx(factor * plain[1], rel=1e-9)
    assert scaled[2] == pytest.approx(plain[2] - 200 * np.log(factor), rel=1e-9)


def test_the_profile_solves_the_scale() -> None:
    sample = np.random.default_rng(4).standard_t(3, 300)
    likelihood, scale = profile(sample[None], np.array([0.1, 0.3, 0.6]), steps=30)
    for row, gamma in enumerate((0.1, 0.3, 0.6)):
        _, _, best = stats.t.fit(sample, f0=1 / gamma, floc=0)
        assert scale[row, 0] == pytest.approx(best, rel=1e-3)
        expected = stats.t.logpdf(sample, 1 / gamma, 0, scale[row, 0]).sum()
        assert likelihood[row, 0] == pytest.approx(expected, rel=1e-12)


def test_the_constant() -> None:
    for df in (1.0, 3.0, 500.0):
        assert log_constant(np.array(df)) == pytest.approx(stats.t.logpdf(0, df), rel=1e-10)
