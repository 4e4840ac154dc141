"""GARCH fits and the Kesten index: recovery, units, edges, bad input."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import gammaln

from scantling.diagnostics import volatility
from scantling.errors import InputError


def garch(seed: int, n: int, alpha: float, beta: float, nu: float | None = None) -> np.ndarray:
    """GARCH(1,1) of unit variance; the first 500 values are dropped."""
    rng = np.random.default_rng(seed)
    shocks = rng.standard_normal(n + 500) if nu is None else rng.standard_t(nu, n + 500)
    shocks = shocks if nu is None else shocks * math.sqrt((nu - 2) / nu)
    variance, series = 1.0, np.empty(n + 500)
    for t, shock in enumerate(shocks):
        series[t] = math.sqrt(variance) * shock
        variance = 1 - alpha - beta + alpha * series[t] ** 2 + beta * variance
    return series[500:]


@pytest.fixture(scope="module")
def clustered() -> np.ndarray:
    return garch(1, 4000, 0.10, 0.85, 6.0)


def test_fit_recovers_the_parameters(clustered: np.ndarray) -> None:
    fit = volatility.fit_garch(clustered)
    assert isinstance(fit, volatility.Volatility)
    # Tolerances of about three standard errors at n = 4000.
    assert fit.alpha == pytest.approx(0.10, abs=0.05)
    assert fit.beta == pytest.approx(0.85, abs=0.07)
    assert fit.nu == pytest.approx(6.0, abs=2.0)
    assert fit.persistence == fit.alpha + fit.beta
    assert fit.innovation == "student-t"


def test_path_follows_the_recurrence(clustered: np.ndarray) -> None:
    fit = volatility.fit_garch(clustered, innovation="normal")
    assert isinstance(fit, volatility.Volatility)
    assert fit.nu is None
    e = clustered - clustered.mean()
    expected = np.sqrt(fit.omega + fit.alpha * e[:-1] ** 2 + fit.beta * fit.path[:-1] ** 2)
    np.testing.assert_allclose(fit.path[1:], expected, rtol=1e-9)
    z = e / fit.path
    log_likelihood = -0.5 * np.sum(np.log(2 * np.pi) + 2 * np.log(fit.path) + z**2)
    assert fit.log_likelihood == pytest.approx(log_likelihood, abs=1e-6)
    index = volatility.kesten_index(fit.alpha, fit.beta, moment_of=z)
    assert fit.tail_index == pytest.approx(index, rel=1e-9)
    with pytest.raises(ValueError, match="read-only"):
        fit.path[0] = 1.0


@pytest.mark.parametrize(("scale", "shift"), [(2.0**-60, 0.0), (2.0**40, 0.0), (1.0, 5.0)])
def test_fit_is_in_the_units_of_the_series(
    clustered: np.ndarray, scale: float, shift: float
) -> None:
    base = volatility.fit_garch(clustered[:1000])
    other = volatility.fit_garch(clustered[:1000] * scale + shift)
    assert isinstance(base, volatility.Volatility)
    assert isinstance(other, volatility.Volatility)
    assert other.alpha == pytest.approx(base.alpha, rel=1e-3)
    assert other.omega == pytest.approx(base.omega * scale**2, rel=1e-2)
    np.testing.assert_allclose(other.path, base.path * scale, rtol=1e-3)
    shifted = base.log_likelihood - 1000 * math.log(scale)
    assert other.log_likelihood == pytest.approx(shifted, abs=1e-3)


def test_fit_repeats_exactly_and_leaves_the_global_state(clustered: np.ndarray) -> None:
    before = np.random.get_state()[1].copy()  # noqa: NPY002
    one, two = (volatility.fit_garch(clustered[:500]) for _ in range(2))
    assert isinstance(one, volatility.Volatility)
    assert isinstance(two, volatility.Volatility)
    assert np.array_equal(one.path, two.path)
    assert one.log_likelihood == two.log_likelihood
    assert np.array_equal(np.random.get_state()[1], before)  # noqa: NPY002


def leaning(seed: int, n: int) -> np.ndarray:
    """GJR(1,1) with normal shocks, alpha .03, leverage .15, beta .85, unit variance."""
    rng = np.random.default_rng(seed)
    variance, series = 1.0, np.empty(n)
    for t in range(n):
        series[t] = math.sqrt(variance) * rng.standard_normal()
        weight = 0.03 + 0.15 * (series[t] < 0)
        variance = 0.045 + weight * series[t] ** 2 + 0.85 * variance
    return series


def test_leverage_is_found_where_it_is() -> None:
    """Bayes criterion over four: GJR-normal where that is the law, GARCH-t where that is."""
    fit = volatility.choose_volatility(leaning(2, 3000))
    assert isinstance(fit, volatility.Volatility)
    assert (fit.kind, fit.innovation, fit.nu) == ("gjr", "normal", None)
    # Tolerances of about three standard errors at n = 3000.
    assert (fit.alpha, fit.leverage, fit.beta) == pytest.approx((0.03, 0.15, 0.85), abs=0.06)
    assert fit.persistence == pytest.approx(fit.alpha + fit.leverage / 2 + fit.beta)
    assert fit.candidates[0][0] == "gjr, normal"
    criteria = [value for _, value in fit.candidates]
    assert criteria == sorted(criteria)
    assert len(criteria) == 4
    plain = volatility.choose_volatility(garch(1, 3000, 0.10, 0.85, 6.0))
    assert isinstance(plain, volatility.Volatility)
    assert (plain.kind, plain.innovation, plain.leverage) == ("garch", "student-t", 0.0)


def test_paths_under_leverage_follow_the_recurrence() -> None:
    series = leaning(3, 1500)
    fit = volatility.fit_garch(series, innovation="normal", leverage=True)
    assert isinstance(fit, volatility.Volatility)
    e = series - series.mean()
    weight = fit.alpha + fit.leverage * (e[:-1] < 0)
    expected = np.sqrt(fit.omega + weight * e[:-1] ** 2 + fit.beta * fit.path[:-1] ** 2)
    np.testing.assert_allclose(fit.path[1:], expected, rtol=1e-9)
    assert fit.path_draws.shape == (50, 1500)
    spread = fit.path_draws.std(axis=0) / fit.path
    assert 0.005 < np.median(spread) < 0.2


def test_choice_gives_a_reason_where_nothing_clusters() -> None:
    assert volatility.choose_volatility(np.arange(99.0)) == "99 values: a GARCH fit needs 100"
    with pytest.raises(InputError, match=r"^u: values that vary"):
        volatility.choose_volatility(np.ones(200))


def test_index_of_the_fit_is_near_the_true_one() -> None:
    """GARCH-n(.15,.80): true index 5.758, 5-95 % range 4.7 to 7.2 at n = 5000, simulated."""
    fits = [volatility.fit_garch(garch(s, 5000, 0.15, 0.80), innovation="normal") for s in range(5)]
    indices = [fit.tail_index for fit in fits if isinstance(fit, volatility.Volatility)]
    assert len(indices) == 5
    assert 4.7 < np.median(indices) < 7.2


def test_path_is_bounded_below() -> None:
    """Long calm and one outbreak: the path's smallest value is at least 5 % of its median."""
    rng = np.random.default_rng(3)
    u = rng.standard_normal(1000) * np.where(np.arange(1000) % 500 < 250, 1e-3, 1.0)
    fit = volatility.fit_garch(u, innovation="normal")
    assert isinstance(fit, volatility.Volatility)
    assert fit.path.min() >= 0.05 * np.median(fit.path) * (1 - 1e-12)


