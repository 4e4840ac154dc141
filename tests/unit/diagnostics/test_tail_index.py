"""Tail index of one series: intervals, sides, zeros, ties, refusals."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from scipy.stats import norm
from scipy.stats import t as student

from scantling import errors
from scantling.diagnostics import greenwood, tail_estimators
from scantling.diagnostics.tail_index import (
    block_length,
    index_ends,
    moderate,
    one_side,
    spike,
    tail_index,
    tied_share,
)
from scantling.diagnostics.tail_interval import dependent_error, gamma_interval


def students(n: int, df: float = 3, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).standard_t(df, n)


# The parts.


def test_weighted_hill_is_the_weighted_regression_of_hill_on_the_count() -> None:
    ordered = one_side(students(200), "both")
    counts = np.arange(1, 101)
    hills = [tail_estimators.hill(ordered, k) for k in counts]
    intercept = np.polyfit(counts, hills, 1, w=np.sqrt(counts))[1]
    assert tail_estimators.weighted_hill(ordered, 100) == pytest.approx(intercept, rel=1e-10)


@pytest.mark.parametrize("kappa", [2, 15, 500])
def test_weighted_hill_coefficients_are_free_of_scale(kappa: int) -> None:
    coefficients = tail_estimators.weighted_hill_coefficients(kappa)
    assert coefficients.shape == (kappa + 1,)
    assert coefficients.sum() == pytest.approx(0, abs=1e-10)
    with pytest.raises(ValueError, match="read-only"):
        coefficients[0] = 1


def test_estimators_take_many_columns_at_once() -> None:
    columns = np.sort(np.abs(students(300).reshape(100, 3)), axis=0)[::-1]
    for j in range(3):
        for many, one in (
            (tail_estimators.hill(columns, 20)[j], tail_estimators.hill(columns[:, j], 20)),
            (
                tail_estimators.weighted_hill(columns, 50)[j],
                tail_estimators.weighted_hill(columns[:, j], 50),
            ),
            (
                greenwood.greenwood_statistic(columns, 15)[j],
                greenwood.greenwood_statistic(columns[:, j], 15),
            ),
        ):
            assert many == pytest.approx(one, rel=1e-12)


def jackknife(ordered: np.ndarray, statistic, count: int) -> np.ndarray:  # type: ignore[no-untyped-def]
    """(n - 1)(T - T_without_r), which the influence approximates."""
    whole = statistic(ordered, count)
    left = [statistic(np.delete(ordered, r), count) for r in range(ordered.size)]
    return (ordered.size - 1) * (whole - np.array(left))


def test_influence_of_the_weighted_hill_follows_the_jackknife() -> None:
    ordered = one_side(students(600), "both")
    found = tail_estimators.influence(
        np.log(ordered)[:, None], tail_estimators.weighted_hill_coefficients(300)
    )[:, 0]
    near = jackknife(ordered, tail_estimators.weighted_hill, 300)
    near -= near.mean()
    assert np.corrcoef(found, near)[0, 1] > 0.98
    assert found.std() == pytest.approx(near.std(), rel=0.05)


def test_influence_of_hill_has_the_textbook_variance() -> None:
    """Under independence the error is gamma/sqrt(k); without the threshold's share it is 1.41
    times that."""
    x = np.random.default_rng(2).pareto(3, 20_000) + 1
    logs = np.log(np.sort(x)[::-1])[:, None]
    found = tail_estimators.hill_influence(logs, 1000)
    assert found.sum() == pytest.approx(0, abs=1e-6)
    error = tail_estimators.block_standard_error(found, 1)[0]
    assert error == pytest.approx(1 / 3 / math.sqrt(1000), rel=0.06)
    flat = np.full(1001, 1 / 1000)
    wrong = tail_estimators.block_standard_error(tail_estimators.influence(logs, flat), 1)[0]
    assert wrong > 1.3 * error


def test_block_error_of_a_mean_is_the_root_mean_square_of_block_sums() -> None:
    x = students(60, seed=3)
    x -= x.mean()
    wrapped = np.concatenate([x, x[:6]])
    sums = [wrapped[start : start + 7].sum() for start in range(60)]
    expected = math.sqrt(np.mean(np.square(sums)) / 7 / 60)
    assert tail_estimators.block_standard_error(x[:, None], 7)[0] == pytest.approx(expected)
    assert tail_estimators.block_standard_error(x[:, None], 1)[0] == pytest.approx(
        x.std() / math.sqrt(60)
    )


@pytest.mark.parametrize(("n", "length"), [(250, 28), (1000, 64), (5000, 166)])
def test_block_lengths(n: int, length: int) -> None:
    assert block_length(n) == length


@pytest.mark.parametrize("scale", [1e-320, 1e-300, 1e300])
def test_only_extreme_series_are_rescaled(scale: float) -> None:
    x = students(50)
    assert moderate(x) is x
    scaled = moderate(x * scale)
    assert 0.5 <= np.abs(scaled).max() < 1
    mixed = moderate(np.column_stack([x, x * scale]))
    assert np.array_equal(mixed[:, 0], x)


# The whole.


def ends_by_steps(x: np.ndarray, level: float) -> tuple[float, float]:
    """Estimate, influences in time order, both errors, ends: one line each."""
    size = np.abs(x - np.median(x))
    order = np.argsort(-size)
    kappa, block = x.size // 2, block_length(x.size)
    by_rank = tail_estimators.influence(
        np.log(size[order])[:, None], tail_estimators.weighted_hill_coefficients(kappa)
    )
    in_time = np.empty_like(by_rank)
    in_time[order] = by_rank
    errors = [tail_estimators.block_standard_error(in_time, length) for length in (block, 1)]
    gamma = np.array([tail_estimators.weighted_hill(size[order], kappa)])
    low, high = gamma_interval(gamma, dependent_error(*errors, x.size, block), x.size, level)
    return index_ends(float(low[0]), float(high[0]))


def test_fields_agree_with_their_parts() -> None:
    x = students(400)
    found = tail_index(x)
    ordered = one_side(x, "both")
    assert found.gamma == tail_estimators.weighted_hill(ordered, 200)
    assert found.index == 1 / found.gamma
    assert found.hill_gamma == tail_estimators.hill(ordered, 20)
    assert (found.threshold_count, found.hill_count, found.rows) == (200, 20, 400)
    assert (found.low, found.high) == pytest.approx(ends_by_steps(x, 0.90), rel=1e-9)
    assert found.finite == (found.p_value <= 0.05)
    assert found.hill_error >= found.hill_gamma / math.sqrt(20)
    assert (found.side, found.level, found.note) == ("both", 0.90, "")


def test_pandas_and_seeds() -> None:
    """Nothing is drawn but the noise that breaks ties."""
    x = students(200)
    assert tail_index(pd.Series(x)) == tail_index(x)
    assert tail_index(x, seed=1) == tail_index(x)
    rounded = np.round(4 * x) / 4 + 0.125
    one, other = tail_index(rounded), tail_index(rounded, seed=1)
    assert one.note == other.note != ""
    assert one.gamma != other.gamma
    assert one.gamma == pytest.approx(other.gamma, abs=0.05)


def test_a_higher_level_widens_the_interval() -> None:
    x = students(300)
    ends = [tail_index(x, level=level) for level in (0.5, 0.9, 0.99)]
    assert ends[0].low > ends[1].low > ends[2].low
    assert ends[0].high < ends[1].high < ends[2].high


def test_one_sided_tails_tell_a_heavy_from_a_light_side() -> None:
    """A t(2.5) on the right, normal on the left."""
    rng = np.random.default_rng(4)
    n = 4000
    x = np.where(rng.random(n) < 0.5, np.abs(rng.standard_t(2.5, n)), -np.abs(rng.normal(size=n)))
    left, right = (tail_index(x, side=side) for side in ("left", "right"))
    assert right.index == pytest.approx(2.5, abs=0.5)
    assert right.finite
    assert left.index > 5
    assert not left.finite
    assert right.high < left.low
    assert left.threshold_count == right.threshold_count == 1000


def test_zeros_are_dropped_beyond_two_per_cent() -> None:
    x = students(1000)
    some = x.copy()
    some[:20] = 0
    assert tail_index(some).note == ""
    assert tail_index(some).rows == 1000
    many = x.copy()
    many[:300] = 0
    found = tail_index(many)
    assert found.note == "30% equal values dropped"
    assert found.rows == 700
    assert found.gamma == tail_index(x[300:]).gamma
    moved = tail_index(many - 0.7)  # zeros of the raw series, centred since
    assert (moved.note, moved.rows) == (found.note, 700)
    assert moved.gamma == pytest.approx(found.gamma, rel=1e-9)


def test_a_spike_stands_out_and_rounding_does_not() -> None:
    """Above 2 % of the rows and three times as frequent as the next; exact zeros by share alone."""
    rest = students(1000)
    assert spike(rest) is None
    assert spike(np.r_[np.full(20, 0.7), rest[20:]]) is None
    assert spike(np.r_[np.full(21, 0.7), rest[21:]]) == 0.7
    assert spike(np.r_[np.full(60, 0.7), np.full(21, -0.7), rest[81:]]) is None
    assert spike(np.r_[np.full(63, 0.7), np.full(21, -0.7), rest[84:]]) == 0.7
    assert spike(np.r_[np.full(60, 0.7), np.zeros(21), rest[81:]]) == 0.0
    assert spike(np.round(4 * rest) / 4 + 0.1) is None


@pytest.mark.parametrize("step", [0.25, 0.5])
def test_rounded_values_keep_their_index(step: float) -> None:
    """t(3), n = 1000: rounding to a quarter or half of the scale moves the index by little."""
    x = np.random.default_rng(3).standard_t(3, 1000) + 0.013
    found = tail_index(np.round(x / step) * step + step / 2)  # shifted: no exact zeros
    assert f"rounded in steps of {step:g}" in found.note
    assert found.gamma == pytest.approx(tail_index(x).gamma, abs=0.04)


def test_differences_of_rounded_levels_are_ties_though_their_last_bits_differ() -> None:
    """0.1 + 0.2 - 0.3 is not 0: exact comparison finds no ties in differences."""
    rng = np.random.default_rng(5)
    levels = np.round(100 + np.cumsum(rng.standard_t(3, 800)) * 0.05, 2)
    changes = np.diff(levels)
    assert np.unique(changes).size > 1.4 * np.unique(np.round(changes, 2)).size
    assert float(tied_share(changes)[0]) > 0.8
    found = tail_index(changes)
    assert "rounded in steps of 0.01" in found.note


def test_continuous_values_are_not_ties() -> None:
    half = students(300)
    assert float(tied_share(np.r_[half, -half])[0]) == 0
    assert float(tied_share(students(20_000))[0]) == 0
    assert float(tied_share(students(200) + 1e6)[0]) == 0


def dummy(n: int) -> np.ndarray:
    return (np.arange(n) % 3 == 0).astype(float)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.ones(100), "values: constant"),
        (np.full(100, 1e300), "values: constant"),
        (np.zeros(100), "values: constant"),
        (np.r_[np.zeros(99), 1.0], "values: 1 values besides the commonest; an index"),
        (np.r_[np.zeros(30), np.arange(1.0, 30)], "values: 29 values besides the commonest"),
        (dummy(300) + 1, "values: two-valued, so it has no tail"),
        (np.tile([1.0, -1.0], 50), "values: two-valued, so it has no tail"),
        (np.random.default_rng(1).integers(1, 8, 300), r"values: discrete \(7 distinct values\)"),
        (np.r_[np.full(120, 3.0), students(29)], "values: 29 values besides the commonest"),
        (students(29), "values: at least 30 values are needed; found 29"),
        (np.r_[students(50), np.nan], "values: finite values are needed; value 51 is nan"),
        (students(60).reshape(30, 2), "values: one dimension is needed; found 2"),
        (["a"] * 40, "values: numbers are needed; found list"),
    ],
)
def test_what_has_no_index_is_refused_in_words(values: object, words: str) -> None:
    with pytest.raises(errors.InputError, match=words) as refusal:
        tail_index(values)
    assert "\n" not in str(refusal.value)


@pytest.mark.parametrize(
    ("keywords", "words"),
    [
        ({"side": "up"}, "side: one of both, left, right is needed; found 'up'"),
        ({"level": 1.0}, "level: a number above 0 and below 1 is needed; found 1.0"),
        ({"level": "high"}, "level: a number is needed"),
        ({"seed": -1}, "seed: 0 or more is needed"),
    ],
)
def test_arguments_are_checked(keywords: dict, words: str) -> None:
    with pytest.raises(errors.InputError, match=words):
        tail_index(students(50), **keywords)


# The thin-tail test.


def test_greenwood_p_value_at_its_table_and_between() -> None:
    from scantling.diagnostics.greenwood_table import UPPER_POINTS, UPPER_PROBABILITIES

    for count in (10, 150, 1500):
        mean, variance = greenwood.null_moments(count)
        statistic = mean + np.array(UPPER_POINTS[count]) * math.sqrt(variance)
        found = greenwood.greenwood_p_value(statistic, count)
        assert found == pytest.approx(UPPER_PROBABILITIES, rel=1e-9)
    fine = greenwood.greenwood_p_value(np.linspace(0.5, 20, 2000), 40)
    assert (np.diff(fine) <= 0).all()
    assert 0 < fine[-1] < 1e-5


def test_greenwood_of_equal_and_of_one_excess() -> None:
    assert greenwood.greenwood_statistic(np.r_[np.full(10, 2.0), 1.0], 10) == pytest.approx(1)
    assert greenwood.greenwood_statistic(np.ones(11), 10) == 1
    one = np.r_[5.0, np.ones(10)]
    assert greenwood.greenwood_statistic(one, 10) == pytest.approx(10)
    assert greenwood.greenwood_statistic(one * 1e-300, 10) == pytest.approx(10)


def test_the_shipped_table_against_fresh_draws() -> None:
    """An independent simulation of the upper 5 % point at a count between the tabulated ones."""
    rng = np.random.default_rng(8)
    excess = -np.sort(-rng.standard_exponential((41, 20_000)), axis=0)
    excess -= excess[-1]
    p_values = greenwood.greenwood_p_value(greenwood.greenwood_statistic(excess, 40), 40)
    assert np.mean(p_values <= 0.05) == pytest.approx(0.05, abs=0.006)
    assert np.mean(p_values <= 0.5) == pytest.approx(0.5, abs=0.015)


def test_quantile_samples_of_thin_and_heavy_laws() -> None:
    grid = (np.arange(1, 1001) - 0.5) / 1000
    assert not tail_index(norm.ppf(grid)).finite
    heavy = tail_index(student.ppf(grid, 2.5))
    assert heavy.finite
    assert heavy.low < 2.5 < heavy.high
