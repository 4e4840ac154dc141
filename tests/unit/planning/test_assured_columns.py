"""Assured columns: both bounds against direct evaluation, published values, and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import norm
from scipy.stats import t as student

from scantling.design.spec import TargetSpec
from scantling.law.families import normal_law, student_law
from scantling.law.notation import parse_law
from scantling.planning import assured as module
from scantling.planning.assured import (
    STEP,
    assured,
    assured_point,
    bennett,
    bennett_h,
    column_sizes,
    exceedance,
    first_bound,
    second_bound,
)
from scantling.planning.recipe import standardise

LAWS = ("student-t:df=3", "student-t:df=5", "normal", "laplace")


def columns_of(law, rows=200, columns=30, seed=0):
    return standardise(parse_law(law).draw((rows, columns), np.random.default_rng(seed)))


def h(u):
    return (1 + u) * math.log(1 + u) - u


def direct_first(X, law, level, points=240):
    """Averaged over columns: min over y of sum_i P(|x_ij e_i| > y) + 2 exp{...}, no bins."""
    n = len(X)
    best = math.inf
    with np.errstate(divide="ignore"):
        for y in np.exp(np.linspace(-3, 9, points)):
            large = exceedance(law, (y / np.abs(X)).ravel()).sum() / X.shape[1]
            best = min(best, large + 2 * math.exp(-(n / y**2) * h(level * y / math.sqrt(n))))
    return best


def direct_second(X, law, level, risk, points=1200):
    """Largest p with n P(|e| > y) + 2 p mean_j exp{...} <= risk, over y."""
    n, best = len(X), 0.0
    for y in np.exp(np.linspace(-3, 9, points)):
        beyond = float(exceedance(law, np.array([y]))[0])
        spare = risk - n * beyond
        if spare <= 0:
            continue
        b = np.abs(X).max(axis=0) * (y + math.sqrt(beyond))
        sums = [math.exp(-(n / each**2) * h(level * each / math.sqrt(n))) for each in b]
        best = max(best, spare / max(2 * np.mean(sums), 1e-300))
    return best


def test_bennetts_exponent():
    # h(1) = 2 ln 2 - 1; h(u) ~ u^2/2 for small u, and for u = e - 1 it is 1.
    assert float(bennett_h(np.array(1.0))) == pytest.approx(0.3862944, abs=1e-7)
    assert float(bennett_h(np.array(math.e - 1))) == pytest.approx(1.0, abs=1e-12)
    assert float(bennett_h(np.array(1e-4))) == pytest.approx(5e-9, rel=1e-3)
    # A bound far below the sum's sd leaves the normal exponent x^2 / (2 V).
    near = bennett(100.0, np.array([1e-3]), 30.0)
    assert near[0] == pytest.approx(math.exp(-4.5), rel=1e-3)


@pytest.mark.parametrize(("x", "expected"), [(100, 2.9661e-3), (200, 9.064e-5)])
def test_the_moment_form_of_the_truncation_bound(x, expected):
    """n = 200, q = 4, variance 1, fourth moment 3; computed beforehand for the method notes."""
    y = np.exp(np.arange(-2, 8, 1e-4))
    large = 200 * np.minimum(1, 3 / y**4)
    found = (large + 2 * bennett(200.0, y, x)).min()
    # They were minimised over a coarser grid of y, so they lie a little above.
    assert found == pytest.approx(expected, rel=3e-3)
    assert found <= expected


@pytest.mark.parametrize("law", LAWS)
def test_exceedance_is_that_of_errors_in_units_of_their_sd(law):
    errors = parse_law(law).scaled(3.7)
    size = np.array([0.5, 1.0, 3.0, 8.0])
    drawn = np.abs(errors.draw(400_000, np.random.default_rng(1))) / errors.sd
    found = exceedance(errors, size)
    seen = (drawn[:, None] > size).mean(axis=0)
    # The sd of a t(3) is the law's, not the sample's: only binomial error is left.
    error = np.sqrt(found * (1 - found) / 400_000)
    assert (np.abs(seen - found) < 4.5 * error + 1e-12).all()
    if law == "student-t:df=3":
        np.testing.assert_allclose(found, 2 * student.sf(math.sqrt(3) * size, 3), rtol=1e-10)


@pytest.mark.parametrize("columns", ["student-t:df=3", "normal"])
@pytest.mark.parametrize("law", LAWS)
@pytest.mark.parametrize("level", [3.0, 8.0, 20.0])
def test_first_bound_against_direct_evaluation(columns, law, level):
    X, errors = columns_of(columns, columns=8), parse_law(law)
    found = first_bound(column_sizes(X), errors, level)
    direct = direct_first(X, errors, level)
    # Sizes are rounded up, never down; a grid of y may miss the minimum by a little.
    assert direct * 0.97 <= found <= direct * 1.15


@pytest.mark.parametrize("columns", ["student-t:df=3", "normal"])
@pytest.mark.parametrize("law", LAWS)
@pytest.mark.parametrize("level", [5.0, 8.0, 14.0])
def test_second_bound_against_direct_evaluation(columns, law, level):
    X, errors = columns_of(columns), parse_law(law)
    found = second_bound(column_sizes(X), errors, level, 0.05)
    direct = direct_second(X, errors, level, 0.05)
    if direct < 1e-9:
        assert found <= 1e-9
    else:
        # Sizes rounded up by at most 2 %, which the exponent feels.
        assert math.log(found) <= math.log(direct) + 0.02 * level
        assert math.log(found) >= math.log(direct) - 0.06 * level**2


def test_sizes_are_counted_in_bins_rounded_up():
    X = np.array([[0.0, 2.0], [1.0, 0.5], [1.0, 1e-9]])
    sizes = column_sizes(X)
    assert sizes.rows == 3
    assert sizes.counts.sum() == pytest.approx(3.0)
    assert sizes.largest.tolist() == [1.0, 2.0]
    edges = module.FINEST + STEP * np.arange(sizes.counts.size)
    assert sizes.counts[0] == pytest.approx(1.0)  # the zero and the tiny one: two of two columns
    held = {round(float(edge), 6): count for edge, count in zip(edges, sizes.counts, strict=True)}
    for value, count in ((2.0, 0.5), (1.0, 1.0), (0.5, 0.5)):
        place = round(math.ceil((math.log(value) + 14) / STEP - 1e-9) * STEP - 14, 6)
        assert held[place] == pytest.approx(count)
        assert 0 <= place - math.log(value) < STEP


@pytest.mark.parametrize("columns", LAWS)
@pytest.mark.parametrize("law", LAWS)
def test_no_more_than_the_risk_passes_an_assured_level(columns, law):
    """As many columns as are assured pass the level at which they are, at most at the risk."""
    rng = np.random.default_rng(3)
    errors = parse_law(law)
    for rows, level in ((60, 6.0), (200, 5.0), (200, 9.0)):
        X = columns_of(columns, rows, 120, seed=rows)
        sizes = column_sizes(X)
        drawn = errors.draw((rows, 4000), rng)
        passing = np.abs(X.T @ (drawn - drawn.mean(axis=0))) / math.sqrt(rows) > level * errors.sd
        share = passing.mean()
        assert share <= first_bound(sizes, errors, level) + 3 * math.sqrt(share / 4000)
        # At risk 0.2, the chance that any passes of as many as the second bound allows.
        allowed = min(int(second_bound(sizes, errors, level, 0.2)), 120)
        if allowed:
            any_passes = passing[:allowed].any(axis=0).mean()
            assert any_passes <= 0.2 + 3 * math.sqrt(0.16 / 4000)


def test_assured_columns_at_the_level_where_the_effect_shows():
    X = columns_of("normal", 1000, 50)
    law, target = normal_law(2.0), TargetSpec(smallest_effect=0.25, power=0.9, risk=0.1)
    sizes = column_sizes(X)
    level = math.sqrt(1000) * 2.5 * 0.25 / 2.0 - norm.ppf(0.9)
    expected = max(0.1 / first_bound(sizes, law, level), second_bound(sizes, law, level, 0.1))
    assert assured_point(sizes, law, target, 2.5) == min(math.floor(expected), module.MOST)
    assert expected > 50
    # Scale free, and nothing is left where the power alone takes all room.
    assert assured_point(sizes, law.scaled(9.0), target, 22.5) == pytest.approx(
        math.floor(min(expected, module.MOST)), rel=1e-9
    )
    small = TargetSpec(smallest_effect=0.01, power=0.9)
    assert assured_point(sizes, law, small, 2.5) == 0.0


def test_heavy_columns_with_heavy_errors_are_assured_least():
    target = TargetSpec(smallest_effect=0.4)
    found = {}
    for columns in ("normal", "student-t:df=3"):
        sizes = column_sizes(columns_of(columns, 400, 60))
        for law in ("normal", "student-t:df=3"):
            found[columns, law] = assured_point(sizes, parse_law(law), target, 1.3)
    heavy = "student-t:df=3"
    assert found[heavy, heavy] <= min(found["normal", heavy], found[heavy, "normal"])
    assert max(found["normal", heavy], found[heavy, "normal"]) <= found["normal", "normal"]
    assert found["normal", "normal"] > 10**6 > 100 > found[heavy, heavy]


def test_the_limit_its_band_and_its_cap():
    X = columns_of("normal", 300, 40)
    law = student_law(5, sd=1.0)
    target = TargetSpec(smallest_effect=0.45)
    point = assured_point(column_sizes(X), law, target, 1.2)
    given = {"target": target, "response_sd": 1.2, "loss": "squared", "mode": "conditional"}
    open_one = assured(X, law, (law,) * 50, **given)
    assert point > 40
    assert (open_one.columns, open_one.high, open_one.note) == (40, None, "at least")
    counted = assured(X, law, (law,) * 50, **given, most=10**11)
    assert counted.columns == counted.low == counted.high == point
    worse = (student_law(2.2, sd=1.0),) * 5 + (student_law(1.7),) * 5 + (law,) * 40
    band = assured(X, law, worse, **given, most=10**11)
    assert band.columns == point
    assert (band.low, band.high) == (0, point)
    assert band.draws.count(0.0) >= 5


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"loss": "absolute"}, "absolute loss"),
        ({"loss": "huber"}, "huber loss"),
        ({"dependence": "lags of the response hold past errors"}, "past errors"),
    ],
)
def test_where_the_proof_does_not_apply_it_says_so(change, words):
    X, law = columns_of("normal", 60, 5), normal_law(1.0)
    given = {"target": TargetSpec(), "response_sd": 1.0, "loss": "squared", "mode": "generative"}
    found = assured(X, law, (), **given | change)
    assert (found.columns, found.low, found.high, found.mode) == (None, None, None, "generative")
    assert words in found.note
    for other, words in (
        (student_law(2.0), "variance"), (parse_law("normal:alpha=0.1,beta=0.8"), "volatility"),
    ):  # fmt: skip
        assert words in assured(X, other, (), **given).note
    # The square-root lasso has least squares' score.
    assert assured(X, law, (), **given | {"loss": "square-root"}).columns is not None


def test_the_truncated_mean_is_at_most_what_the_second_bound_allows_for():
    # |E e 1(|e| <= y)| <= sqrt(P(|e| > y)) by Cauchy and Schwarz; a skewed law puts it to the test.
    law = parse_law("skewed-t:df=3,skew=-0.6")
    draws = law.draw(2_000_000, np.random.default_rng(5)) / law.sd
    for y in (0.8, 2.0, 5.0):
        mean = draws[np.abs(draws) <= y].sum() / draws.size
        assert abs(mean) <= math.sqrt(float(exceedance(law, np.array([y]))[0]))
        assert abs(mean) > 0.001
    # And of a symmetric law it is zero.
    value, _ = quad(lambda e: e * student.pdf(e, 3), -2.0, 2.0)
    assert abs(value) < 1e-12