def test_no_clustering_is_a_reason() -> None:
    reasons = [
        volatility.fit_garch(np.random.default_rng(s).standard_normal(750)) for s in range(6)
    ]
    assert any(isinstance(r, str) and "alpha is 0" in r for r in reasons)
    weak = [r.alpha for r in reasons if isinstance(r, volatility.Volatility)]
    assert all(alpha < 0.1 for alpha in weak)


def test_too_few_values_are_a_reason() -> None:
    assert volatility.fit_garch(np.arange(99.0)) == "99 values: a GARCH fit needs 100"


@pytest.mark.parametrize(
    "series",
    [
        np.where(np.arange(400) == 200, 1e8, np.resize([1.0, -1.0, 0.5], 400)),
        np.resize([1.0, -1.0], 400),
        np.cumsum(np.ones(400)),
        np.repeat([0.0, 1.0], [395, 5]),
        np.random.default_rng(4).standard_cauchy(400),
        np.exp(np.arange(400) / 2),
    ],
    ids=["outlier", "signs", "trend", "sparse", "cauchy", "exploding"],
)
def test_awkward_series_give_a_fit_or_a_reason(series: np.ndarray) -> None:
    for innovation in ("student-t", "normal"):
        got = volatility.fit_garch(series, innovation=innovation)  # type: ignore[arg-type]
        if isinstance(got, str):
            assert got
            assert "\n" not in got
        else:
            assert np.isfinite(got.path).all()
            assert got.path.min() > 0
            assert 0 < got.persistence <= 1 + 1e-6
            assert got.tail_index > 0


