"""Score kernels against plain loops, and the averages over columns against enumeration."""

from __future__ import annotations

import itertools
import math
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import norm

from scantling.errors import InputError
from scantling.simulation import scores
from scantling.simulation.scores import (
    Passers,
    centre,
    column_shares,
    exceeding_counts,
    first_above,
    join,
    largest_quantile,
    none_taken,
    passers,
    penalty_level,
    ranked,
    ranks_in_draw,
    risk_at,
    risk_curves,
    score_ratios,
)


def heavy_ratios(columns, draws, seed=0):
    """A (P, R) table of ratios, some columns far larger than others."""
    rng = np.random.default_rng(seed)
    return np.abs(rng.standard_t(3, (columns, draws))) * np.linspace(0.5, 2, columns)[:, None]


def subsets_exceeding(ratios, p, level):
    """Share of all p-subsets of columns, and draws, whose largest ratio exceeds the level."""
    columns, draws = ratios.shape
    hits = [
        ratios[list(taken), r].max() > level
        for taken in itertools.combinations(range(columns), p)
        for r in range(draws)
    ]
    return sum(hits) / len(hits)


def plain_ratios(X, E, rule):
    """The definitions, one number at a time."""
    n, width = X.shape
    out = np.empty((width, E.shape[1]))
    for j in range(width):
        for r in range(E.shape[1]):
            total = sum(X[i, j] * E[i, r] for i in range(n)) / math.sqrt(n)
            if rule == "plug-in":
                loading = math.sqrt(sum(E[i, r] ** 2 for i in range(n)) / n)
            else:
                loading = math.sqrt(sum((X[i, j] * E[i, r]) ** 2 for i in range(n)) / n)
            out[j, r] = abs(total) / loading
    return out


@pytest.mark.parametrize("rule", scores.RULES)
def test_ratios_equal_a_plain_loop(rule):
    rng = np.random.default_rng(1)
    X = rng.standard_t(3, (17, 4))
    E = centre(rng.standard_t(2.5, (17, 6)))
    ratios, loadings = score_ratios(X, E, rule)
    np.testing.assert_allclose(ratios, plain_ratios(X, E, rule), rtol=1e-12)
    squared, _ = score_ratios(X, E, rule, X**2)
    np.testing.assert_array_equal(squared, ratios)
    assert loadings.shape == ((1, 6) if rule == "plug-in" else (4, 6))


def test_the_rules_differ_where_large_meets_large():
    # One row holds all of x and most of e: |S|/v is sqrt(n) r under equal loadings, 1 itself.
    x, e = np.zeros((9, 1)), np.full((9, 1), 0.1)
    x[0], e[0] = 3.0, 5.0
    assert score_ratios(x, e, "self-normalised")[0][0, 0] == pytest.approx(1, abs=1e-12)
    equal = 3 * 5 / 3 / math.sqrt((25 + 8 * 0.01) / 9)
    assert score_ratios(x, e, "plug-in")[0][0, 0] == pytest.approx(equal, rel=1e-12)


def test_a_column_idle_where_errors_are_has_ratio_zero():
    X = np.array([[1.0], [0.0], [0.0]])
    E = np.array([[0.0], [1.0], [-1.0]])
    assert score_ratios(X, E, "self-normalised")[0][0, 0] == 0.0


@pytest.mark.parametrize("rule", ["plugin", "", "bic", "self normalised"])
def test_an_unknown_rule_is_refused(rule):
    words = f"^rule: one of plug-in, self-normalised is needed; found {rule!r}$"
    with pytest.raises(InputError, match=words):
        score_ratios(np.eye(3), np.eye(3), rule)


def test_centre_takes_out_each_draws_mean():
    E = np.array([[1.0, 10.0], [3.0, 20.0]])
    np.testing.assert_array_equal(centre(E), [[-1, -5], [1, 5]])


@pytest.mark.parametrize(
    ("n", "p", "risk", "expected"),
    [(100, 50, 0.05, 72.3915881), (250, 200, 0.1 / math.log(250), 136.1694305)],
)
def test_penalty_level_gives_the_published_penalty(n, p, risk, expected):
    # CHECKS 47: 2 c sqrt(n) Phi^-1(1 - g/(2p)), c = 1.1; Belloni et al. (2012), Econometrica 80.
    assert 2 * math.sqrt(n) * float(penalty_level(p, risk)) == pytest.approx(expected, abs=1e-6)


