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
from scantling.law.splice import excess_scale
from scantling.law.student import fit_student, reweighted

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
    """arch 8.0, GARCH-t: alpha .0995, beta .9002 with a fitted mean; .01. Standardised
    residuals have a lighter tail (index about 7) than returns (3.87)."""
    found = fit_law(stocks["S&P 500"], time_ordered=True)
    assert found.volatility is not None
    assert found.volatility.alpha == pytest.approx(0.0995, abs=0.01)
    assert found.volatility.beta == pytest.approx(0.9002, abs=0.01)
    own = found.without_volatility().tail_index
    assert own > 6
    assert found.tail_index < own
