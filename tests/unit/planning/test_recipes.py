"""Recipes: what each single change does, by hand; how two are joined; in which order."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import combinations
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import ndtri
from scipy.stats import rankdata

from scantling.core.streams import serial_map
from scantling.design.expand import expand
from scantling.design.spec import (
    DataSpec,
    Design,
    ExpandSpec,
    PenaltySpec,
    SimulationSpec,
    TargetSpec,
)
from scantling.design.table import Table
from scantling.diagnostics.autoregression import Autoregression
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import normal_law, student_law
from scantling.planning.breakthrough import break_through
from scantling.planning.case import Case, draw_laws
from scantling.planning.changes import clipped_share, huber_shift, recipes
from scantling.planning.recipe import Origin, Recipe, carry_out, joined

ROWS, RAW, LAGS = 300, 6, 2
TARGET = TargetSpec(relevant=2, smallest_effect=0.3)


def origin_of(raw, *, factors=0, spec=None, law=None, broken=(), **changes):
    """A design of `raw` (n, k) as it stands; only what recipes look at is real."""
    rng = np.random.default_rng(1)
    table = Table(
        names=tuple(f"g{j}" for j in range(raw.shape[1])), values=raw, response_name="y",
        response=rng.standard_normal(len(raw)), time_name=None, time=None, rows_dropped=0,
        skipped=(), sha256="", file_name="t.csv",
    )  # fmt: skip
    design = Design(
        title="Tin", path=Path("t.toml"), sha256="", kind="regression", target=TARGET,
        data=DataSpec(file=Path("t.csv"), response="y"),
        expand=spec or ExpandSpec(powers=2, products=True, lags=LAGS, own_lags=1),
        penalty=PenaltySpec(), simulation=SimulationSpec(replicates=100, seed=3),
    )  # fmt: skip
    columns = expand(design, table)
    e = rng.standard_normal(len(columns.response))
    law = law or student_law(5, sd=1.0)
    case = Case(
        X=columns.values, law=law, law_draws=draw_laws(law, 3), response_sd=1.1, residual_sd=1.0,
        target=TARGET, rule="plug-in", replicates=100, seed=3,
    )  # fmt: skip
    residuals = Residuals(
        values=e, fitted=np.zeros_like(e), explained=0.0, selected=(), folds="random",
        response_sd=1.1,
    )  # fmt: skip
    diagnosis = SimpleNamespace(
        scores_without_variance=broken, structure=SimpleNamespace(factors=factors)
    )
    noise = SimpleNamespace(noise=SimpleNamespace(reached=False))
    origin = Origin(
        design=design, table=table, residuals=residuals, diagnosis=diagnosis,
        case=replace(case, **changes), noise=noise,
    )  # fmt: skip
    return origin


@pytest.fixture(scope="module")
def raw():
    return np.random.default_rng(5).standard_t(3, (ROWS, RAW))


def named(origin):
    return {recipe.name: recipe for recipe in recipes(origin)}


def standard(columns):
    columns = columns - columns.mean(axis=0)
    return columns / np.sqrt((columns**2).mean(axis=0))


def lagged(column, lag):
    return column[LAGS - lag : len(column) - lag]


def test_winsorised_columns_by_hand(raw):
    middle = np.median(raw, axis=0)
    ends = 5 * 1.4826 * np.median(np.abs(raw - middle), axis=0)
    kept = np.clip(raw, middle - ends, middle + ends)
    share = (kept != raw).mean()
    assert 0.001 < share < 0.05
    assert clipped_share(raw) == pytest.approx(share)
    origin = origin_of(raw)
    recipe = named(origin)["winsorised columns"]
    assert recipe.price.startswith(f"{100 * share:.1f} % of the raw values are clipped")
    case = carry_out(recipe, origin)
    centred = kept - kept.mean(axis=0)
    first = [lagged(centred[:, 0] ** m, lag) for m in (1, 2) for lag in (1, 2)]
    np.testing.assert_allclose(case.X[:, :4], standard(np.column_stack(first)), atol=1e-9)
    # The response's own lag stays as it is.
    np.testing.assert_array_equal(case.X[:, -1], origin.case.X[:, -1])


def test_winsorising_is_offered_only_where_it_clips_and_of_columns_as_they_are(raw):
    flat = np.clip(raw, -1.0, 1.0)
    assert clipped_share(flat) == 0.0
    assert "winsorised columns" not in named(origin_of(flat))
    scores = ExpandSpec(transform="normal-scores")
    assert "winsorised columns" not in named(origin_of(raw, spec=scores))
    clip = ExpandSpec(transform="clip")
    found = named(origin_of(raw, spec=clip))
    assert "winsorised columns" not in found and "normal scores of columns" in found


def test_factors_in_place_of_raw_columns_by_hand():
    rng = np.random.default_rng(11)
    common = rng.standard_normal((ROWS, 2))
    raw = common @ rng.standard_normal((2, 12)) + 0.3 * rng.standard_t(3, (ROWS, 12))
    origin = origin_of(raw, factors=2)
    recipe = named(origin)["2 factors in place of raw columns"]
    case = carry_out(recipe, origin)
    # Two factors at two lags, no powers or products, and the response's own lag.
    assert case.X.shape == (ROWS - LAGS, 2 * LAGS + 1)
    np.testing.assert_array_equal(case.X[:, -1], origin.case.X[:, -1])
    scores = standard(ndtri((rankdata(raw, axis=0) - 0.5) / ROWS))
    left, _, _ = np.linalg.svd(scores, full_matrices=False)
    for factor in range(2):
        for lag in (1, 2):
            expected = standard(lagged(left[:, factor], lag)[:, None])[:, 0]
            found = case.X[:, factor * LAGS + lag - 1]
            assert abs(found @ expected) / len(found) == pytest.approx(1.0, abs=1e-9)
    assert "single columns can no longer be told apart" in recipe.price


def test_factors_are_offered_only_where_there_are_some_and_fewer_than_raw_columns(raw):
    for factors, offered in ((0, False), (1, True), (RAW - 1, True), (RAW, False)):
        names = named(origin_of(raw, factors=factors))
        assert any("in place of raw columns" in name for name in names) is offered


def test_what_leaves_no_columns_besides_the_relevant_ones_is_no_remedy(raw):
    one = ExpandSpec()
    origin = origin_of(raw, factors=2, spec=one)
    assert carry_out(named(origin)["2 factors in place of raw columns"], origin) is None
    origin = origin_of(raw, factors=3, spec=one)
    assert carry_out(named(origin)["3 factors in place of raw columns"], origin).columns == 3


def test_huber_changes_the_loss_alone_and_only_where_it_is_least_squares(raw):
    origin = origin_of(raw)
    changed = carry_out(named(origin)["Huber loss"], origin)
    assert changed == replace(origin.case, loss="huber")
    for loss, offered in (("square-root", True), ("huber", False), ("absolute", False)):
        assert ("Huber loss" in named(origin_of(raw, loss=loss))) is offered


class Exponential:
    """Exponential innovations less their mean: skewness 2."""

    def innovations(self, size, rng):
        return rng.exponential(size=size) - 1.0


def exponential_location():
    """Huber's location of Exp(1) less 1, its bend 1.345 robust sd, by quadrature."""
    middle = math.log(2)

    def within(d):
        # P(|X - median| < d), d possibly beyond 0 on the left.
        return math.exp(-max(middle - d, 0)) - math.exp(-(middle + d)) - 0.5

    tau = 1.345 * 1.4826 * brentq(within, 0.1, 2.0)

    def mean_score(m):
        def inside(x):
            return np.clip(x - m, -tau, tau) * math.exp(-x)

        return quad(inside, 0, 60, points=[max(m - tau, 0), m + tau], limit=200)[0]

    return brentq(mean_score, 0.1, 1.5) - 1.0


