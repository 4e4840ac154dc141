"""Scores of drawn columns: against a plain loop, in blocks, in shared tables, under every loss."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import ks_2samp

from scantling.core.streams import serial_map, stream, worker_pool
from scantling.law.families import normal_law, student_law
from scantling.law.notation import parse_law
from scantling.planning import generative as module
from scantling.planning.generative import (
    MANY_COLUMNS,
    StatedColumns,
    Tables,
    generative_scores,
    pieces_of,
    table_of,
    tables_for,
    tables_of,
    twin_of,
    weighted_median,
)
from scantling.simulation.loss_scores import LOSSES
from scantling.simulation.scores import largest_quantile, penalty_level, risk_at

T3 = student_law(3, sd=1.0)
SOURCE = StatedColumns(law=T3)


def scores(source=SOURCE, laws=(T3,), mapper=serial_map, **changes):
    given = {"rows": 40, "columns": 30, "draws": 12, "rule": "plug-in", "loss": "squared"}
    given |= {"floor": 0.0, "seed": 1, "tables": Tables()} | changes
    return generative_scores(source, laws, mapper=mapper, **given)


def plain_table(columns, rows, table, start=0, law=T3, seed=1):
    """Columns standardised one by one, from the block's own stream: (rows, columns)."""
    drawn = law.draw((columns, rows), stream(seed, "stated columns", table, start)).T
    drawn = drawn - drawn.mean(axis=0)
    return drawn / np.sqrt((drawn**2).mean(axis=0))


def plain_score(error, loss):
    """The loss's score of one draw, written out."""
    e = error - error.mean()
    if loss in ("squared", "square-root"):
        return e
    moved = e - np.median(e)
    if loss == "absolute":
        psi = np.sign(moved)
    else:
        tau = 1.345 * 1.4826 * np.median(np.abs(moved))
        psi = np.clip(moved, -tau, tau)
    return psi - psi.mean()


@pytest.mark.parametrize("loss", LOSSES)
@pytest.mark.parametrize("rule", ["plug-in", "self-normalised"])
def test_scores_are_those_of_a_plain_loop(rule, loss):
    shared = Tables(cells=1, fewest=3)  # twelve draws share three tables
    found = scores(rule=rule, loss=loss, tables=shared)[0]
    expected, loadings = np.zeros((30, 12)), []
    for draw in range(12):
        table = draw // 4
        X = plain_table(30, 40, table)
        errors = T3.draw((40, 4), stream(1, "stated errors", table))
        psi = plain_score(errors[:, draw % 4], loss)
        for j in range(30):
            s = X[:, j] * psi
            v = math.sqrt((psi**2).mean() if rule == "plug-in" else (s**2).mean())
            expected[j, draw] = abs(s.sum()) / math.sqrt(40) / v
            loadings.append((table, v))
    ratios = np.zeros((30, 12))
    ratios[found.found.column, found.found.draw] = found.found.ratio
    np.testing.assert_allclose(ratios, expected, rtol=1e-9, atol=1e-12)
    assert (found.found.columns, found.found.draws) == (30, 12)
    # Typical loading: the median over tables, equally large, of the table's median.
    medians = [np.median([v for k, v in loadings if k == table]) for table in range(3)]
    assert found.loadings.shape == (1,)
    assert found.loadings[0] == pytest.approx(sorted(medians)[1], rel=1e-9)
    assert (found.row_squares is None) == (loss in ("squared", "square-root"))
    if loss == "absolute":  # of 40 signs, 20 each: their mean square is 1
        assert found.row_squares[0] == pytest.approx(1.0, rel=1e-12)