def test_penalty_level_by_scipy_far_out_and_over_arrays():
    p = np.array([1, 10, 10_000_000])
    np.testing.assert_allclose(penalty_level(p, 0.05), 1.1 * norm.isf(0.025 / p), rtol=1e-12)
    assert float(penalty_level(7, 0.1, 1.0)) == pytest.approx(norm.isf(0.1 / 14), rel=1e-12)


@pytest.mark.parametrize("columns", range(1, 8))
def test_none_taken_by_enumeration(columns):
    for k in range(columns + 1):
        for p in range(1, columns + 1):
            subsets = list(itertools.combinations(range(columns), p))
            free = sum(min(taken) >= k for taken in subsets)  # columns 0..k-1 exceed
            found = float(none_taken(np.array([k]), columns, p)[0])
            assert found == pytest.approx(free / len(subsets), abs=1e-13)


@pytest.mark.parametrize(
    ("k", "p"), [(0, 5000), (1, 5000), (1, 1), (3, 2500), (40, 100), (4999, 1)]
)
def test_none_taken_at_five_thousand_columns(k, p):
    exact = float(Fraction(math.comb(5000 - k, p), math.comb(5000, p)))
    assert float(none_taken(np.array([k]), 5000, p)[0]) == pytest.approx(exact, rel=1e-8, abs=1e-15)


def test_none_taken_is_exactly_zero_or_one_at_its_ends():
    assert none_taken(np.arange(4), 5000, 5000).tolist() == [1, 0, 0, 0]
    assert none_taken(0, 5000, np.arange(1, 5001)).tolist() == [1.0] * 5000


@pytest.mark.parametrize("p", [1, 2, 5, 8])
def test_risk_by_enumeration_of_all_subsets(p):
    ratios = heavy_ratios(8, 12)
    for level in (0.8, 1.7, 3.0):
        risk, error = risk_at(passers(ratios, 0.5), p, level)
        assert risk == pytest.approx(subsets_exceeding(ratios, p, level), abs=1e-12)
        broken = 1 - none_taken((ratios > level).sum(axis=0), 8, p)
        assert error == pytest.approx(broken.std() / math.sqrt(12), abs=1e-12)


@pytest.mark.parametrize("p", [1, 3, 8])
@pytest.mark.parametrize("probability", [0.5, 0.8, 0.95])
def test_quantile_by_enumeration_of_all_subsets(p, probability):
    ratios = heavy_ratios(8, 13, seed=4)
    maxima = np.sort(
        [
            ratios[list(taken), r].max()
            for taken in itertools.combinations(range(8), p)
            for r in range(13)
        ]
    )
    # Smallest t with P(max <= t) >= probability.
    place = math.ceil(probability * maxima.size - 1e-9) - 1
    found = largest_quantile(passers(ratios, 0.0), p, probability)
    assert found == pytest.approx(maxima[place], abs=0)


def test_at_all_columns_the_risk_is_the_plain_maximums():
    ratios = heavy_ratios(300, 400, seed=2)
    level = float(np.quantile(ratios.max(axis=0), 0.9))
    risk, error = risk_at(passers(ratios, 1.4), 300, level)
    assert risk == (ratios.max(axis=0) > level).mean()
    assert error == pytest.approx(math.sqrt(risk * (1 - risk) / 400), rel=1e-12)
    quantile = largest_quantile(passers(ratios, 1.4), 300, 0.95)
    assert quantile == np.sort(ratios.max(axis=0))[379]  # 20 of 400 lie above


def test_quantile_below_the_floor_is_unknown():
    ratios = heavy_ratios(5, 40)
    assert largest_quantile(passers(ratios, 50.0), 3, 0.95) is None
    assert largest_quantile(passers(ratios, ratios.max() - 1e-9), 5, 0.5) is None


def test_the_floor_does_not_move_the_quantile():
    ratios = heavy_ratios(40, 200, seed=3)
    for p in (1, 7, 40):
        full = largest_quantile(passers(ratios, 0.0), p, 0.95)
        assert full is not None
        assert largest_quantile(passers(ratios, full - 0.01), p, 0.95) == full


def test_largest_quantile_grows_with_p_at_every_step():
    found = passers(heavy_ratios(60, 150, seed=5), 0.0)
    quantiles = [largest_quantile(found, p, 0.95) for p in range(1, 61)]
    assert all(a <= b for a, b in itertools.pairwise(quantiles))
    assert quantiles[0] < quantiles[-1]


