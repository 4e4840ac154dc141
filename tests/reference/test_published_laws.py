"""Outside values for error laws, their densities and goodness of fit; sources by each case."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats
from scipy.special import ndtr

from scantling.law.families import normal_law, student_law
from scantling.law.fit import fit_law
from scantling.law.goodness import anderson_darling
from scantling.law.laplace import Laplace
from scantling.law.notation import parse_law, stated_law
from scantling.law.splice import excess_scale
from scantling.law.student import Student, fit_student, reweighted

POWER = (np.arange(1, 101) / 100) ** (-1 / 3)


def log_density(x: float, df: float) -> float:
    """Unit-variance Student t as the package evaluates it."""
    scale = np.array([(df - 2) / df])
    return float(reweighted(np.array([[x]]) ** 2, np.array([df]), scale, 0)[0][0])


def test_unit_variance_student_density() -> None:
    """arch 8.0, t5 at 0, 1, -1, 2; 1e-6."""
    found = [log_density(x, 5.0) for x in (0.0, 1.0, -1.0, 2.0)]
    assert found == pytest.approx([-0.713207, -1.576253, -1.576253, -3.255100], abs=1e-6)
    from arch.univariate import StudentsT

    theirs = StudentsT().loglikelihood([5.0], np.array([0.3, 1.7]), np.ones(2), individual=True)
    assert [log_density(x, 5.0) for x in (0.3, 1.7)] == pytest.approx(list(theirs), abs=1e-9)


def test_the_student_density_tends_to_the_normal() -> None:
    """exact limit; the gap is of order 1/df."""
    for x in (0.0, 1.0, 2.0):
        gaps = [abs(log_density(x, df) - stats.norm.logpdf(x)) for df in (1e3, 1e5)]
        assert gaps[0] < 2e-3
        assert gaps[1] < 2e-5


def test_excess_scales() -> None:
    """scipy genpareto.fit(floc=0): xi .06494, sigma .65438 on the 20 largest; 5e-4."""
    excess = POWER[:20] - POWER[20]
    assert excess_scale(excess, 0.06491) == pytest.approx(0.65439, abs=5e-4)


def test_exponential_likelihood_of_excesses() -> None:
    """exact: -k (ln mean + 1) = -12.846687; 1e-5."""
    excess = POWER[:20] - POWER[20]
    assert -20 * (math.log(excess_scale(excess, 0.0)) + 1) == pytest.approx(-12.846687, abs=1e-5)


@pytest.fixture(scope="module")
def growth() -> np.ndarray:
    """US real GDP growth, 100 dlog, quarterly."""
    from statsmodels.datasets import macrodata

    return 100 * np.diff(np.log(macrodata.load_pandas().data["realgdp"].to_numpy()))


def test_anderson_darling_of_gdp_growth(growth: np.ndarray) -> None:
    """statsmodels normal_ad (mean and sd with n - 1 fitted): 1.6197937; 1e-6."""
    from statsmodels.stats.diagnostic import normal_ad

    uniforms = ndtr((growth - growth.mean()) / growth.std(ddof=1))
    assert anderson_darling(uniforms) == pytest.approx(1.6197937, abs=1e-6)
    assert anderson_darling(uniforms) == pytest.approx(normal_ad(growth)[0], abs=1e-9)


def test_normal_growth_is_rejected(growth: np.ndarray) -> None:
    """statsmodels normal_ad p = .000356, lilliefors .0085; the smallest of 199 draws is .005."""
    found = fit_law(growth, family="normal").fit
    assert found.p_value is not None
    assert found.p_value <= 0.01
    assert found.distance == pytest.approx(1.62, abs=0.02)


def test_stephens_upper_point() -> None:
    """Stephens (1974), JASA 69: 95 % of A^2 (1 + .75/n + 2.25/n^2) after a normal fit is .752
    (simulated .748 at n = 500); .03."""
    samples = np.random.default_rng(1).standard_normal((3000, 500))
    samples -= samples.mean(axis=1, keepdims=True)
    distance = anderson_darling(ndtr(samples / samples.std(axis=1, ddof=1, keepdims=True)))
    upper = np.quantile(distance * (1 + 0.75 / 500 + 2.25 / 500**2), 0.95)
    assert upper == pytest.approx(0.752, abs=0.03)


@pytest.mark.parametrize(
    ("law", "at_0", "at_1", "at_2"),
    [
        ("student-t:df=5", -0.713207, -1.576253, -3.255100),
        ("ged:shape=1", -0.346574, -1.760787, -3.175001),
        ("laplace", -0.346574, -1.760787, -3.175001),
        ("skewed-t:df=5,skew=-0.3", -0.789788, -1.326104, -3.780797),
    ],
)
def test_unit_variance_densities(law: str, at_0: float, at_1: float, at_2: float) -> None:
    """arch 8.0, log densities at 0, 1 and 2; 1e-6."""
    found = parse_law(law).innovation.log_density(np.array([0.0, 1.0, 2.0]))
    assert found == pytest.approx([at_0, at_1, at_2], abs=1e-6)


def test_generalised_error_of_shape_two_is_normal() -> None:
    """exact; 1e-12."""
    x = np.linspace(-6, 6, 25)
    found = parse_law("ged:shape=2").innovation
    assert found.log_density(x) == pytest.approx(stats.norm.logpdf(x), abs=1e-12)
    assert found.cdf(x) == pytest.approx(stats.norm.cdf(x), abs=1e-12)


def test_skewed_density_is_archs() -> None:
    """arch 8.0 SkewStudent, Hansen (1994); 1e-9 over a grid."""
    from arch.univariate import SkewStudent

    x = np.linspace(-8, 8, 33)
    for df, skew in ((2.5, 0.4), (5.0, -0.3), (30.0, 0.6)):
        theirs = SkewStudent().loglikelihood([df, skew], x, np.ones(x.size), individual=True)
        ours = stated_law("skewed-t", {"df": df, "skew": skew}).innovation.log_density(x)
        assert ours == pytest.approx(theirs, abs=1e-9)


def test_stable_density_and_tail() -> None:
    """exact: f(0) = Gamma(1 + 1/1.7)/pi, 1e-6; scipy: cdf(2) = .907077 (1e-4), and at 100
    sf/(C x^-1.7) = 1.00117 with C = .1313070783 (1e-3)."""
    found = parse_law("stable:index=1.7").innovation
    assert math.exp(found.log_density(np.zeros(1))[0]) == pytest.approx(0.2840102460, abs=1e-6)
    assert found.cdf(np.array([2.0]))[0] == pytest.approx(0.907077, abs=1e-4)
    ratio = (1 - found.cdf(np.array([100.0]))[0]) / (0.1313070783 * 100**-1.7)
    assert ratio == pytest.approx(1.00117, abs=1e-3)


def test_absolute_moments() -> None:
    """exact: E|T_3| = 2 sqrt(3)/pi, E|T_5|^3, E T_5^4 = 25; Laplace q!; 1e-9."""
    assert Student(df=3).moment(1) == pytest.approx(1.1026577908, abs=1e-9)
    assert Student(df=5).moment(3) == pytest.approx(4.7450836228, abs=1e-9)
    assert Student(df=5).moment(4) == pytest.approx(25, abs=1e-9)
    assert Laplace().moment(4) == pytest.approx(24, abs=1e-9)
    assert Student(df=3).moment(3) == math.inf


@pytest.mark.parametrize(
    ("law", "index"),
    [
        ("normal:alpha=0.1", 26.486978),
        ("normal:alpha=0.3", 8.359809),
        ("normal:alpha=0.5", 4.730299),
        ("normal:alpha=0.1704959016,beta=0.8", 4.0),
        ("student-t:df=8,alpha=0.1562954751,beta=0.8", 4.0),
        ("normal:alpha=0.0793139468,leverage=0.1,beta=0.85", 4.0),
        ("normal:alpha=0.02,leverage=0.15,beta=0.88", 4.6512),
        ("student-t:df=5,alpha=0.1,beta=0.85", 4.1650),
        ("student-t:df=5,alpha=0.03,leverage=0.1,beta=0.9", 3.443),
        ("student-t:df=5,alpha=0.1", 4.917),
        ("skewed-t:df=5,skew=0,alpha=0.1,beta=0.85", 4.1650),
        ("ged:shape=2,alpha=0.3", 8.359809),
    ],
)
def test_indices_of_stated_volatility(law: str, index: float) -> None:
    """exact equations and scipy quadrature of the Kesten equation; 5e-4. A symmetric skewed t is
    the t, a generalised error of shape 2 the normal."""
    assert parse_law(law).tail_index == pytest.approx(index, abs=6e-4)


def test_student_variances() -> None:
    """exact: nu/(nu - 2)."""
    assert student_law(3).innovation_variance == pytest.approx(3)
    assert student_law(5).innovation_variance == pytest.approx(5 / 3)
    assert normal_law(2).innovation_variance == 4


@pytest.fixture(scope="module")
def stocks() -> dict[str, np.ndarray]:
    """Daily log returns 1999-2018, per cent."""
    from arch.data import nasdaq, sp500

    return {
        name: 100 * np.diff(np.log(module.load()["Adj Close"].to_numpy()))
        for name, module in (("S&P 500", sp500), ("Nasdaq", nasdaq))
    }


@pytest.mark.parametrize(("name", "df"), [("S&P 500", 2.70), ("Nasdaq", 2.68)])
def test_student_df_of_index_returns(stocks: dict, name: str, df: float) -> None:
    """Maximum likelihood elsewhere, location free: 2.70 and 2.68; .08 (location is fixed here)."""
    values = stocks[name] - stocks[name].mean()
    found = 1 / float(fit_student(values[None])[0][0])
    assert found == pytest.approx(df, abs=0.08)
    assert found == pytest.approx(stats.t.fit(values, floc=0)[0], rel=5e-3)


def test_index_returns_cluster(stocks: dict) -> None:
    """arch 8.0, GJR-t, the best of four: alpha 0, gamma .1815, beta .8987 with a fitted mean;
    .01. Standardised residuals have a lighter tail (index about 7) than returns (3.87)."""
    found = fit_law(stocks["S&P 500"], family="student-t", time_ordered=True)
    assert found.volatility is not None
    assert found.volatility.alpha == pytest.approx(0, abs=0.01)
    assert found.volatility.leverage == pytest.approx(0.1815, abs=0.01)
    assert found.volatility.beta == pytest.approx(0.8987, abs=0.01)
    assert [name for name, _ in found.volatility.candidates] == [
        "gjr, student-t", "gjr, normal", "garch, student-t", "garch, normal",
    ]  # fmt: skip
    own = found.without_volatility().tail_index
    assert own > 6
    assert found.tail_index < own