def test_a_table_in_blocks_is_one_table(monkeypatch):
    monkeypatch.setattr(module, "BLOCK_CELLS", 40 * 11)
    assert pieces_of(SOURCE, 40, 30) == [(0, 11), (11, 22), (22, 30)]
    found = scores(tables=Tables(cells=1, fewest=2))[0].found
    ratios = np.zeros((30, 12))
    ratios[found.column, found.draw] = found.ratio
    for table in range(2):
        blocks = [(0, 11), (11, 11), (22, 8)]
        X = np.hstack([plain_table(width, 40, table, a) for a, width in blocks])
        np.testing.assert_allclose(
            X, table_of(SOURCE, rows=40, columns=30, seed=1, table=table), rtol=1e-10, atol=1e-12
        )
        e = T3.draw((40, 6), stream(1, "stated errors", table))
        e = e - e.mean(axis=0)
        expected = np.abs(X.T @ e) / np.sqrt(40 * (e**2).mean(axis=0))
        np.testing.assert_allclose(ratios[:, 6 * table : 6 * table + 6], expected, rtol=1e-9)


def test_neither_blocks_nor_shared_tables_change_the_law(monkeypatch):
    given = {"rows": 60, "columns": 100, "draws": 800}
    fresh = scores(**given)[0].found
    monkeypatch.setattr(module, "BLOCK_CELLS", 60 * 23)
    blocked = scores(**given, seed=2)[0].found
    shared = scores(**given, seed=3, tables=Tables(cells=1, fewest=200))[0].found
    largest = []
    for found in (fresh, blocked, shared):
        top = np.zeros(800)
        np.maximum.at(top, found.draw, found.ratio)
        largest.append(top)
    for other in largest[1:]:
        assert ks_2samp(largest[0], other).pvalue > 0.001
    # Negative control: normal columns are told apart.
    calm = scores(StatedColumns(law=normal_law(1.0)), **given)[0].found
    top = np.zeros(800)
    np.maximum.at(top, calm.draw, calm.ratio)
    assert ks_2samp(largest[0], top).pvalue < 1e-6


def test_a_streamed_run_with_a_floor_is_the_small_one_above_it(monkeypatch):
    """The way a million columns go, on a few thousand: blocks, one table, only large ratios."""
    given = {"rows": 50, "columns": 3000, "draws": 40, "tables": Tables(cells=1, fewest=1)}
    monkeypatch.setattr(module, "BLOCK_CELLS", 50 * 256)
    level = float(penalty_level(1, 0.05))
    whole, streamed = (scores(**given, floor=f)[0].found for f in (0.0, level))
    kept = whole.ratio > level
    assert 0.01 < kept.mean() < 0.1
    for name in ("draw", "column", "ratio"):
        np.testing.assert_array_equal(getattr(streamed, name), getattr(whole, name)[kept])
    for p in (1, 30, 3000):
        at = float(penalty_level(p, 0.05))
        assert risk_at(streamed, p, at) == risk_at(whole, p, at)
    assert largest_quantile(streamed, 3000, 0.95) == largest_quantile(whole, 3000, 0.95)


def test_the_same_columns_and_streams_meet_every_law():
    one, two = scores(laws=(T3, normal_law(1.0)))
    alone = scores(laws=(normal_law(1.0),))[0]
    np.testing.assert_allclose(two.found.ratio, alone.found.ratio, rtol=1e-12)
    assert two.typical_sd == alone.typical_sd
    assert not np.allclose(one.found.ratio, two.found.ratio)


def test_workers_do_not_matter():
    given = {"rows": 100, "columns": 400, "draws": 200, "laws": (T3, normal_law(1.0))}
    one = scores(**given, floor=2.0)
    with worker_pool(2) as mapper:
        two = scores(**given, floor=2.0, mapper=mapper)
    for a, b in zip(one, two, strict=True):
        np.testing.assert_array_equal(a.found.ratio, b.found.ratio)
        assert (a.loadings, a.typical_sd) == (b.loadings, b.typical_sd)


def test_typical_sizes_and_slopes_by_loss():
    given = {"rows": 400, "columns": 5, "draws": 400, "laws": (normal_law(2.0),)}
    squared, huber, absolute = (
        scores(**given, loss=loss)[0] for loss in ("squared", "huber", "absolute")
    )
    assert squared.typical_sd == pytest.approx(2.0, rel=0.01)
    assert squared.slope == 1.0
    # Within 1.345 sd lie 82.1 % of normal errors; the density at 0 is .3989 / 2, twice that .3989.
    assert huber.slope == pytest.approx(0.8214, abs=0.01)
    assert absolute.slope == pytest.approx(0.3989, rel=0.02)
    # Huber: E min(z^2, 1.345^2) = .7102 (integrated), times 2^2.
    assert huber.row_squares[0] == pytest.approx(4 * 0.7102, rel=0.02)