def test_the_distance_between_hubers_location_and_the_mean():
    expected = exponential_location()
    assert -0.25 < expected < -0.05
    assert huber_shift(Exponential(), 3) == pytest.approx(expected, abs=0.01)
    assert huber_shift(normal_law(2.0), 3) == pytest.approx(0.0, abs=0.005)
    assert huber_shift(student_law(5), 3) == pytest.approx(0.0, abs=0.01)


def test_hubers_price_says_how_far_its_location_is_from_the_mean(raw):
    symmetric = named(origin_of(raw, law=normal_law(1.0)))["Huber loss"].price
    assert "within 0.01 sd of the mean" in symmetric
    origin = origin_of(raw)
    skewed = replace(origin, case=replace(origin.case, law=Exponential()))
    (recipe, *_) = [r for r in _without_weights(skewed) if r.loss]
    assert f"{-exponential_location():.2f} sd below the mean" in recipe.price


def _without_weights(origin):
    from scantling.planning.changes import _penalties

    return list(_penalties(origin.case))


def test_two_that_set_the_same_thing_are_not_joined(raw):
    found = named(origin_of(raw, factors=2, broken=(1, 3)))
    sets = {name: recipe.sets for name, recipe in found.items()}
    for one, two in combinations(found, 2):
        pair = joined(found[one], found[two])
        assert (pair is None) is bool(sets[one] & sets[two])
        if pair is not None:
            assert pair.name == f"{one} and {two}"
            assert pair.price == f"{found[one].price}; {found[two].price}"
    drop = "drop the 2 columns whose scores lack a variance"
    factors = "2 factors in place of raw columns"
    for one, two in (
        ("normal scores of columns", "winsorised columns"),
        (factors, "no powers"), (factors, "no products"), (factors, drop),
        (factors, "normal scores of columns"), (drop, "normal scores of columns"),
    ):  # fmt: skip
        assert joined(found[one], found[two]) is None, (one, two)
    for one, two in (
        ("self-normalised loadings", "Huber loss"), ("no powers", "no products"),
        ("no powers", "normal scores of columns"), (drop, "no powers"),
        (factors, "self-normalised loadings"),
    ):  # fmt: skip
        assert joined(found[one], found[two]) is not None, (one, two)


