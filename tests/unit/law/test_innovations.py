"""Every family against scipy and against itself: density, cdf, draws, moments, fits."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy import integrate, stats

from scantling.diagnostics.kesten import kesten_index
from scantling.law.catalogue import CATALOGUE, FAMILIES
from scantling.law.generalised_error import GeneralisedError
from scantling.law.innovation import Innovation
from scantling.law.laplace import Laplace
from scantling.law.normal import Normal
from scantling.law.skewed_student import SkewedStudent
from scantling.law.splice import fit_splice
from scantling.law.spliced import Spliced
from scantling.law.stable import Stable
from scantling.law.student import Student

X = np.array([-30.0, -4.0, -1.3, -0.2, 0.0, 0.4, 1.0, 2.5, 12.0])
LAWS: dict[str, Innovation] = {
    "normal": Normal(scale=1.7),
    "laplace": Laplace(scale=0.6),
    "ged": GeneralisedError(scale=1.2, shape=1.3),
    "student-t": Student(scale=0.8, df=4.5),
    "skewed-t": SkewedStudent(scale=0.9, df=4.5, skew=-0.35),
    "stable": Stable(scale=1.1, index=1.6, skew=0.3),
    "spliced": Spliced(splice=fit_splice(np.random.default_rng(1).standard_t(5, 500), 0.2)),
}
SCIPY = {
    "normal": stats.norm(scale=1.7),
    "laplace": stats.laplace(scale=0.6),
    "ged": stats.gennorm(1.3, scale=1.2),
    "student-t": stats.t(4.5, scale=0.8),
}


def test_every_family_is_tried() -> None:
    assert tuple(LAWS) == FAMILIES
    assert all(type(law) is CATALOGUE[name] for name, law in LAWS.items())


@pytest.mark.parametrize("family", SCIPY)
def test_densities_cdfs_and_moments_are_scipys(family: str) -> None:
    law, theirs = LAWS[family], SCIPY[family]
    assert law.log_density(X) == pytest.approx(theirs.logpdf(X), abs=1e-9)
    assert law.cdf(X) == pytest.approx(theirs.cdf(X), abs=1e-12)
    assert law.variance == pytest.approx(theirs.var(), rel=1e-12)
    assert law.quantile(0.001) == pytest.approx(theirs.ppf(0.001), rel=1e-9)
    assert law.moment(4.0) == pytest.approx(theirs.moment(4), rel=1e-9)
    assert law.moment(3.0) == pytest.approx(
        theirs.expect(lambda x: np.abs(x) ** 3, lb=-np.inf, ub=np.inf), rel=1e-5
    )


@pytest.mark.parametrize("family", LAWS)
def test_values_at_normal_scores_are_quantiles(family: str) -> None:
    law = LAWS[family]
    scores = np.array([[-5.0, -3.0, -1.1], [0.31, 2.4, 4.7]])
    values = law.at_scores(scores)
    assert values.shape == scores.shape
    probability = stats.norm.cdf(scores)
    # The smaller of both tails is met to a part in 1000, whichever side it is on.
    small = np.minimum(probability, 1 - probability)
    assert (law.cdf(values) - probability) / small == pytest.approx(np.zeros((2, 3)), abs=1e-3)


@pytest.mark.parametrize("df", [0.5, 1.3, 3.7, 40.0])
def test_student_draws_are_scipys_law(df: float) -> None:
    drawn = Student(scale=2.0, df=df).draw((50, 4000), np.random.default_rng(3))
    theirs = stats.t(df, scale=2.0)
    # Kolmogorov distance of 200,000 draws: above 0.0036 in one sample of 100.
    assert stats.kstest(drawn.ravel(), theirs.cdf).statistic < 0.0036
    for share in (1e-4, 1e-3):
        beyond = np.mean(np.abs(drawn) > theirs.isf(share / 2))
        assert beyond == pytest.approx(share, abs=3.5 * np.sqrt(share / drawn.size))


@pytest.mark.parametrize(("index", "skew"), [(1.7, 0.0), (1.3, -0.5)])
def test_stable_laws_are_scipys(index: float, skew: float) -> None:
    """scipy.stats.levy_stable, parameterisation S1: density 0.2 %, cdf 1e-4."""
    law = Stable(index=index, skew=skew)
    x = np.array([-40.0, -3.0, -0.5, 0.0, 1.0, 6.0])
    theirs = stats.levy_stable(index, skew)
    assert np.exp(law.log_density(x)) == pytest.approx(theirs.pdf(x), rel=2e-3)
    assert law.cdf(x) == pytest.approx(theirs.cdf(x), abs=1e-4)
    assert law.quantile(0.99) == pytest.approx(theirs.ppf(0.99), rel=2e-3)


@pytest.mark.parametrize("family", FAMILIES)
def test_density_is_the_slope_of_the_cdf(family: str) -> None:
    law = LAWS[family]
    edges = np.linspace(-9, 9, 37) * law.unit
    fine = np.linspace(0, 1, 20_001 if family == "spliced" else 401)
    for low, high in pairwise(edges):
        density = np.exp(law.log_density(low + (high - low) * fine))
        mass = float(integrate.trapezoid(density, dx=(high - low) / (fine.size - 1)))
        gained = np.diff(law.cdf(np.array([low, high])))[0]
        # A step of the spliced body's histogram may fall within a part.
        assert mass == pytest.approx(gained, abs=1e-3 if family == "spliced" else 2e-5)


@pytest.mark.parametrize("family", FAMILIES)
def test_draws_follow_the_cdf(family: str) -> None:
    """Kolmogorov's distance of 100 000 draws: 1 in 1000 exceed 1.95/sqrt(n)."""
    law = LAWS[family]
    drawn = np.sort(law.draw(100_000, np.random.default_rng(3)))
    gap = np.abs(law.cdf(drawn) - np.arange(1, 100_001) / 100_000).max()
    assert gap < 1.95 / math.sqrt(100_000) + (2e-4 if family == "stable" else 0)
    assert law.cdf(np.array([law.quantile(0.3)]))[0] == pytest.approx(0.3, abs=1e-9)
    if family != "stable":
        assert law.draw(100_000, np.random.default_rng(4)).mean() == pytest.approx(
            0, abs=4 * math.sqrt(law.variance / 100_000)
        )


