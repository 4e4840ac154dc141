"""Outside values for tail estimators, the thin-tail test and moments; data sets of packages.

Each case states its source and tolerance. 'exact' follows by arithmetic from the definition;
data sets are those shipped inside arch, statsmodels and scikit-learn.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from scantling.diagnostics import greenwood, moments, tail_estimators
from scantling.diagnostics.column_tails import column_tails
from scantling.diagnostics.tail_index import one_side, tail_index
from scantling.errors import InputError

FIVE = np.array([10.0, 5, 4, 2, 1])
POWER = (np.arange(1, 101) / 100) ** (-1 / 3)
"""X_i = (i/100)^(-1/3): quantiles of the Pareto law of index 3."""


@pytest.mark.parametrize(
    ("ordered", "count", "gamma"),
    [
        (FIVE, 3, math.log(200) / 3 - math.log(2)),
        (FIVE, 3, 1.0729586083),
        (POWER, 10, 0.2958180052),
        (POWER, 5, 0.2780870402),
        (POWER, 20, 0.3092472049),
    ],
)
def test_hill(ordered: np.ndarray, count: int, gamma: float) -> None:
    """exact: (ln(k+1) - ln(k!)/k)/a for the power quantiles; 1e-9."""
    assert tail_estimators.hill(ordered, count) == pytest.approx(gamma, abs=1e-9)


@pytest.mark.parametrize("count", [5, 50, 199])
def test_hill_is_the_pareto_maximum_likelihood(count: int) -> None:
    """scipy.stats.pareto with location 0 and scale X_(k+1); 1e-8 relative."""
    ordered = one_side(np.random.default_rng(1).standard_t(3, 400), "both")
    shape = stats.pareto.fit(ordered[:count], floc=0, fscale=ordered[count])[0]
    assert 1 / tail_estimators.hill(ordered, count) == pytest.approx(shape, rel=1e-8)


def test_pickands() -> None:
    """exact: ln(5/3)/ln 2, and 1/3 for the power quantiles at any m; 1e-9."""
    assert tail_estimators.pickands(FIVE, 1) == pytest.approx(0.7369655942, abs=1e-9)
    for m in (1, 6, 17, 25):
        assert tail_estimators.pickands(POWER, m) == pytest.approx(1 / 3, abs=1e-9)


def test_moment_estimator() -> None:
    """Independent code; 1e-8."""
    assert tail_estimators.moment_estimator(FIVE, 3) == pytest.approx(-2.2089433591, abs=1e-8)
    assert tail_estimators.moment_estimator(POWER, 20) == pytest.approx(0.1234016336, abs=1e-8)


def test_rank_half_regression() -> None:
    """Independent code, and numpy.polyfit; 1e-8."""
    found = tail_estimators.rank_half_index
    assert found(FIVE, 4) == pytest.approx(1.2294342537, abs=1e-8)
    slope = np.polyfit(np.log(FIVE[:4]), np.log(np.arange(1, 5) - 0.5), 1)[0]
    assert found(FIVE, 4) == pytest.approx(-slope, abs=1e-8)
    assert found(POWER, 10) == pytest.approx(3.7381966296, abs=1e-8)
    assert found(POWER, 20) == pytest.approx(3.4898097984, abs=1e-8)


def test_weighted_hill() -> None:
    """Independent code, weighted regression of H_k on k; 1e-8 and 1e-6."""
    found = tail_estimators.weighted_hill(POWER, 50)
    assert found == pytest.approx(0.2937077200, abs=1e-8)
    for df, alpha in ((3, 3.1744658357), (5, 4.4996494337)):
        quantiles = stats.t.ppf((np.arange(1, 201) - 0.5) / 200, df)
        gamma = tail_estimators.weighted_hill(np.sort(np.abs(quantiles))[::-1], 100)
        assert 1 / gamma == pytest.approx(alpha, abs=1e-6)
        assert tail_index(quantiles).index == pytest.approx(alpha, abs=1e-6)


def test_bias_reduced_hill() -> None:
    """Independent code; 1e-8."""
    found = tail_estimators.bias_reduced_hill(POWER, 20)
    assert found == pytest.approx(0.2770656630, abs=1e-8)


def test_greenwood_statistic() -> None:
    """exact arithmetic; 1e-8."""
    assert greenwood.greenwood_statistic(POWER, 15) == pytest.approx(1.9963484896, abs=1e-8)


def test_greenwood_null_moments() -> None:
    """exact: uniform spacings, k = 25; 1e-6."""
    assert greenwood.null_moments(25) == pytest.approx((1.9230769, 0.1174040), abs=1e-6)


@pytest.mark.parametrize(
    ("count", "point"),
    [(10, 2.643), (15, 2.624), (25, 2.558), (38, 2.487), (50, 2.441), (75, 2.372), (100, 2.327),
     (150, 2.271), (300, 2.194), (750, 2.123)],
)  # fmt: skip
def test_greenwood_upper_points(count: int, point: float) -> None:
    """Simulated separately, 400 000 draws; 0.01. The p-value there is 5 % by the table."""
    mean, variance = greenwood.null_moments(count)
    column = greenwood.UPPER_PROBABILITIES.index(0.05)
    found = mean + math.sqrt(variance) * greenwood.upper_points(count)[column]
    assert found == pytest.approx(point, abs=0.01)
    assert greenwood.greenwood_p_value(np.array(point), count) == pytest.approx(0.05, abs=0.002)


def test_normal_moments() -> None:
    """exact: E|N| = sqrt(2/pi), E N^2 = 1, E|N|^3 = 1.5957691, E N^4 = 3; 1e-6."""
    found = [moments.normal_moment(order) for order in (1, 2, 3, 4)]
    assert found == pytest.approx([math.sqrt(2 / math.pi), 1, 1.5957691, 3], abs=1e-6)


def test_randomised_test_drift() -> None:
    """exact: P(zeta = 1 at u = 1) = Phi(exp(-1/2)) at mu* = 1; 1e-9."""
    assert moments.coin_share(1.0) == pytest.approx(0.7279187853, abs=1e-9)


# Real data inside general packages. Returns are 100 times log differences, missing dropped first.


def returns(prices: np.ndarray) -> np.ndarray:
    prices = np.asarray(prices, dtype=float)
    return 100 * np.diff(np.log(prices[np.isfinite(prices)]))


@pytest.fixture(scope="module")
def series() -> dict[str, np.ndarray]:
    from arch.data import core_cpi, crude, default, frenchdata, nasdaq, sp500, vix, wti
    from sklearn.datasets import load_diabetes
    from statsmodels.datasets import engel, macrodata, randhie

    out = {
        "S&P 500": returns(sp500.load()["Adj Close"]),
        "Nasdaq": returns(nasdaq.load()["Adj Close"]),
        "WTI": returns(wti.load()["DCOILWTICO"]),
        "VIX": returns(vix.load()["vix"]),
        "Brent monthly": returns(crude.load()["Brent"]),
        "WTI monthly": returns(crude.load()["WTI"]),
        "core CPI": np.diff(core_cpi.load()["CPILFESL"].to_numpy(float)),
    }
    for name, values in default.load().items():
        out[f"{name} yield"] = np.diff(values.dropna().to_numpy(float))
    for name, values in frenchdata.load().items():
        out[str(name)] = values.to_numpy(float)
    out["Mkt-RF squared"] = out["Mkt-RF"] ** 2
    out["Mkt-RF x SMB"] = out["Mkt-RF"] * out["SMB"]
    out["S&P 500 x lag"] = out["S&P 500"][1:] * out["S&P 500"][:-1]
    macro = macrodata.load_pandas().data
    out["GDP growth"] = returns(macro["realgdp"].to_numpy())
    out["bill rate"] = np.diff(macro["tbilrate"].to_numpy(float))
    food = engel.load_pandas().data
    income, spent = food["income"].to_numpy(), food["foodexp"].to_numpy()
    out["Engel"] = spent - np.polyval(np.polyfit(income, spent, 1), income)
    X, y = load_diabetes(return_X_y=True)
    design = np.column_stack([np.ones(y.size), X])
    out["diabetes"] = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    out["visits"] = randhie.load_pandas().data["mdvis"].to_numpy(float)
    return out


@pytest.mark.parametrize(
    ("name", "index", "digits"),
    [
        ("S&P 500", 3.87, 2),
        ("Nasdaq", 4.29, 2),
        ("WTI", 3.51, 2),
        ("VIX", 3.79, 2),
        ("Mkt-RF", 3.18, 2),
        ("SMB", 4.30, 2),
        ("HML", 3.55, 2),
        ("Mkt-RF squared", 1.11, 2),
        ("Mkt-RF x SMB", 1.98, 2),
        ("S&P 500 x lag", 1.77, 2),
        ("Brent monthly", 3.2, 1),
        ("WTI monthly", 3.8, 1),
        ("GDP growth", 10.2, 1),
        ("bill rate", 2.46, 2),
        ("Engel", 2.8, 1),
    ],
)
def test_indices_of_real_series(series: dict, name: str, index: float, digits: int) -> None:
    """Point: computed separately by the same definition, to the digits given."""
    assert round(tail_index(series[name]).index, digits) == pytest.approx(index, abs=1e-9)


@pytest.mark.parametrize(
    ("name", "low", "high", "apart"),
    [
        ("S&P 500", 2.7, 7.0, 0.03),
        ("Nasdaq", 3.0, 7.7, 0.03),
        ("WTI", 2.7, 5.1, 0.03),
        ("VIX", 2.8, 6.0, 0.03),
        ("Mkt-RF", 2.3, 5.3, 0.08),
    ],
)
def test_ends_of_real_series_are_near_another_methods(
    series: dict, name: str, low: float, high: float, apart: float
) -> None:
    """Listed ends: a bootstrap's with a bias of at most 0.06 everywhere; in gamma, as stated."""
    found = tail_index(series[name])
    assert 1 / found.low == pytest.approx(1 / low, abs=apart)
    assert 1 / found.high == pytest.approx(1 / high, abs=apart)


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [("Mkt-RF squared", 0.9, 1.5), ("GDP growth", 4.0, math.inf), ("bill rate", 1.5, 6.8)],
)
def test_short_or_very_heavy_series_have_wider_intervals_than_another_methods(
    series: dict, name: str, low: float, high: float
) -> None:
    """Where few rows or slow volatility make the block error doubtful ours hold the listed ones."""
    found = tail_index(series[name])
    assert found.low < low
    assert found.high > high - 0.05 or found.high == high == math.inf  # printed to 0.1


