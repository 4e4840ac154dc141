"""Signal limit: detectable effects by hand, the limit by a scan over p."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import norm

from scantling.design.spec import TargetSpec
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import normal_law, student_law
from scantling.planning.breakthrough import ScoreSample
from scantling.planning.case import Case
from scantling.planning.recipe import standardise
from scantling.planning.signal import (
    detectable_effects,
    score_deviation,
    signal,
    signal_limit_of,
)
from scantling.simulation.scores import centre, passers

QUIET = passers(np.zeros((60, 10)), 1.0)


def case_of(**changes):
    law = changes.pop("law", student_law(4, sd=2.0))
    X = standardise(np.random.default_rng(0).standard_normal((100, 60)))
    case = Case(
        X=X, law=law, law_draws=(law,) * 50, response_sd=2.5, residual_sd=2.0,
        target=TargetSpec(), rule="plug-in", replicates=100, seed=1,
    )  # fmt: skip
    return replace(case, **changes)


def sample_of(found=QUIET, loadings=(1.9,)):
    return ScoreSample(found=found, loadings=np.array(loadings))


def volatile(path):
    path = np.asarray(path, dtype=float)
    return Volatility(
        omega=0.1, alpha=0.1, beta=0.8, innovation="student-t", nu=5.0, persistence=0.9,
        tail_index=5.0, path=path, path_draws=path[None], log_likelihood=0.0,
    )  # fmt: skip


def by_hand(p, *, lam=None, v=1.9, tau=2.0, n=100, sd=2.5, power=0.8, risk=0.05):
    lam = 1.1 * norm.isf(risk / (2 * p)) if lam is None else lam
    return (lam * v + norm.ppf(power) * tau) / (math.sqrt(n) * sd)


def test_detectable_effects_by_hand():
    case = case_of()
    deviation = score_deviation(case.X, case.law)
    assert deviation.tolist() == [2.0] * 60
    found = detectable_effects(case, sample_of(), deviation, 20)
    np.testing.assert_allclose(found, by_hand(20), rtol=1e-12)
    # L(20) = 1.1 * 3.0233 = 3.3257; (3.3257 * 1.9 + .8416 * 2) / 25 = .3201.
    assert found[0] == pytest.approx(0.3201, abs=1e-4)


def test_the_simulated_quantile_takes_over_where_noise_passes():
    ratios = np.zeros((60, 100))
    ratios[0] = 7.0  # one column breaks through in every draw
    sample = sample_of(passers(ratios, 1.0))
    case = case_of()
    found = detectable_effects(case, sample, np.full(60, 2.0), 60)
    np.testing.assert_allclose(found, by_hand(60, lam=7.0), rtol=1e-12)
    # Taken alone it is that column in one draw of sixty: below the accepted risk.
    alone = detectable_effects(case, sample, np.full(60, 2.0), 1)
    np.testing.assert_allclose(alone, by_hand(1), rtol=1e-12)


def test_each_column_has_its_own_loading_and_deviation():
    case = case_of()
    loadings, deviation = np.linspace(1, 3, 60), np.linspace(3, 1, 60)
    found = detectable_effects(case, sample_of(loadings=loadings), deviation, 5)
    expected = [by_hand(5, v=v, tau=t) for v, t in zip(loadings, deviation, strict=True)]
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize("effect", [0.20, 0.27, 0.29, 0.31, 0.335, 0.36])
@pytest.mark.parametrize("noisy", [False, True])
def test_the_limit_by_a_scan_over_p(effect, noisy):
    rng = np.random.default_rng(2)
    scale = 1.3 if noisy else 0.6
    found = passers(np.abs(rng.standard_normal((60, 200))) * scale, 1.0)
    sample = sample_of(found, 1.5 + np.linspace(0, 1, 60) ** 3)  # median and mean far apart
    case = case_of(target=TargetSpec(smallest_effect=effect))
    deviation = np.full(60, 2.0)
    medians = [np.median(detectable_effects(case, sample, deviation, p)) for p in range(1, 61)]
    passing = [p for p, b in zip(range(1, 61), medians, strict=True) if b <= effect]
    expected = math.inf if len(passing) == 60 else max(passing, default=0)
    assert signal_limit_of(case, case.law, sample) == expected
    assert medians == sorted(medians)


def test_the_scan_meets_every_kind_of_answer():
    found = passers(np.abs(np.random.default_rng(2).standard_normal((60, 200))), 1.0)
    limits = [
        signal_limit_of(
            case_of(target=TargetSpec(smallest_effect=e)), student_law(4, sd=2.0), sample_of(found)
        )
        for e in (0.2, 0.3, 0.4)
    ]
    assert limits[0] == 0
    assert 0 < limits[1] < 60
    assert limits[2] == math.inf


def test_score_deviation_with_a_volatility_path_against_simulation():
    rng = np.random.default_rng(5)
    X = standardise(rng.standard_t(4, (80, 3)) * np.linspace(0.2, 3, 80)[:, None])
    law = replace(student_law(6, scale=1.4), volatility=volatile(np.linspace(0.2, 3, 80)))
    deviation = score_deviation(X, law)
    simulated = X.T @ centre(law.draw_given_path(80, 40_000, rng)) / math.sqrt(80)
    # Columns have mean 0, so centring the errors does not move their scores. t(6)^2 has a
    # finite variance only just: 3 % is five standard errors.
    np.testing.assert_allclose(simulated.std(axis=1), deviation, rtol=0.03)
    # Negative control: the law's sd alone, as if column and volatility did not move together.
    assert (deviation > 1.2 * law.sd).all()


def test_the_typical_sd_takes_the_place_of_the_laws():
    case = case_of(law=student_law(2.05, sd=2.0))
    assert score_deviation(case.X, case.law).tolist() == [2.0] * 60
    assert score_deviation(case.X, case.law, 0.7).tolist() == [0.7] * 60
    path = volatile(np.linspace(0.2, 3, 100))
    law = replace(case.law, volatility=path)
    np.testing.assert_allclose(
        score_deviation(case.X, law, 0.7), score_deviation(case.X, law) * 0.7 / law.sd, rtol=1e-12
    )
    # A law without variance has none, whatever the samples show.
    assert np.isinf(score_deviation(case.X, student_law(1.8), 0.7)).all()
    sample = replace(sample_of(), typical_sd=0.7)
    found = signal(case, sample, ())
    assert found.detectable == pytest.approx(by_hand(60, tau=0.7), rel=1e-12)
    # (3.6757 * 1.9 + .8416 * .7) / 25 = .3029; with the law's 2 it is .3467.
    plain = signal(case, sample_of(), ())
    assert found.detectable == pytest.approx(0.3029, abs=1e-4)
    assert plain.detectable == pytest.approx(0.3467, abs=1e-4)
    limits = [
        signal_limit_of(replace(case, target=TargetSpec(smallest_effect=0.31)), case.law, s)
        for s in (sample, sample_of())
    ]
    assert limits[0] == math.inf
    assert limits[1] < 60


def test_a_law_without_variance_has_no_signal_limit():
    found = signal(case_of(law=student_law(1.8)), sample_of(), ())
    assert found.limit.columns is None
    assert "no variance" in found.limit.note
    assert (found.detectable, found.detectable_worst) == (None, None)


def test_a_drawn_law_without_variance_allows_nothing():
    case = case_of(target=TargetSpec(smallest_effect=0.4))
    assert signal_limit_of(case, student_law(1.8), sample_of()) == 0.0
    laws = (student_law(1.8),) * 10 + (case.law,) * 40
    found = signal(replace(case, law_draws=laws), sample_of(), (sample_of(),) * 50)
    assert found.limit.draws.count(0.0) == 10
    assert (found.limit.columns, found.limit.low, found.limit.high) == (60, 0, None)


def test_median_and_worst_tenth_are_reported_at_all_columns():
    loadings = np.linspace(1, 3, 60)
    found = signal(case_of(), sample_of(loadings=loadings), ())
    effects = [by_hand(60, v=v) for v in loadings]
    assert found.detectable == pytest.approx(np.median(effects), rel=1e-12)
    assert found.detectable_worst == pytest.approx(np.quantile(effects, 0.9), rel=1e-12)


def test_heavier_scores_raise_the_detectable_effect():
    calm = signal(case_of(law=normal_law(2.0)), sample_of(), ())
    loud = passers(np.full((60, 10), 6.0), 1.0)
    noisy = signal(case_of(law=normal_law(2.0)), sample_of(loud), ())
    assert noisy.detectable == pytest.approx(by_hand(60, lam=6.0), rel=1e-12)
    assert noisy.detectable > calm.detectable
