"""The error law: draws, moments, volatility, scaling, what the sample leaves open."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from scantling.core.record import read_only
from scantling.diagnostics.autoregression import Autoregression
from scantling.diagnostics.tail_estimators import hill
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import FAMILIES, ErrorLaw, draw_together, normal_law, student_law
from scantling.law.fit import fit_innovations, fit_law
from scantling.law.notation import WRITTEN, parse_law
from scantling.law.splice import fit_splice
from scantling.law.spliced import Spliced, spliced_spread
from scantling.law.student import student_spread

ROWS = 400
WITH_VARIANCE = tuple(family for family in FAMILIES if family != "stable")


def volatility(level: float = 4.0) -> Volatility:
    """alpha .10, beta .80, a path that moves by a factor of three about its mean square."""
    path = 1 + 0.5 * np.sin(np.arange(ROWS) / 25)
    path *= math.sqrt(level / np.mean(path**2))
    return Volatility(
        omega=0.10 * level, alpha=0.10, beta=0.80, innovation="normal", nu=None, persistence=0.90,
        tail_index=12.5, path=read_only(path), path_draws=read_only(np.stack([path, 2 * path])),
        log_likelihood=0.0,
    )  # fmt: skip


def law(family: str) -> ErrorLaw:
    if family == "normal":
        return normal_law(1.5)
    if family == "student-t":
        return student_law(6, sd=1.5)
    if family != "spliced":
        return parse_law(WRITTEN[family]).scaled(1.5)
    sample = 1.2 * np.random.default_rng(1).standard_t(6, 600) + 0.3
    return spliced(sample, 0.2)


def spliced(sample: np.ndarray, gamma: float) -> ErrorLaw:
    return ErrorLaw(innovation=Spliced(splice=fit_splice(sample, gamma)))


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("size", [7, (7,), (5, 3), (4, 2, 3)])
@pytest.mark.parametrize("clustered", [False, True])
def test_draws_have_the_shape_asked_for(family: str, size: object, clustered: bool) -> None:
    found = replace(law(family), volatility=volatility() if clustered else None)
    drawn = found.draw(size, np.random.default_rng(1))  # type: ignore[arg-type]
    assert drawn.shape == (size if isinstance(size, tuple) else (size,))
    assert np.isfinite(drawn).all()
    again = found.draw(size, np.random.default_rng(1))  # type: ignore[arg-type]
    assert np.array_equal(drawn, again)


@pytest.mark.parametrize("family", WITH_VARIANCE)
def test_draws_have_mean_zero_and_the_stated_sd(family: str) -> None:
    found = law(family)
    drawn = found.draw(200_000, np.random.default_rng(2))
    # The sample sd itself hardly settles where there is no fourth moment.
    assert drawn.std() == pytest.approx(found.sd, rel=0.02 if found.tail_index > 4 else 0.06)
    assert drawn.mean() == pytest.approx(0, abs=4 * found.sd / math.sqrt(200_000))
    assert found.innovation_variance == pytest.approx(found.sd**2)


@pytest.mark.parametrize("family", WITH_VARIANCE)
def test_draws_on_the_path_follow_it(family: str) -> None:
    path = volatility()
    found = replace(law(family), volatility=path)
    drawn = found.draw_given_path(ROWS, 2000, np.random.default_rng(3))
    assert drawn.shape == (ROWS, 2000)
    heavy = law(family).tail_index <= 4
    assert drawn.std() == pytest.approx(found.sd, rel=0.05 if heavy else 0.02)
    by_row = drawn.std(axis=1)
    if heavy:  # quartiles settle where the sd does not
        by_row = np.subtract(*np.quantile(drawn, [0.75, 0.25], axis=1))
        by_row *= law(family).sd / (law(family).innovation.quantile(0.75)
                                    - law(family).innovation.quantile(0.25))  # fmt: skip
    assert by_row == pytest.approx(path.path * law(family).sd, rel=0.25)
    assert np.corrcoef(by_row, path.path)[0, 1] > 0.98
    still = law(family).draw_given_path(ROWS, 3, np.random.default_rng(3))
    assert np.array_equal(still, law(family).innovations((ROWS, 3), np.random.default_rng(3)))


def test_full_draws_cluster_and_keep_their_level() -> None:
    """GARCH(.10, .80): squares correlate at lag 1 by a(1 - ab - b^2)/(1 - 2ab - b^2)."""
    path = volatility()
    drawn = replace(normal_law(1.0), volatility=path).draw((2000, 200), np.random.default_rng(4))
    assert drawn.std() == pytest.approx(2.0, rel=0.02)
    square = drawn**2 - np.mean(drawn**2)
    lagged = float((square[1:] * square[:-1]).mean() / (square**2).mean())
    expected = 0.1 * (1 - 0.9 * 0.8) / (1 - 2 * 0.1 * 0.8 - 0.8**2)
    assert lagged == pytest.approx(expected, abs=0.02)
    calm = normal_law(2.0).draw((2000, 200), np.random.default_rng(4))
    square = calm**2 - np.mean(calm**2)
    assert float((square[1:] * square[:-1]).mean() / (square**2).mean()) < 0.01


def test_draws_under_leverage_rise_after_losses() -> None:
    """GJR: E(e_t^2 | e_(t-1) < 0) - E(e_t^2 | e_(t-1) > 0) = leverage E e^2 under normal shocks
    of unit mean level; 0.2 here, error about 0.03."""
    stated = parse_law("normal:alpha=0.05,beta=0.6,leverage=0.2")
    drawn = stated.draw((1500, 400), np.random.default_rng(4))
    assert drawn.var() == pytest.approx(1, abs=0.02)
    after, before = drawn[1:] ** 2, drawn[:-1]
    gap = after[before < 0].mean() - after[before > 0].mean()
    # E(e^2 | sign) is the same for both signs, so that only the weight differs.
    assert gap == pytest.approx(0.2, abs=0.04)


def test_stated_volatility_has_no_path_to_keep() -> None:
    stated = parse_law("student-t:df=6,alpha=0.1,beta=0.8")
    assert np.array_equal(stated.relative_variance(7), np.ones(7))
    drawn = stated.draw_given_path(800, 200, np.random.default_rng(5))
    assert np.array_equal(drawn, stated.draw((800, 200), np.random.default_rng(5)))
    square = drawn**2
    lagged = np.corrcoef(square[1:].ravel(), square[:-1].ravel())[0, 1]
    assert lagged > 0.08
    assert stated.without_volatility().sd == pytest.approx(1)
    assert stated.parameter_draws(2, np.random.default_rng(1)) == (stated,) * 2


def test_the_first_row_drawn_has_the_stationary_law() -> None:
    """GARCH(.25, .65), normal: kurtosis 3(1 - .81)/(1 - .4225 - .325 - .1875) = 8.8, not 3."""
    path = replace(volatility(), omega=0.4, alpha=0.25, beta=0.65)
    drawn = replace(normal_law(1.0), volatility=path).draw((2, 4000), np.random.default_rng(4))
    assert stats.kurtosis(drawn[0]) > 1.5


def test_tail_index_under_volatility() -> None:
    """exact: 3a^2 + 2ab + b^2 = 1 gives 4 for normal shocks, 4.5a^2 + 2ab + b^2 = 1 for t(8).

    A spliced law takes the smaller of its own and the volatility's.
    """
    assert normal_law(1).tail_index == math.inf
    assert student_law(3).tail_index == 3
    assert law("spliced").tail_index == pytest.approx(5)
    path = volatility()
    four = replace(path, alpha=0.1704959016, beta=0.8)
    assert replace(normal_law(1), volatility=four).tail_index == pytest.approx(4, abs=1e-6)
    four = replace(path, alpha=0.1562954751, beta=0.8)
    assert replace(student_law(8), volatility=four).tail_index == pytest.approx(4, abs=1e-6)
    assert 2 < replace(student_law(3), volatility=path).tail_index < 3
    assert replace(student_law(2), volatility=path).tail_index == 2
    assert replace(law("spliced"), volatility=path).tail_index == pytest.approx(5)
    low = replace(path, tail_index=3.5)
    assert replace(law("spliced"), volatility=low).tail_index == 3.5
    light = spliced(np.arange(300.0), 0.0)
    assert light.tail_index == math.inf


def test_draws_of_a_spliced_law_carry_its_index() -> None:
    found = law("spliced")
    assert found.splice is not None
    drawn = found.draw(300_000, np.random.default_rng(5)) + found.splice.mean_and_variance()[0]
    shift = found.splice.right_scale / found.splice.gamma - found.splice.body[-1]
    beyond = np.sort(drawn)[::-1] + shift
    assert float(hill(beyond, 20_000)) == pytest.approx(0.2, rel=0.03)


def test_variances_that_do_not_exist() -> None:
    for df in (1.0, 2.0):
        assert student_law(df).innovation_variance == math.inf
        assert student_law(df).sd == math.inf
    assert student_law(2.5, sd=3.0).sd == pytest.approx(3.0)
    assert student_law(5, scale=2.0).sd == pytest.approx(2 * math.sqrt(5 / 3))
    path = volatility()
    found = replace(student_law(2.0), volatility=path).normal_innovations()
    assert found.innovation_variance == 1.0


def test_spliced_draws_without_a_mean_are_still_numbers() -> None:
    sample = np.random.default_rng(1).standard_t(6, 600)
    found = spliced(sample, 1.2)
    assert np.isfinite(found.draw(1000, np.random.default_rng(1))).all()
    assert found.sd == math.inf


def test_normal_innovations_keep_path_and_variance() -> None:
    found = replace(law("student-t"), volatility=volatility())
    twin = found.normal_innovations()
    assert twin.family == "normal"
    assert twin.sd == pytest.approx(found.sd)
    assert twin.volatility is found.volatility


@pytest.mark.parametrize("family", WITH_VARIANCE)
def test_without_volatility_the_sd_stays(family: str) -> None:
    found = replace(law(family), volatility=volatility())
    calm = found.without_volatility()
    assert calm.volatility is None
    assert calm.sd == pytest.approx(found.sd)
    assert law(family).without_volatility().parameters == law(family).parameters
    assert np.array_equal(calm.relative_variance(5), np.ones(5))
    moving = found.relative_variance(ROWS)
    assert moving.mean() == pytest.approx(1)
    assert moving.max() / moving.min() > 3


def fitted(family: str, df: float = 5, n: int = 400, seed: int = 6) -> ErrorLaw:
    sample = np.random.default_rng(seed).standard_t(df, n)
    return fit_innovations(sample - sample.mean(), family=family, seed=1)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("factor", [1e-3, 7.0])
def test_scaled_laws_draw_scaled_errors(family: str, factor: float) -> None:
    plain = fitted(family)
    scaled = plain.scaled(factor)
    assert scaled.sd == pytest.approx(factor * plain.sd)
    assert scaled.scale == pytest.approx(factor * plain.scale) or family == "spliced"
    assert scaled.tail_index == plain.tail_index
    for one, other in (
        (plain, scaled),
        *zip(
            plain.parameter_draws(3, np.random.default_rng(7)),
            scaled.parameter_draws(3, np.random.default_rng(7)),
            strict=True,
        ),
    ):
        first = one.draw(50, np.random.default_rng(8))
        assert other.draw(50, np.random.default_rng(8)) == pytest.approx(factor * first, rel=1e-9)


def test_a_law_stated_exactly_stays_as_it_is() -> None:
    stated = student_law(4)
    assert stated.parameter_draws(3, np.random.default_rng(1)) == (stated,) * 3


@pytest.mark.parametrize("family", FAMILIES)
def test_drawn_laws_spread_about_the_fit(family: str) -> None:
    found = fitted(family)
    laws = found.parameter_draws(200, np.random.default_rng(9))
    assert len(laws) == 200
    shapes = np.array([drawn.innovation.heaviness for drawn in laws])
    gammas, exponents = shapes.T
    if family in ("laplace", "ged"):  # every moment exists; 1/shape is what is open
        assert not gammas.any()
        assert 0.1 < np.subtract(*np.quantile(exponents, [0.95, 0.05])) < 0.6
    else:
        assert np.unique(gammas).size > 5
        low, high = np.quantile(gammas, [0.05, 0.95])
        assert 0.05 < high - low < 0.35
        assert family == "stable" or low < 1 / 5 < high
    if family in (
        "normal",
        "laplace",
    ):  # a poor fit to these values, so that drawn laws correct its level
        return
    level = np.array(
        [np.median(np.abs(drawn.draw(4001, np.random.default_rng(1)))) for drawn in laws]
    )
    assert np.median(level) == pytest.approx(
        np.median(np.abs(found.draw(4001, np.random.default_rng(1)))), rel=0.06
    )


def test_drawn_laws_take_the_drawn_paths() -> None:
    found = replace(fitted("student-t"), volatility=volatility())
    levels = []
    for drawn in found.parameter_draws(60, np.random.default_rng(9)):
        assert drawn.volatility is not None
        level = float(drawn.volatility.path[0] / volatility().path[0])
        assert drawn.volatility.path == pytest.approx(level * volatility().path)
        levels.append(level)
    # Two stored paths, either as likely: 60 draws give 30 of each, four errors being 15.
    assert set(np.round(levels, 9)) == {1.0, 2.0}
    assert levels.count(1.0) == pytest.approx(30, abs=15)


def test_spreads_are_probabilities_and_narrow_with_the_sample() -> None:
    rng = np.random.default_rng(10)
    widths = []
    for n in (100, 1600):
        spread = student_spread(rng.standard_t(4, n))
        assert spread.weights.sum() == pytest.approx(1)
        assert (np.diff(spread.gammas) > 0).all()
        mean = spread.gammas @ spread.weights
        widths.append(float(np.sqrt((spread.gammas - mean) ** 2 @ spread.weights)))
    assert widths[1] < 0.45 * widths[0]


def test_spliced_spread_has_the_interval_of_the_tail_as_its_own() -> None:
    from scantling.diagnostics.tail_index import tail_index

    sample = np.random.default_rng(1).standard_t(3, 900)
    estimated = tail_index(sample)
    own = spliced(sample, 0.3).innovation
    assert isinstance(own, Spliced)
    tail = replace(estimated, low=1 / 0.6, high=1 / 0.4)
    spread = spliced_spread(own, tail, 900)
    mean = float(spread.gammas @ spread.weights)
    assert mean == pytest.approx(0.5, abs=1e-6)
    sd = math.sqrt((spread.gammas - mean) ** 2 @ spread.weights)
    assert sd == pytest.approx(0.1 / 1.6448536, rel=0.03)
    inside = (spread.gammas >= 0.4) & (spread.gammas <= 0.6)
    assert spread.weights[inside].sum() == pytest.approx(0.90, abs=0.02)
    real = spliced_spread(own, estimated, 900)
    assert 1 / estimated.high < real.gammas @ real.weights < 1 / estimated.low
    # No index excluded from above; no tail at all; no width.
    for low, high in ((8.0, math.inf), (math.inf, math.inf), (2.0, 2.0)):
        flat = spliced_spread(own, replace(tail, low=low, high=high), 900)
        assert flat.gammas[0] >= 0
        assert (np.diff(flat.gammas) > 0).all()
        assert flat.weights.sum() == pytest.approx(1)


def test_parameters_by_name() -> None:
    assert normal_law(2.0).parameters == {"scale": 2.0}
    assert student_law(4, scale=2.0).parameters == {"scale": 2.0, "df": 4}
    assert set(law("spliced").parameters) == {"gamma", "left_scale", "right_scale"}
    clustered = replace(normal_law(1.0), volatility=volatility()).parameters
    assert clustered == pytest.approx({"scale": 1.0, "omega": 0.4, "alpha": 0.1, "beta": 0.8})
    leaning = replace(volatility(), leverage=0.05)
    assert replace(normal_law(1.0), volatility=leaning).parameters["leverage"] == 0.05


def test_laws_drawn_together_are_drawn_as_alone() -> None:
    first = replace(law("student-t"), volatility=volatility())
    second = replace(law("normal"), volatility=replace(volatility(9.0), leverage=0.1))
    both = draw_together((first, law("laplace"), second), (3, 0, 4), ROWS, np.random.default_rng(5))
    assert both.shape == (ROWS, 7)
    alone = first.draw((ROWS, 3), np.random.default_rng(5))
    assert both[:, :3] == pytest.approx(alone, rel=1e-12)
    # The recurrence of arch's and every textbook, one step at a time.
    rng = np.random.default_rng(5)
    first.innovations((ROWS + 500, 3), rng)
    z = second.innovations((ROWS + 500, 4), rng)[:, 0]
    path = second.volatility
    assert path is not None
    variance, errors = float((path.path**2).mean()), []
    for shock in z:
        errors.append(math.sqrt(variance) * shock)
        weight = path.alpha + path.leverage * (errors[-1] < 0)
        variance = path.omega + weight * errors[-1] ** 2 + path.beta * variance
    assert both[:, 3] == pytest.approx(np.array(errors[500:]), rel=1e-9)


def persistent(found: ErrorLaw, *coefficients: float) -> ErrorLaw:
    values = np.array(coefficients)
    path = Autoregression(coefficients=read_only(values), draws=read_only(values[None].copy()))
    return replace(found, autoregression=path)


def test_errors_with_persistent_levels_have_their_own_variance_and_the_shocks_index() -> None:
    shocks = student_law(6, sd=1.5)
    found = persistent(shocks, 0.6)
    # Variance of a first-order autoregression: that of the shocks over 1 - a^2.
    assert found.sd == pytest.approx(1.5 / 0.8, rel=1e-12)
    assert found.tail_index == 6
    drawn = found.draw((ROWS, 2000), np.random.default_rng(2))
    assert drawn.std() == pytest.approx(found.sd, rel=0.01)
    kept = (drawn[1:] * drawn[:-1]).mean() / drawn.var()
    assert kept == pytest.approx(0.6, abs=0.01)
    # The first row has the same law as the last: the series runs in before.
    assert drawn[0].std() == pytest.approx(drawn[-1].std(), rel=0.08)
    assert found.parameters["lag1"] == 0.6
    assert found.without_autoregression().sd == pytest.approx(1.5, rel=1e-12)
    assert found.normal_innovations().sd == pytest.approx(found.sd, rel=1e-12)


def test_persistent_levels_ride_on_the_volatility_path() -> None:
    path = volatility()
    found = persistent(replace(law("normal"), volatility=path), 0.5)
    drawn = found.draw_given_path(ROWS, 4000, np.random.default_rng(3))
    # var e_t = sum_k a^(2k) sd^2 path_(t-k)^2, far from the first row.
    weights = 0.25 ** np.arange(30)
    square = 1.5**2 * np.asarray(path.path) ** 2
    expected = [float(weights @ square[t - np.arange(30)]) for t in range(100, ROWS)]
    assert drawn[100:].var(axis=1) == pytest.approx(np.array(expected), rel=0.12)
    both = draw_together((found, law("normal")), (2, 3), ROWS, np.random.default_rng(1))
    assert both.shape == (ROWS, 5)


def test_drawn_laws_take_the_drawn_autoregressions() -> None:
    sample = persistent(law("student-t"), 0.7).draw(600, np.random.default_rng(4))
    found = fit_law(sample, time_ordered=True, seed=1)
    assert found.autoregression is not None
    assert found.autoregression.coefficients[0] == pytest.approx(0.7, abs=0.08)
    assert found.volatility is None
    drawn = found.parameter_draws(50, np.random.default_rng(1))
    firsts = [each.autoregression.coefficients[0] for each in drawn if each.autoregression]
    assert len(firsts) == 50
    # sd of the coefficient: sqrt((1 - a^2)/n) = .029.
    assert np.std(firsts) == pytest.approx(0.029, rel=0.35)