def test_hill_at_fixed_counts_on_the_index(series: dict) -> None:
    """Computed separately: k = 251 (5 %), 50, 100, 503; 5e-4."""
    ordered = one_side(series["S&P 500"], "both")
    for count, alpha in ((251, 2.965), (50, 3.656), (100, 3.425), (503, 2.697)):
        assert 1 / tail_estimators.hill(ordered, count) == pytest.approx(alpha, abs=5e-4)
    found = tail_index(series["S&P 500"])
    assert found.hill_count == 251
    assert 1 / found.hill_gamma == pytest.approx(2.965, abs=5e-4)


@pytest.mark.parametrize(("name", "alpha"), [("Nasdaq", 3.22), ("WTI", 2.86)])
def test_second_opinion_on_real_series(series: dict, name: str, alpha: float) -> None:
    """Hill on the largest 5 %, computed separately; 0.01."""
    assert 1 / tail_index(series[name]).hill_gamma == pytest.approx(alpha, abs=0.01)


def test_oil_without_its_zero_returns(series: dict) -> None:
    """3.49 with the 1.6 % zeros removed, computed separately; 0.005. Fewer than 2 % stay in."""
    oil = series["WTI"]
    assert np.mean(oil == 0) == pytest.approx(0.016, abs=5e-4)
    assert tail_index(oil).note == ""
    assert tail_index(oil[oil != 0]).index == pytest.approx(3.49, abs=0.005)