def test_what_arch_cannot_do_becomes_a_reason(
    clustered: np.ndarray, monkeypatch: pytest.MonkeyPatch
) -> None:
    from arch.univariate.base import ARCHModel

    fit = ARCHModel.fit

    def failing(*args: object, **kwargs: object) -> None:
        raise np.linalg.LinAlgError("singular\nmatrix")

    def unconverged(self: object, **kwargs: object) -> object:
        return fit(self, **kwargs, options={"maxiter": 1})

    monkeypatch.setattr(ARCHModel, "fit", failing)
    assert volatility.fit_garch(clustered) == (
        "the GARCH likelihood could not be maximised: singular"
    )
    monkeypatch.setattr(ARCHModel, "fit", unconverged)
    assert volatility.fit_garch(clustered) == "the GARCH likelihood did not converge"


# The index.


@settings(max_examples=60, deadline=None)
@given(
    alpha=st.floats(0.01, 0.6),
    share=st.floats(0.0, 0.999),
    gamma=st.floats(0.0, 0.3),
    nu=st.one_of(st.none(), st.floats(2.1, 60.0)),
)
def test_index_solves_its_equation_by_scipy_quadrature(
    alpha: float, share: float, gamma: float, nu: float | None
) -> None:
    from scipy import integrate, stats

    beta = share * max(0.0, 1 - alpha - gamma / 2)
    law = stats.norm() if nu is None else stats.t(nu, scale=math.sqrt((nu - 2) / nu))
    index = volatility.kesten_index(
        alpha, beta, gamma=gamma, moment_of="normal" if nu is None else nu
    )
    if index > 30 or (nu is not None and index > 0.98 * nu):
        return  # scipy's adaptive quadrature loses its digits there
    parts = [
        integrate.quad(
            lambda s, w=weight: math.exp(
                index / 2 * math.log(w * math.exp(2 * s) + beta) + law.logpdf(math.exp(s)) + s
            ),
            low,
            high,
            limit=400,
        )[0]
        for weight in (alpha, alpha + gamma)
        for low, high in (((-30, 0), (0, 5)) if nu is None else ((-30, 0), (0, 10), (10, 340)))
    ]
    assert sum(parts) == pytest.approx(1, abs=1e-6)
    assert nu is None or index < nu


@settings(max_examples=40, deadline=None)
@given(alpha=st.floats(0.01, 0.5), share=st.floats(0, 0.99), nu=st.floats(2.2, 30.0))
def test_heavier_innovations_and_more_persistence_give_a_lower_index(
    alpha: float, share: float, nu: float
) -> None:
    beta = share * (1 - alpha)
    normal = volatility.kesten_index(alpha, beta)
    assert volatility.kesten_index(alpha, beta, moment_of=nu) <= normal
    assert volatility.kesten_index(alpha, beta + 0.01) <= normal
    assert volatility.kesten_index(alpha, beta, gamma=0.05) <= normal


