"""Outside values for variance, dependence, structure and volatility.

Each case states its source and tolerance. Values of other libraries were computed with
statsmodels 0.15 and arch 8.0.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from scantling.diagnostics import dependence, structure, variance, volatility


@pytest.fixture(scope="module")
def engel() -> tuple[np.ndarray, np.ndarray]:
    """Residuals of food expenditure on income, and income."""
    from statsmodels.datasets import engel

    data = engel.load_pandas().data
    income, food = data["income"].to_numpy(), data["foodexp"].to_numpy()
    return food - np.polyval(np.polyfit(income, food, 1), income), income[:, None]


def percent_returns(prices) -> np.ndarray:  # type: ignore[no-untyped-def]
    return 100 * np.diff(np.log(prices["Adj Close"].dropna().to_numpy()))


@pytest.fixture(scope="module")
def stocks() -> np.ndarray:
    """S&P 500 daily log returns 1999-2018, per cent."""
    from arch.data import sp500

    returns = percent_returns(sp500.load())
    assert returns.size == 5030
    return returns


@pytest.fixture(scope="module")
def growth() -> np.ndarray:
    """US real GDP growth, 100 dlog, quarterly."""
    from statsmodels.datasets import macrodata

    values = 100 * np.diff(np.log(macrodata.load_pandas().data["realgdp"].to_numpy()))
    assert values.size == 202
    return values


def test_koenker_on_engel(engel: tuple[np.ndarray, np.ndarray]) -> None:
    """statsmodels het_breuschpagan."""
    result = variance.koenker(*engel)
    assert result.statistic == pytest.approx(109.2627340, abs=1e-5)
    assert result.p_value == pytest.approx(1.42e-25, rel=5e-3)


def test_unstudentised_breusch_pagan_on_engel(engel: tuple[np.ndarray, np.ndarray]) -> None:
    """statsmodels het_breuschpagan, robust=False."""
    result = variance.koenker(*engel, studentised=False)
    assert result.statistic == pytest.approx(635.9584505, abs=1e-4)


def test_white_on_engel(engel: tuple[np.ndarray, np.ndarray]) -> None:
    """statsmodels het_white; 2 degrees of freedom, so p = exp(-LM/2)."""
    result = variance.white(*engel)
    assert result.statistic == pytest.approx(181.1195914, abs=1e-5)
    assert result.p_value == pytest.approx(math.exp(-181.1195914 / 2), rel=1e-4)


def test_dependence_of_daily_returns(stocks: np.ndarray) -> None:
    """statsmodels het_arch and acorr_ljungbox of squares and absolute values, 5 lags."""
    assert dependence.arch_lm(stocks).statistic == pytest.approx(1143.7189815, abs=1e-3)
    assert dependence.mcleod_li(stocks).statistic == pytest.approx(2115.3299996, abs=1e-3)
    absolute = np.abs(stocks - stocks.mean())
    assert dependence.ljung_box(absolute).statistic == pytest.approx(2353.8880440, abs=1e-3)
    permutation = dependence.absolute_ljung_box_permutation(stocks, seed=1)
    # The median differs from the mean by .03 of a standard deviation.
    assert permutation.statistic == pytest.approx(2353.888, rel=0.02)
    assert permutation.p_value == 1 / 1000


def test_dependence_of_the_first_thousand_returns(stocks: np.ndarray) -> None:
    """statsmodels; centred at the mean of the full sample, hence not again."""
    first = (stocks - stocks.mean())[:1000]
    assert dependence.arch_lm(first, centre=False).statistic == pytest.approx(77.0559803, abs=1e-4)
    assert dependence.mcleod_li(first, centre=False).statistic == pytest.approx(
        111.209335, abs=1e-4
    )


def test_dependence_of_gdp_growth(growth: np.ndarray) -> None:
    """statsmodels, 4 lags."""
    engle, squares = dependence.arch_lm(growth, 4), dependence.mcleod_li(growth, 4)
    assert engle.statistic == pytest.approx(9.9290491, abs=1e-5)
    assert engle.p_value == pytest.approx(0.0416399, abs=1e-5)
    assert squares.statistic == pytest.approx(12.0404214, abs=1e-5)
    assert squares.p_value == pytest.approx(0.0170532, abs=1e-5)


@pytest.mark.parametrize(
    ("alpha", "index"),
    [(0.1, 26.486978), (0.3, 8.359809), (0.5, 4.730299), (0.7, 3.172043), (0.9, 2.304337)],
)
def test_arch_index(alpha: float, index: float) -> None:
    """(2a)^(k/2) G((k+1)/2) = sqrt(pi), exact; halves as in Embrechts et al. (1997), sec. 8.4."""
    assert volatility.kesten_index(alpha, 0.0) == pytest.approx(index, abs=1e-5)


@pytest.mark.parametrize(
    ("alpha", "index"), [(1.0, 2.0), (1 / math.sqrt(3), 4.0), ((1 / 15) ** (1 / 3), 6.0)]
)
def test_arch_index_anchors(alpha: float, index: float) -> None:
    """Even moments of a normal: a, 3 a^2, 15 a^3 equal 1, exact."""
    assert volatility.kesten_index(alpha, 0.0) == pytest.approx(index, abs=1e-8)


def test_arch_stationarity_limit() -> None:
    """a < 2 exp(Euler's constant) = 3.5621448, exact: the index vanishes there."""
    limit = 2 * math.exp(0.5772156649)
    assert limit == pytest.approx(3.5621448, abs=1e-6)
    assert volatility.kesten_index(limit + 1e-6, 0.0) == 0.0
    assert 0 < volatility.kesten_index(limit - 1e-3, 0.0) < 1e-3


def test_garch_and_gjr_anchors() -> None:
    """Fourth moments: 3a^2+2ab+b^2 = 1, with 4.5 for t(8), and its GJR form, exact."""
    assert volatility.kesten_index(0.1704959016, 0.8) == pytest.approx(4, abs=1e-6)
    assert volatility.kesten_index(0.1562954751, 0.8, moment_of=8) == pytest.approx(4, abs=1e-6)
    gjr = volatility.kesten_index(0.0793139468, 0.85, gamma=0.1)
    assert gjr == pytest.approx(4, abs=1e-6)


@pytest.mark.parametrize("moment_of", ["normal", 3.0, 5.0, "sample"])
def test_integrated_garch(moment_of: str | float) -> None:
    """a + b = 1 has index 2 for every law of unit variance, exact."""
    law = np.random.default_rng(1).standard_t(4, 300) if moment_of == "sample" else moment_of
    for alpha in (0.05, 0.3, 0.9):
        index = volatility.kesten_index(alpha, 1 - alpha, moment_of=law)  # type: ignore[arg-type]
        assert index == pytest.approx(2, abs=1e-6)


@pytest.mark.parametrize(
    ("alpha", "beta", "normal", "student"),
    [
        (0.10, 0.85, 9.0718, 4.1650),
        (0.10, 0.88, 5.6097, 3.3521),
        (0.11, 0.88, 3.6764, 2.6990),
        (0.15, 0.80, 5.7583, 3.4749),
        (0.05, 0.94, 8.8049, 3.9949),
    ],
)
def test_garch_index(alpha: float, beta: float, normal: float, student: float) -> None:
    """scipy quadrature; normal and t(5) innovations of unit variance."""
    assert volatility.kesten_index(alpha, beta) == pytest.approx(normal, abs=2e-4)
    assert volatility.kesten_index(alpha, beta, moment_of=5) == pytest.approx(student, abs=5e-4)


@pytest.mark.parametrize(
    ("alpha", "gamma", "beta", "index"), [(0.02, 0.15, 0.88, 4.6512), (0.01, 0.18, 0.88, 3.8216)]
)
def test_gjr_index(alpha: float, gamma: float, beta: float, index: float) -> None:
    """scipy quadrature, normal innovations."""
    assert volatility.kesten_index(alpha, beta, gamma=gamma) == pytest.approx(index, abs=2e-4)


def test_garch_log_likelihood_of_stock_indices(stocks: np.ndarray) -> None:
    """arch 8.0, constant mean, per cent returns, GARCH and GJR; parameters of S&P 500 to three
    digits."""
    from arch.data import nasdaq

    technology = percent_returns(nasdaq.load())
    for returns, normal, student, *leaning in (
        (stocks, -6941.54, -6834.48, -6831.79, -6748.27),
        (technology, -8264.87, -8205.34, -8203.95, -8152.70),
    ):
        one = volatility.fit_garch(returns, innovation="normal", mean="constant")
        two = volatility.fit_garch(returns, innovation="student-t", mean="constant")
        assert isinstance(one, volatility.Volatility)
        assert isinstance(two, volatility.Volatility)
        assert one.log_likelihood == pytest.approx(normal, abs=0.05)
        assert two.log_likelihood == pytest.approx(student, abs=0.05)
        for innovation, value in zip(("normal", "student-t"), leaning, strict=True):
            gjr = volatility.fit_garch(
                returns, innovation=innovation, leverage=True, mean="constant"
            )
            assert isinstance(gjr, volatility.Volatility)
            assert gjr.log_likelihood == pytest.approx(value, abs=0.05)
            if returns is stocks and innovation == "student-t":
                got = (gjr.omega, gjr.alpha, gjr.leverage, gjr.beta)
                assert got == pytest.approx((0.0132, 0, 0.1815, 0.8987), abs=6e-4)
                assert gjr.nu == pytest.approx(7.50, abs=0.05)
        if returns is stocks:
            got = (one.omega, one.alpha, one.beta, two.omega, two.alpha, two.beta)
            assert got == pytest.approx((0.0177, 0.1019, 0.8853, 0.0086, 0.0995, 0.9002), abs=6e-4)
            assert two.nu == pytest.approx(6.51, abs=0.05)


def test_irrepresentable_condition() -> None:
    """Zhao et al. (2006): s r/(1 + (s-1) r); powers of r for AR-type columns; 4/3. Exact."""
    equal = np.full((8, 8), 0.3) + 0.7 * np.eye(8)
    values = structure.irrepresentable(equal, range(5), [1] * 5)
    np.testing.assert_allclose(values, 0.6818181818, atol=1e-7)
    powers = 0.5 ** np.abs(np.subtract.outer(np.arange(6), np.arange(6)))
    values = structure.irrepresentable(powers, [0, 1, 2])
    np.testing.assert_allclose(values, [0.5, 0.25, 0.125], atol=1e-7)
    third = np.array([[1, 0, 2 / 3], [0, 1, 2 / 3], [2 / 3, 2 / 3, 1]])
    assert structure.irrepresentable(third, [0, 1], [1, 1])[0] == pytest.approx(4 / 3, abs=1e-12)
    assert structure.irrepresentable(third, [0, 1], [1, -1])[0] == pytest.approx(0, abs=1e-12)


def test_incoherence_of_equally_correlated_columns() -> None:
    """Columns whose sample correlation is .3 exactly: .6818182 for every support of 5."""
    rng = np.random.default_rng(2)
    basis, _ = np.linalg.qr(np.column_stack([np.ones(40), rng.standard_normal((40, 8))]))
    equal = np.full((8, 8), 0.3) + 0.7 * np.eye(8)
    X = basis[:, 1:] @ np.linalg.cholesky(equal).T
    assert structure.incoherence(X, 5, 7, 1) == pytest.approx(0.6818181818, abs=1e-7)


def test_factor_penalties() -> None:
    """Bai et al. (2002), N = 50, T = 100: coefficients of k in IC_p1 and IC_p2, exact."""
    first, second = structure.factor_penalties(100, 50)
    assert first == pytest.approx(0.1051967, abs=1e-7)
    assert second == pytest.approx(0.1173607, abs=1e-7)
