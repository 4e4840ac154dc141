"""Fitting an error law: the family chosen, its goodness of fit, refusals, notation."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from scantling.errors import InputError
from scantling.law.catalogue import CATALOGUE, FAMILIES
from scantling.law.fit import error_law, fit_law
from scantling.law.goodness import anderson_darling, bootstrap_fit_test, distance_from
from scantling.law.student import fit_student


def students(n: int, df: float, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).standard_t(df, n)


def test_anderson_darling_is_its_integral() -> None:
    """n times the integral of (F_n - u)^2 / (u (1 - u)), on a fine grid."""
    uniforms = np.random.default_rng(1).random(25)
    grid = (np.arange(2_000_000) + 0.5) / 2_000_000
    gap = np.searchsorted(np.sort(uniforms), grid, side="right") / 25 - grid
    expected = 25 * np.mean(gap**2 / (grid * (1 - grid)))
    assert anderson_darling(uniforms) == pytest.approx(expected, rel=1e-4)
    two = anderson_darling(np.stack([uniforms, uniforms**2]))
    assert two[0] == anderson_darling(uniforms)
    assert two[1] == anderson_darling(uniforms**2)


def test_anderson_darling_of_a_value_the_law_cannot_reach_is_large_but_finite() -> None:
    found = anderson_darling(np.array([0.0, 0.5, 1.0]))
    assert np.isfinite(found)
    assert found > 100


@pytest.mark.parametrize("family", FAMILIES)
def test_the_distance_has_no_unit(family: str) -> None:
    sample = students(300, 4)
    plain, large = (
        distance_from(CATALOGUE[family].fit(f * sample), f * sample) for f in (1.0, 1e6)
    )
    assert large == pytest.approx(plain, rel=1e-6)


def test_the_fit_test_is_reproducible_and_counts_itself() -> None:
    sample = students(100, 3)
    normal = CATALOGUE["normal"].fit(sample)
    first = bootstrap_fit_test(sample, normal, seed=1, draws=19)
    assert first == bootstrap_fit_test(sample, normal, seed=1, draws=19)
    assert first[1] == 1 / 20
    assert first[0] == distance_from(normal, sample)


@pytest.mark.parametrize("family", ["normal", "laplace", "ged", "student-t", "skewed-t"])
def test_the_fit_test_has_its_size_under_its_own_law(family: str) -> None:
    """p-values are uniform: of 40 at most 7 are below .05 (chance 1 in 1000)."""
    law = CATALOGUE[family].fit(students(300, 5))
    rng = np.random.default_rng(1)
    rejected = 0
    for number in range(40):
        sample = law.draw(100, rng)
        sample -= sample.mean()
        again = CATALOGUE[family].fit(sample)
        rejected += bootstrap_fit_test(sample, again, seed=number, draws=19)[1] <= 0.05
    assert rejected <= 7


def test_the_family_chosen() -> None:
    assert fit_law(students(1000, 3)).family == "student-t"
    normal = fit_law(np.random.default_rng(2).standard_normal(1000))
    assert normal.family == "normal"
    assert normal.tail_index == math.inf
    assert normal.fit.runner_up in ("student-t", "ged", "skewed-t")
    assert normal.fit.margin is not None
    assert abs(normal.fit.margin) < 2 * normal.fit.margin_error + 1
    assert normal.fit.p_value is not None
    assert normal.fit.p_value > 0.05
    skewed = fit_law(np.random.default_rng(3).exponential(size=1000))
    assert skewed.family == "spliced"
    assert "rejected" in skewed.fit.note
    assert skewed.fit.runner_up in skewed.fit.note
    short = fit_law(np.where(np.arange(200) % 2, 1.0, -1.0) + 0.01 * students(200, 3))
    assert short.family != "spliced"
    assert "too few to splice" in short.fit.note


def test_why_tails_are_not_spliced_is_said() -> None:
    # 600 values of a rejected law: thrown dice have no tail index at all.
    dice = np.random.default_rng(3).integers(1, 7, 600).astype(float)
    found = fit_law(dice)
    assert found.family != "spliced"
    note = f"the {found.family} law is rejected and tails cannot be spliced: "
    assert found.fit.note.startswith(note)
    assert "discrete (6 distinct values)" in found.fit.note
    assert "values:" not in found.fit.note
    # Asked for by name it is not judged, so nothing has to be explained.
    assert fit_law(dice, family="normal").fit.note == ""


def test_a_tie_goes_to_the_heavier_law() -> None:
    rng = np.random.default_rng(4)
    seen = False
    for _ in range(300):
        sample = rng.standard_t(20, 150)
        sample -= sample.mean()
        _, _, likelihood = fit_student(sample[None])
        student = -2 * float(likelihood[0]) + 2 * math.log(150)
        normal = -2 * float(stats.norm.logpdf(sample, 0, sample.std()).sum()) + math.log(150)
        if 0 < student - normal < 2:
            assert fit_law(sample).family == "student-t"
            seen = True
            break
    assert seen


@pytest.mark.parametrize("family", FAMILIES)
def test_a_family_asked_for_is_fitted(family: str) -> None:
    sample = 5 + 3 * students(400, 4)
    found = fit_law(sample, family=family)
    assert found.family == family
    assert found.sd == (math.inf if family == "stable" else pytest.approx(sample.std(), rel=0.25))
    assert found.volatility is None
    assert found.fit.distance is not None
    assert found.fit.p_value is not None
    # The spliced body is the sample's own, so only its tails could be rejected.
    assert (found.fit.p_value > 0.05) == (family != "normal")


@pytest.mark.parametrize("factor", [1e-12, 1e12])
@pytest.mark.parametrize("family", [*FAMILIES, None])
def test_the_law_follows_the_unit(family: str | None, factor: float) -> None:
    sample = students(300, 4)
    plain, scaled = (fit_law(f * sample, family=family) for f in (1.0, factor))
    assert scaled.sd == pytest.approx(factor * plain.sd, rel=1e-4)
    assert scaled.tail_index == pytest.approx(plain.tail_index, rel=1e-6)


def clustered(n: int, seed: int) -> np.ndarray:
    """GARCH(1,1) with t(6) shocks, alpha .15, beta .80, unit variance."""
    rng = np.random.default_rng(seed)
    out, variance = np.empty(n), 1.0
    for t in range(n):
        out[t] = math.sqrt(variance * 4 / 6) * rng.standard_t(6)
        variance = 0.05 + 0.15 * out[t] ** 2 + 0.80 * variance
    return out


def test_volatility_is_looked_for_in_time_order_alone() -> None:
    sample = clustered(1200, 5)
    ordered = fit_law(sample, time_ordered=True)
    assert ordered.volatility is not None
    assert ordered.innovation_variance == pytest.approx(1, rel=0.15)
    assert ordered.sd == pytest.approx(sample.std(), rel=0.1)
    assert ordered.tail_index <= ordered.volatility.tail_index
    assert fit_law(sample).volatility is None
    shuffled = np.random.default_rng(6).permutation(sample)
    assert fit_law(shuffled, time_ordered=True).volatility is None


def test_a_law_on_a_given_path_is_that_of_the_standardised_innovations() -> None:
    sample = clustered(1200, 5)
    volatility = fit_law(sample, time_ordered=True).volatility
    assert volatility is not None
    found = error_law(sample, volatility=volatility, seed=0, family="student-t")
    z = sample / volatility.path
    z = (z - z.mean()) / z.std()
    assert 1 / found.df == pytest.approx(float(fit_student(z[None])[0][0]))
    assert found.volatility is volatility


@pytest.mark.parametrize(
    ("values", "keywords", "words"),
    [
        (np.ones(100), {}, "values: constant"),
        (np.arange(29.0), {}, "values: at least 30 values are needed; found 29"),
        (np.r_[np.arange(40.0), np.inf], {}, "values: finite values are needed; value 41 is inf"),
        (np.ones((40, 2)), {}, "values: one dimension is needed"),
        (["x"] * 40, {}, "values: numbers are needed"),
        (np.arange(40.0), {"family": "cauchy"}, "family: one of normal, laplace, ged, student-t"),
        (np.arange(249.0), {"family": "spliced"}, "family: spliced tails need 250 values"),
        (np.arange(40.0) * 1e150, {}, "values: a largest size between"),
        (np.arange(40.0) * 1e-150, {}, "values: a largest size between"),
        (np.arange(40.0), {"seed": -3}, "seed: 0 or more is needed"),
    ],
)
def test_what_cannot_be_fitted_is_refused(values: object, keywords: dict, words: str) -> None:
    with pytest.raises(InputError, match=words) as refusal:
        fit_law(values, **keywords)
    assert "\n" not in str(refusal.value)