@pytest.mark.parametrize("family", ["normal", "laplace", "ged", "student-t", "stable"])
@pytest.mark.parametrize("order", [0.5, 1.0, 1.4])
def test_closed_moments_are_those_by_quadrature(family: str, order: float) -> None:
    law = LAWS[family]
    assert Innovation.moment(law, order) == pytest.approx(law.moment(order), rel=2e-3)


def test_moments_of_the_skewed_law() -> None:
    """exact: mean 0, and the variance s^2 (1 + 3 skew^2) df/(df - 2) less the squared mean."""
    law = LAWS["skewed-t"]
    assert law.moment(2.0) == pytest.approx(law.variance, rel=1e-9)
    mean = integrate.quad(lambda x: x * math.exp(law.log_density(np.array([x]))[0]), -400, 400,
                          points=[-5, 0, 5], limit=400)[0]  # fmt: skip
    assert mean == pytest.approx(0, abs=1e-5)
    assert law.moment(4.5) == math.inf
    assert 0.5 < law.negative_share < 0.8
    assert LAWS["student-t"].negative_share == pytest.approx(0.5, abs=1e-9)


def test_the_recurrence_of_other_laws() -> None:
    """A generalised error of shape 2 is the normal, a skewed t of skew 0 the t."""
    shape_two, even = GeneralisedError(shape=2.0), SkewedStudent(df=5.0, skew=0.0)
    normal = kesten_index(0.1, 0.85, gamma=0.02)
    found = kesten_index(0.1, 0.85, gamma=0.02, moment_of=shape_two.density_in_units())
    assert found == pytest.approx(normal, abs=1e-6)
    student = kesten_index(0.1, 0.85, gamma=0.02, moment_of=5.0)
    found = kesten_index(0.1, 0.85, gamma=0.02, moment_of=even.density_in_units())
    assert found == pytest.approx(student, abs=1e-6)
    # The longer tail is the one that leverage feeds.
    left, right = (SkewedStudent(df=5.0, skew=s).density_in_units() for s in (-0.3, 0.3))
    low, high = (kesten_index(0.05, 0.8, gamma=0.15, moment_of=d) for d in (left, right))
    assert low < high


@pytest.mark.parametrize(
    ("family", "errors"),
    [
        ("normal", {"scale": 0.02}),
        ("laplace", {"scale": 0.02}),
        ("ged", {"scale": 0.06, "shape": 0.08}),
        ("student-t", {"scale": 0.025, "df": 0.5}),
        ("skewed-t", {"scale": 0.03, "df": 0.5, "skew": 0.025}),
        ("stable", {"scale": 0.04, "index": 0.04, "skew": 0.09}),
    ],
)
def test_fits_recover_the_parameters(family: str, errors: dict[str, float]) -> None:
    """Of ten fits to 3000 values the mean within one, each within four of the stated errors."""
    law = LAWS[family]
    samples = law.draw((10, 3000), np.random.default_rng(5))
    fits = type(law).fit_rows(samples)
    for key, error in errors.items():
        found = np.array([fit.parameters[key] for fit in fits])
        assert found.mean() == pytest.approx(law.parameters[key], abs=error), key
        assert found == pytest.approx(law.parameters[key], abs=4 * error), key


@pytest.mark.parametrize(("family", "free"), [("ged", 2), ("skewed-t", 3), ("laplace", 1)])
def test_fits_are_maxima(family: str, free: int) -> None:
    """No parameter moved by 1 % does better, within 0.02 units of log-likelihood."""
    sample = LAWS[family].draw(500, np.random.default_rng(6))
    best = CATALOGUE[family].fit(sample)
    top = best.log_density(sample).sum()
    assert len(best.parameters) == free
    for key, value in best.parameters.items():
        for factor in (0.99, 1.01):
            other = type(best)(**best.parameters | {key: value * factor})
            assert other.log_density(sample).sum() < top + 0.02


def test_scipys_own_fits_do_no_better() -> None:
    """scipy.stats.gennorm.fit(floc=0): log-likelihood within 0.05."""
    sample = LAWS["ged"].draw(400, np.random.default_rng(7))
    shape, _, scale = stats.gennorm.fit(sample, floc=0)
    theirs = stats.gennorm.logpdf(sample, shape, 0, scale).sum()
    assert GeneralisedError.fit(sample).log_density(sample).sum() > theirs - 0.05


@pytest.mark.parametrize("family", ["student-t", "skewed-t"])
def test_refits_from_the_law_are_the_fits(family: str) -> None:
    law = LAWS[family]
    samples = law.draw((8, 300), np.random.default_rng(8))
    for again, fit, row in zip(law.refits(samples), law.fit_rows(samples), samples, strict=True):
        gap = fit.log_density(row).sum() - again.log_density(row).sum()
        assert abs(gap) < 0.1


def test_fits_at_the_edge_of_a_family_say_so() -> None:
    lopsided = np.random.default_rng(9).exponential(size=400)
    assert SkewedStudent.fit(lopsided - lopsided.mean()).at_edge
    assert not LAWS["skewed-t"].at_edge
    assert Stable.fit(np.linspace(-1, 1, 400)).at_edge
    assert not LAWS["stable"].at_edge