@pytest.mark.parametrize(
    ("name", "p_value", "tolerance"),
    [
        ("S&P 500", 1e-4, 1e-4),
        ("Nasdaq", 0.001, 5e-4),
        ("GDP growth", 0.72, 0.02),
        ("bill rate", 0.012, 2e-3),
        ("diabetes", 0.76, 0.01),
        ("Brent monthly", 0.54, 0.015),
        ("WTI monthly", 0.45, 0.015),
    ],
)
def test_thin_tails_of_real_series(
    series: dict, name: str, p_value: float, tolerance: float
) -> None:
    """Greenwood p-values by simulation elsewhere; tolerance as stated."""
    found = tail_index(series[name])
    assert found.p_value == pytest.approx(p_value, abs=tolerance)
    assert found.finite == (p_value <= 0.05)


def test_shapes_of_the_data(series: dict) -> None:
    """Excess kurtosis 8.17 and -.27 (printed digits); VIX changes are skewed to the right."""
    assert stats.kurtosis(series["S&P 500"]) == pytest.approx(8.17, abs=0.005)
    assert stats.kurtosis(series["diabetes"]) == pytest.approx(-0.27, abs=0.005)
    left, right = (tail_index(series["VIX"], side=side).index for side in ("left", "right"))
    assert right < left