@pytest.mark.parametrize("alpha", [0.05, 0.1, 0.3, 0.7])
def test_arch_index_with_student_innovations_has_a_closed_form(alpha: float) -> None:
    """(3 a)^(k/2) G((k+1)/2) G((5-k)/2) = sqrt(pi) G(5/2) for unit-variance t(5), exact."""
    k = volatility.kesten_index(alpha, 0.0, moment_of=5)
    left = k / 2 * math.log(3 * alpha) + gammaln((k + 1) / 2) + gammaln((5 - k) / 2)
    assert left == pytest.approx(math.log(math.pi) / 2 + gammaln(2.5), abs=1e-8)


def test_empirical_index_by_hand() -> None:
    """z^2 = 0 or 2, a = .75, b = .25: (.25^h + 1.75^h)/2 = 1 at h = index/2."""
    z = np.array([0.0, 5.0, 0.0, -5.0])
    half = volatility.kesten_index(0.75, 0.25, moment_of=z) / 2
    assert half == pytest.approx(1, abs=1e-10)  # a + b = 1: index 2 exactly
    half = volatility.kesten_index(0.6, 0.25, moment_of=z) / 2
    assert 0.25**half + 1.45**half == pytest.approx(2, abs=1e-10)
    # Only negative values carry gamma: the positive value's factor is b + 2 a.
    half = volatility.kesten_index(0.5, 0.25, gamma=0.2, moment_of=z) / 2
    assert (2 * 0.25**half + 1.25**half + 1.65**half) / 4 == pytest.approx(1, abs=1e-10)


def test_empirical_index_nears_that_of_its_law() -> None:
    z = np.random.default_rng(5).standard_normal(200_000)
    assert volatility.kesten_index(0.15, 0.80, moment_of=z) == pytest.approx(5.758, abs=0.15)


def test_edges_of_the_index() -> None:
    assert volatility.kesten_index(0.0, 0.5) == math.inf
    assert volatility.kesten_index(0.1, 0.1, moment_of=np.array([1.0, -1.0])) == math.inf
    assert volatility.kesten_index(0.0, 0.5, moment_of=7) == 7.0
    assert volatility.kesten_index(0.0, 1.0) == 0.0  # a random walk's variance never settles
    assert volatility.kesten_index(3.57, 0.0) == 0.0
    assert 0 < volatility.kesten_index(3.55, 0.0) < 0.01
    assert volatility.kesten_index(1e-9, 0.1, moment_of=4) == pytest.approx(4, abs=1e-6)


def test_unusable_input_is_named() -> None:
    with pytest.raises(InputError, match=r"^u: values that vary"):
        volatility.fit_garch(np.ones(200))
    with pytest.raises(InputError, match=r"^u: finite"):
        volatility.fit_garch(np.append(np.arange(200.0), np.nan))
    with pytest.raises(InputError, match=r"^innovation: .* found 'cauchy'"):
        volatility.fit_garch(np.arange(200.0), innovation="cauchy")  # type: ignore[arg-type]
    with pytest.raises(InputError, match=r"^mean: .* found 'median'"):
        volatility.fit_garch(np.arange(200.0), mean="median")  # type: ignore[arg-type]
    with pytest.raises(InputError, match=r"^alpha: "):
        volatility.kesten_index(-0.1, 0.5)
    with pytest.raises(InputError, match=r"^gamma: "):
        volatility.kesten_index(0.1, 0.5, gamma=-0.2)
    with pytest.raises(InputError, match=r"^moment_of: .* found 2"):
        volatility.kesten_index(0.1, 0.5, moment_of=2)
    with pytest.raises(InputError, match=r"^moment_of: .* found 't5'"):
        volatility.kesten_index(0.1, 0.5, moment_of="t5")  # type: ignore[arg-type]
    with pytest.raises(InputError, match=r"^moment_of: .* all are 0"):
        volatility.kesten_index(0.1, 0.5, moment_of=np.zeros(5))