def test_ranked_passers_by_hand_and_the_same_quantiles_from_them():
    found = Passers(
        columns=4, draws=3, draw=np.array([2, 0, 2, 0, 2]), column=np.array([0, 1, 2, 3, 3]),
        ratio=np.array([3.0, 1.0, 9.0, 2.0, 5.0]),
    )  # fmt: skip
    table = ranked(found)
    assert (table.columns, table.draws) == (4, 3)
    assert table.ratio.tolist() == [9, 5, 3, 2, 1]
    assert table.rank.tolist() == [0, 1, 2, 0, 1]
    whole = passers(heavy_ratios(40, 200, seed=3), 0.3)
    table = ranked(whole)
    for p in (1, 2, 17, 40):
        for probability in (0.5, 0.8, 0.95):
            plain = largest_quantile(whole, p, probability)
            assert largest_quantile(table, p, probability) == plain
    assert largest_quantile(ranked(passers(np.zeros((4, 3)), 1.0)), 2, 0.95) is None


def test_risk_curves_equal_the_risk_at_every_p():
    found = passers(heavy_ratios(120, 90, seed=6), 1.4)
    curve = risk_curves(found, 0.05)
    assert curve.shape == (1, 120)
    plain = [risk_at(found, p, float(penalty_level(p, 0.05)))[0] for p in range(1, 121)]
    np.testing.assert_allclose(curve[0], plain, atol=1e-12)


def test_risk_curves_with_weights_are_those_of_the_repeated_draws():
    ratios = heavy_ratios(50, 30, seed=7)
    rng = np.random.default_rng(0)
    picks = rng.integers(30, size=(3, 30))
    weights = np.array([np.bincount(pick, minlength=30) for pick in picks], dtype=float)
    curves = risk_curves(passers(ratios, 1.4), 0.1, weights)
    for pick, curve in zip(picks, curves, strict=True):
        plain = risk_curves(passers(ratios[:, pick], 1.4), 0.1)[0]
        np.testing.assert_allclose(curve, plain, atol=1e-12)


def test_risk_curves_of_nothing_are_zero():
    assert risk_curves(passers(np.zeros((4, 3)), 1.0), 0.05).tolist() == [[0, 0, 0, 0]]


@pytest.mark.parametrize(
    ("curve", "expected"),
    [
        ([0.01, 0.02, 0.05], math.inf),
        ([0.06, 0.01, 0.01], 0),
        ([0.01, 0.06, 0.01], 1),
        ([0.05 + 1e-15, 0.04, 0.0501], 2),
    ],
)
def test_first_above_by_hand(curve, expected):
    assert first_above(np.array(curve), 0.05) == expected


def test_join_numbers_the_draws_on():
    ratios = heavy_ratios(9, 25, seed=8)
    joined = join([passers(ratios[:, :10], 1.0), passers(ratios[:, 10:], 1.0)])
    whole = passers(ratios, 1.0)
    assert (joined.columns, joined.draws) == (9, 25)
    key = np.lexsort((joined.draw, joined.column))
    np.testing.assert_array_equal(joined.draw[key], whole.draw)
    np.testing.assert_array_equal(joined.column[key], whole.column)
    np.testing.assert_array_equal(joined.ratio[key], whole.ratio)
    # 16 bytes a ratio, as the bound on memory counts them.
    assert joined.draw.itemsize + joined.column.itemsize + joined.ratio.itemsize == 16
    assert risk_at(joined, 4, 2.0)[0] == risk_at(whole, 4, 2.0)[0]


def test_ranks_count_the_larger_ratios_of_the_draw():
    found = Passers(
        columns=4, draws=3, draw=np.array([2, 0, 2, 0, 2]), column=np.array([0, 1, 2, 3, 3]),
        ratio=np.array([3.0, 1.0, 9.0, 2.0, 5.0]),
    )  # fmt: skip
    assert ranks_in_draw(found.draw, found.ratio).tolist() == [2, 1, 0, 0, 1]
    assert exceeding_counts(found, 2.5).tolist() == [0, 0, 3]


def test_column_shares_sum_to_one_or_are_zero():
    ratios = np.array([[3.0, 3.0, 0.0], [3.0, 0.0, 0.0], [0.0, 0.0, 0.0]])
    found = passers(ratios, 1.0)
    np.testing.assert_allclose(column_shares(found, 2.0), [2 / 3, 1 / 3, 0])
    assert column_shares(found, 4.0).tolist() == [0, 0, 0]