def test_how_many_tables_the_draws_share():
    assert len(tables_of(50, 1000, 400)) == 200  # 320 are affordable: pairs
    assert tables_of(50, 100, 400)[0] == (0, 1)
    assert len(tables_of(500, 1000, 400)) == 31  # 32 are: thirteen draws each
    assert len(tables_of(1000, 5000, 400)) == 8
    assert tables_of(10**6, 10**6, 50, Tables(fewest=1)) == [(0, 50)]
    assert len(tables_of(30, 2, 400, Tables(cells=10**9, fewest=1, most=6))) == 6
    for rows, columns, draws in ((40, 30, 77), (900, 4000, 401), (30, 1, 50)):
        parts = tables_of(rows, columns, draws)
        assert [a for a, _ in parts[1:]] == [b for _, b in parts[:-1]]
        assert (parts[0][0], parts[-1][1]) == (0, draws)


def test_many_independent_columns_stand_for_several_tables():
    assert tables_for(SOURCE, MANY_COLUMNS).fewest == 1
    assert tables_for(SOURCE, MANY_COLUMNS // 3).fewest == 4
    assert tables_for(SOURCE, 10).fewest == 8
    assert tables_for(StatedColumns(law=T3, correlation=0.2), 10**6).fewest == 8


def test_correlated_columns_share_a_factor():
    normal = normal_law(1.0)
    X = table_of(
        StatedColumns(law=normal, correlation=0.36), rows=4000, columns=60, seed=1, table=0
    )
    pairs = np.corrcoef(X.T)[np.triu_indices(60, 1)]
    assert pairs.mean() == pytest.approx(0.36, abs=0.03)
    independent = table_of(StatedColumns(law=normal), rows=4000, columns=60, seed=1, table=0)
    assert np.corrcoef(independent.T)[np.triu_indices(60, 1)].mean() == pytest.approx(0, abs=0.01)


def test_volatile_columns_and_errors_run_along_the_rows():
    law = parse_law("normal:alpha=0.3,beta=0.6")
    X = table_of(StatedColumns(law=law), rows=3000, columns=8, seed=1, table=0)
    for values in (X, StatedColumns(law=law).errors(law, 3000, 8, 1, 0)):
        square = values**2
        lagged = [np.corrcoef(column[1:], column[:-1])[0, 1] for column in square.T]
        assert np.mean(lagged) > 0.15  # of independent values below .05


def test_a_column_that_does_not_vary_scores_nothing():
    class Constant(StatedColumns):
        def columns(self, rows, start, stop, seed, table):
            drawn = StatedColumns.columns(self, rows, start, stop, seed, table)
            drawn[3] = 7.25
            return drawn

    for rule in ("plug-in", "self-normalised"):
        found = scores(Constant(law=T3), rule=rule)[0].found
        assert 3 not in set(found.column.tolist())
        assert len(set(found.column.tolist())) == 29
    assert np.isfinite(table_of(Constant(law=T3), rows=40, columns=5, seed=1, table=0)).all()


def test_the_twin_has_the_laws_variance():
    assert twin_of(student_law(4, sd=1.7)).sd == pytest.approx(1.7)
    assert twin_of(T3).family == "normal"
    assert twin_of(student_law(1.5)).sd == 1.0


@pytest.mark.parametrize(
    ("values", "weights", "expected"),
    [([3, 1, 2], [1, 1, 1], 2), ([3, 1, 2], [9, 1, 1], 3), ([5, 4], [1, 1], 4), ([1], [3], 1)],
)
def test_weighted_median_by_hand(values, weights, expected):
    assert weighted_median([float(v) for v in values], np.array(weights)) == expected
