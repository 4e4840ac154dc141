"""Selection statistics: exact values, Monte Carlo targets, coverage, refusals."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scantling.errors import InputError
from scantling.simulation import stability
from scantling.simulation.selection import pool_summaries, stability_index, summarise_selection


def rows(*lines):
    return np.array([[c == "1" for c in line] for line in lines])


HAND = rows("11000", "11000", "10100", "11000")


def test_stability_of_the_hand_example():
    # CHECKS 54, exact by hand: Phi .5833333, v .0325521, 95 % interval.
    value, low, high = stability_index(HAND, level=0.95)
    assert value == pytest.approx(0.5833333, abs=1e-6)
    assert (low, high) == pytest.approx((0.2297128, 0.9369539), abs=1e-6)
    assert ((high - low) / 2 / 1.959963985) ** 2 == pytest.approx(0.0325521, abs=1e-6)


def test_stability_at_its_extremes():
    # CHECKS 55, exact.
    assert stability_index(rows("101", "101", "101")) == pytest.approx((1, 1, 1), abs=1e-12)
    assert stability_index(rows("10", "01"))[0] == pytest.approx(-1, abs=1e-12)


def test_stability_of_independent_selections():
    # CHECKS 78: population value .4917582, exact; and the interval covers it.
    shares = np.array([0.9, 0.8, 0.6, 0.2, 0.1, 0.1, 0.05, 0.05])
    rng = np.random.default_rng(1)
    found = np.array([stability_index(rng.random((100, 8)) < shares) for _ in range(2000)])
    error = found[:, 0].std() / np.sqrt(2000)
    assert found[:, 0].mean() == pytest.approx(0.4917582, abs=4 * error + 0.0005)
    assert error < 0.001
    covered = np.mean((found[:, 1] <= 0.4917582) & (found[:, 2] >= 0.4917582))
    assert covered == pytest.approx(0.90, abs=4 * np.sqrt(0.09 / 2000))


def test_random_selections_of_one_size_have_stability_zero():
    rng = np.random.default_rng(2)
    Z = np.argsort(rng.random((4000, 30)), axis=1) < 6
    value, low, high = stability_index(Z)
    assert value == pytest.approx(0, abs=0.003)
    assert low < value < high


def textbook_stability(Z):
    """The formula with loops."""
    m, d = Z.shape
    variance = [m / (m - 1) * Z[:, f].mean() * (1 - Z[:, f].mean()) for f in range(d)]
    kbar = Z.sum(axis=1).mean()
    return 1 - np.mean(variance) / (kbar / d * (1 - kbar / d))


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    m=st.integers(2, 30), d=st.integers(1, 20), share=st.floats(0, 1), seed=st.integers(0, 10**6)
)
def test_stability_agrees_with_the_formula_and_stays_in_its_range(m, d, share, seed):
    Z = np.random.default_rng(seed).random((m, d)) < share
    found = stability_index(Z)
    if Z.all() or not Z.any():
        assert found is None
        return
    value, low, high = found
    assert value == pytest.approx(textbook_stability(Z), abs=1e-10)
    assert -1 / (m - 1) - 1e-12 <= low <= value + 1e-12
    assert value - 1e-12 <= high <= 1
    assert stability_index(Z[::-1, ::-1]) == pytest.approx(found, abs=1e-9)


def test_pieces_do_not_change_the_index(monkeypatch):
    Z = np.random.default_rng(3).random((57, 40)) < 0.3
    whole = stability_index(Z)
    monkeypatch.setattr(stability, "PIECE_CELLS", 100)
    assert stability_index(Z) == pytest.approx(whole, abs=1e-12)


@pytest.mark.parametrize(
    ("Z", "reason"),
    [(np.zeros((3, 4), dtype=bool), "no refit"), (np.ones((3, 4), dtype=bool), "every refit")],
)
def test_an_undefined_index_is_none_with_the_reason(Z, reason):
    assert stability_index(Z) is None
    summary = summarise_selection(Z, np.array([True, False, False, False]))
    assert summary.stability is None
    assert reason in summary.stability_note


def test_one_refit_has_no_stability():
    assert stability_index(rows("10")) is None


def test_summary_of_a_small_table_by_hand():
    selected = rows("1100", "1000", "1111", "0000")
    summary = summarise_selection(selected, rows("1100")[0])
    assert summary.replicates == 4
    assert summary.power.value == pytest.approx((1 + 0.5 + 1 + 0) / 4)
    assert summary.false_share.value == pytest.approx((0 + 0 + 0.5 + 0) / 4)
    assert summary.exact.value == 0.25
    assert summary.size.value == pytest.approx(7 / 4)
    error = np.std([1, 0.5, 1, 0], ddof=1) / 2
    assert summary.power.error == pytest.approx(error)
    assert summary.power.low == pytest.approx(summary.power.value - 1.6448536 * error)
    assert summary.power.high == 1.0
    assert summary.false_share.low == 0.0
    assert summary.false_share.high == pytest.approx(0.125 + 1.6448536 * 0.125)
    assert summary.stability.value == pytest.approx(textbook_stability(selected))
    with pytest.raises(dataclasses.FrozenInstanceError):
        summary.power = 1.0


def test_signs_and_prediction_loss_by_hand():
    selected = rows("1100", "1000", "1111", "0000")
    summary = summarise_selection(
        selected, rows("1100")[0], wrong_signs=[1, 0, 2, 0], loss=[2.0, 4.0, 6.0, 8.0],
        oracle=[1.0, 3.0, 1.0, 3.0],
    )  # fmt: skip
    assert summary.sign_errors.value == pytest.approx((0.5 + 0 + 1 + 0) / 4)
    # A ratio of means, 5 / 2; its error from loss - 2.5 oracle = -.5, -3.5, 3.5, .5.
    assert summary.prediction_loss.value == pytest.approx(2.5)
    error = np.std([-0.5, -3.5, 3.5, 0.5], ddof=1) / 2 / 2
    assert summary.prediction_loss.error == pytest.approx(error)
    assert summary.prediction_loss.low == pytest.approx(max(2.5 - 1.6448536 * error, 0))
    assert summary.prediction_loss.high == pytest.approx(2.5 + 1.6448536 * error)
    # A loss above the oracle's is not cut at 1, nor is a number of columns.
    assert summary.size.high > 1.75
    assert summarise_selection(selected, rows("1100")[0]).prediction_loss is None


def test_interval_of_the_loss_ratio_covers():
    rng = np.random.default_rng(8)
    truth, hits = np.array([True, False]), 0
    for _ in range(600):
        oracle = rng.gamma(2.0, size=100)
        loss = 1.5 * oracle + rng.gamma(2.0, size=100)  # ratio of means 2.5
        found = summarise_selection(rng.random((100, 2)) < 0.5, truth, loss=loss, oracle=oracle)
        hits += found.prediction_loss.low <= 2.5 <= found.prediction_loss.high
    assert hits / 600 == pytest.approx(0.90, abs=4 * np.sqrt(0.09 / 600))


def refits(rng, m, shares):
    return summarise_selection(rng.random((m, len(shares))) < shares, np.arange(len(shares)) < 4)


def test_interval_of_the_power_covers():
    rng = np.random.default_rng(4)
    shares = np.r_[np.full(4, 0.7), np.full(20, 0.05)]
    found = [refits(rng, 100, shares) for _ in range(800)]
    covered = np.mean([s.power.low <= 0.7 <= s.power.high for s in found])
    assert covered == pytest.approx(0.90, abs=4 * np.sqrt(0.09 / 800))


def test_pooled_interval_covers_the_mean_over_supports():
    rng = np.random.default_rng(5)

    def pooled(spread):
        shares = [np.full(24, 0.6 + spread * rng.uniform(-1, 1)) for _ in range(5)]
        return pool_summaries([refits(rng, 60, share) for share in shares])

    for spread in (0.3, 0.0):
        found = [pooled(spread) for _ in range(500)]
        covered = np.mean([s.power.low <= 0.6 <= s.power.high for s in found])
        assert covered > 0.90 - 4 * np.sqrt(0.09 / 500)
    # Negative control: errors within supports alone miss the spread between them.
    found = [pooled(0.3) for _ in range(300)]
    narrow = 1.645 * np.sqrt(0.6 * 0.4 / 4 / 300)
    assert np.mean([abs(s.power.value - 0.6) <= narrow for s in found]) < 0.5


def test_pooling_averages_and_never_has_less_than_the_error_within():
    rng = np.random.default_rng(6)
    shares = np.r_[np.full(4, 0.8), np.full(10, 0.1)]
    parts = [refits(rng, m, shares) for m in (50, 80, 50)]
    pooled = pool_summaries(parts)
    assert pooled.replicates == 180
    for name in ("power", "false_share", "stability", "exact", "size"):
        found = [getattr(s, name) for s in parts]
        assert getattr(pooled, name).value == pytest.approx(np.mean([f.value for f in found]))
        within = np.sqrt(sum(f.error**2 for f in found)) / 3
        between = np.std([f.value for f in found], ddof=1) / np.sqrt(3)
        assert getattr(pooled, name).error == pytest.approx(max(within, between))
    same = pool_summaries([parts[0]] * 3)
    assert same.power.error == pytest.approx(parts[0].power.error / np.sqrt(3))
    assert pool_summaries(parts[:1]) is parts[0]


def test_pooling_says_how_many_supports_have_no_stability():
    truth = rows("1100")[0]
    fine = summarise_selection(rows("1100", "1010", "1100"), truth)
    none = summarise_selection(np.zeros((3, 4), dtype=bool), truth)
    pooled = pool_summaries([fine, none, fine])
    assert pooled.stability.value == pytest.approx(fine.stability.value)
    assert pooled.stability_note == "not defined for 1 of 3 supports"
    assert pooled.power.value == pytest.approx(2 / 3 * fine.power.value)
    empty = pool_summaries([none, none])
    assert empty.stability is None
    assert empty.stability_note == "not defined for 2 of 2 supports"


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: stability_index(np.ones((3, 2))), "^Z: a table of true and false"),
        (lambda: stability_index(np.ones(3, dtype=bool)), "^Z: "),
        (lambda: stability_index(HAND, level=1.0), "^level: "),
        (lambda: summarise_selection(HAND, np.ones(4, dtype=bool)), "^relevant: 5 true or false"),
        (lambda: summarise_selection(HAND, np.ones(5)), "^relevant: "),
        (lambda: summarise_selection(HAND, np.zeros(5, dtype=bool)), "^relevant: at least one"),
        (lambda: summarise_selection(HAND[:1], HAND[0]), "^selected: at least 2"),
        (
            lambda: summarise_selection(HAND, HAND[0], wrong_signs=np.zeros(3)),
            "^wrong_signs: 4 numbers, one for each refit",
        ),
        (
            lambda: summarise_selection(HAND, HAND[0], loss=np.full(4, np.nan), oracle=np.ones(4)),
            "^loss: finite",
        ),
        (lambda: pool_summaries([]), "^summaries: at least one"),
        (
            lambda: pool_summaries(
                [summarise_selection(HAND, HAND[0], level=v) for v in (0.9, 0.95)]
            ),
            "^summaries: one level",
        ),
    ],
)
def test_bad_arguments_are_refused_by_name(call, message):
    with pytest.raises(InputError, match=message):
        call()