def test_thin_residuals_exclude_low_indices(series: dict) -> None:
    """Diabetes residuals: indices up to 4.7 excluded by another method; 0.35. No upper end.

    Monthly oil: below 2.3 to 2.6, likewise; 0.2.
    """
    found = tail_index(series["diabetes"])
    assert found.low == pytest.approx(4.7, abs=0.35)
    assert found.high == math.inf
    for name in ("Brent monthly", "WTI monthly"):
        assert 2.1 < tail_index(series[name]).low < 2.8


def test_every_stock_index_interval_holds_three_and_excludes_two(series: dict) -> None:
    """To the digit shown: Nasdaq's lower end is 3.04."""
    for name in ("S&P 500", "Nasdaq", "VIX"):
        found = tail_index(series[name])
        assert found.low > 2
        assert round(found.low, 1) <= 3.0 < found.high


@pytest.mark.parametrize(
    ("name", "step", "zeros"), [("RF", "0.01", "7%"), ("AAA yield", "0.01", "7%"),
                                ("BAA yield", "0.01", "5%"), ("core CPI", "0.001", "10%")]
)  # fmt: skip
def test_rounded_series_are_recognised(series: dict, name: str, step: str, zeros: str) -> None:
    """Yields, bills and price levels are quoted in steps; their differences are tied."""
    found = tail_index(series[name])
    assert f"{zeros} equal values dropped" in found.note
    assert f"rounded in steps of {step};" in found.note
    column = series[name] - series[name].mean()
    assert column_tails(series[name][:, None], dependent=True).assessed.all()
    assert column_tails((column / column.std())[:, None], dependent=True).assessed.all()


def test_market_returns_are_not_taken_for_rounded(series: dict) -> None:
    """28 to 40 % ties from rounding to 0.01: below the half that matters."""
    for name in ("Mkt-RF", "SMB", "HML"):
        values = series[name]
        _, counts = np.unique(np.abs(values - np.median(values)), return_counts=True)
        assert counts.max() > 1
        assert tail_index(values).note == ""


def test_visit_counts_fall_under_the_zero_and_the_rounding_rule(series: dict) -> None:
    found = tail_index(series["visits"])
    assert found.note.startswith("31% equal values dropped; rounded in steps of 1;")
    assert found.rows == np.count_nonzero(series["visits"])


def test_dummies_are_refused() -> None:
    """Sex in the diabetes data takes two values."""
    from sklearn.datasets import load_diabetes

    X = load_diabetes(return_X_y=True)[0]
    many = column_tails(X, dependent=False)
    assert [j for j, _ in many.refused] == [1]
    with pytest.raises(InputError, match="two-valued"):
        tail_index(X[:, 1])


def test_images_and_counts_have_no_heavy_column() -> None:
    """Digits, 64 integer columns of 0..16: refused, or estimated as rounded and found light."""
    from sklearn.datasets import load_digits

    from scantling.diagnostics.battery import column_weights

    X = load_digits().data
    many = column_tails(X, dependent=False)
    weights = column_weights(many)
    assert weights.count("heavy") <= 2
    assert len(many.refused) >= 14