def test_a_pair_of_expansions_by_hand(raw):
    origin = origin_of(raw)
    found = named(origin)
    pair = joined(found["no powers"], found["normal scores of columns"])
    case = carry_out(pair, origin)
    scores = ndtri((rankdata(raw, axis=0) - 0.5) / ROWS)
    expected = [lagged(scores[:, j], lag) for j in range(RAW) for lag in (1, 2)]
    products = [
        lagged(scores[:, i] * scores[:, j], lag)
        for i, j in combinations(range(RAW), 2)
        for lag in (1, 2)
    ]
    made = standard(np.column_stack([*expected, *products]))
    np.testing.assert_allclose(case.X[:, :-1], made, atol=1e-9)
    swapped = carry_out(joined(found["normal scores of columns"], found["no powers"]), origin)
    np.testing.assert_array_equal(swapped.X, case.X)


def test_columns_dropped_from_remade_ones_are_known_by_name(raw):
    # The plan of columns: g0.lag1, g0.lag2, g0^2.lag1, g0^2.lag2, g1.lag1, ...
    origin = origin_of(raw, broken=(0, 2, 5))
    found = named(origin)
    pair = joined(found["drop the 3 columns whose scores lack a variance"], found["no powers"])
    case = carry_out(pair, origin)
    alone = carry_out(found["no powers"], origin)
    # Of g0.lag1, g0^2.lag1 and g1.lag2 the square is gone already.
    np.testing.assert_array_equal(case.X, np.delete(alone.X, [0, 3], axis=1))
    assert case.seed != origin.case.seed
    only_squares = origin_of(raw, broken=(2, 3))
    found = named(only_squares)
    pair = joined(found["drop the 2 columns whose scores lack a variance"], found["no powers"])
    assert carry_out(pair, only_squares) is None


def test_rows_are_weighted_after_columns_are_dropped_and_the_rule_comes_last(raw):
    rows = ROWS - LAGS
    path = np.exp(np.linspace(-1, 1, rows))
    volatility = Volatility.__new__(Volatility)  # only its path is looked at
    object.__setattr__(volatility, "path", path)
    law = replace(student_law(5, sd=1.0), volatility=volatility)
    origin = origin_of(raw, broken=(4,))
    origin = replace(origin, case=replace(origin.case, law=law))
    recipe = Recipe(
        names=("all",), prices=("much",), dropped=(4,), weighted=True, rule="self-normalised",
        loss="huber",
    )  # fmt: skip
    case = carry_out(recipe, origin)
    relative = path / math.sqrt((path**2).mean())
    kept = np.delete(origin.case.X, 4, axis=1)
    np.testing.assert_allclose(case.X, standard(kept / relative[:, None]), atol=1e-9)
    assert (case.rule, case.loss, case.law.volatility) == ("self-normalised", "huber", None)


def test_rows_are_filtered_by_the_errors_autoregression(raw):
    values = np.array([0.6, 0.1])
    levels = Autoregression(coefficients=values, draws=values[None])
    law = replace(student_law(5, sd=1.0), autoregression=levels)
    origin = origin_of(raw)
    origin = replace(origin, case=replace(origin.case, law=law))
    recipe = named(origin)["filter rows by the errors' autoregression"]
    assert recipe.sets == {"rows"}
    assert joined(recipe, Recipe(names=("w",), prices=("",), weighted=True)) is None
    case = carry_out(recipe, origin)
    X, e = origin.case.X, origin.residuals.values
    left = X.copy()
    left[1:] -= 0.6 * X[:-1]
    left[2:] -= 0.1 * X[:-2]
    np.testing.assert_allclose(case.X, standard(left), atol=1e-9)
    shocks = e.copy()
    shocks[1:] -= 0.6 * e[:-1]
    shocks[2:] -= 0.1 * e[:-2]
    assert case.residual_sd == pytest.approx(shocks.std(), rel=1e-9)
    assert case.law.autoregression is None
    assert case.law.sd == pytest.approx(1.0)
    assert "weight rows by fitted volatility" not in named(origin)


def test_a_recipe_that_sets_nothing_leaves_the_case(raw):
    origin = origin_of(raw)
    assert carry_out(Recipe(names=("none",), prices=("",)), origin) == origin.case


def test_huber_loss_lowers_the_risk_where_errors_are_heavy_and_columns_sparse():
    # A column active on 6 rows of 300: its score breaks through where one error there is huge.
    rng = np.random.default_rng(8)
    X = np.zeros((300, 60))
    for j in range(60):
        X[rng.choice(300, 6, replace=False), j] = rng.standard_normal(6)
    law = student_law(2.5, sd=1.0)
    case = replace(
        origin_of(rng.standard_normal((ROWS, RAW))).case, X=standard(X), law=law, law_draws=(law,)
    )
    risk = {
        loss: break_through(replace(case, loss=loss), serial_map, bands=False).curve[-1].risk
        for loss in ("squared", "huber")
    }
    assert risk["squared"] > 0.2 > 2 * risk["huber"]
