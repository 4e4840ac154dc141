"""The search for a limit: what is refitted, when it ends, and that it finds what the grid does."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from scantling.core.streams import serial_map, worker_pool
from scantling.design.spec import TargetSpec
from scantling.law.families import normal_law, student_law
from scantling.planning.case import Case
from scantling.planning.refits import Refits
from scantling.planning.stress import stress
from scantling.planning.stress_search import (
    CLEAR,
    SUPPORTS,
    LimitSearch,
    batch_ends,
    carry_out,
    grid_of,
    limit_of,
    limit_on_grid,
    margins,
    run_law,
)

GRID = [5, 7, 10, 14, 20, 28, 40]


def case_of(**changes):
    X = np.random.default_rng(0).standard_normal((120, 40))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    law = normal_law(1.0)
    case = Case(
        X=X, law=law, law_draws=(law,) * 50, response_sd=1.2, residual_sd=1.1,
        target=TargetSpec(relevant=4, smallest_effect=0.38), rule="plug-in", replicates=400, seed=3,
    )  # fmt: skip
    return replace(case, **changes)


@pytest.fixture
def scripted(monkeypatch):
    """Refits that select every relevant column with a chance by the number of columns."""
    calls = []

    def script(power_at):
        def batch(self, p, number, place, part):
            if part == 0:
                calls.append((p, number, place))
            size = self.parts(place)[part]
            rng = np.random.default_rng([p, number, place, part])
            table = np.zeros((size, p), dtype=bool)
            table[:, :4] = rng.random((size, 4)) < power_at(p)
            refit, column = np.nonzero(table)
            return Refits(
                columns=p, relevant=4, replicates=size, refit=refit.astype(np.int32),
                column=column.astype(np.int32), wrong=np.zeros(size, dtype=np.int32),
                loss=np.ones(size), oracle=np.ones(size),
            )  # fmt: skip

        monkeypatch.setattr(LimitSearch, "batch", batch)
        return calls

    return script


def searched(case, **options):
    search = LimitSearch(case, case.law, "fitted", GRID, **options)
    carry_out([search], serial_map)
    return search


@pytest.mark.parametrize(
    ("size", "ends"),
    [
        (400, [100, 200, 400]), (80, [20, 40, 80]), (90, [22, 44, 90]), (40, [20, 40]),
        (26, [26]), (20, [20]), (2, [2]),
    ],
)  # fmt: skip
def test_batches_by_hand(size, ends):
    assert batch_ends(size) == ends


def test_where_all_columns_meet_the_criteria_nothing_else_is_run(scripted):
    calls = scripted(lambda p: 0.99)
    search = searched(case_of())
    assert calls == [(40, number, 0) for number in range(SUPPORTS)]
    assert (search.limit(), search.runs[0].replicates) == (math.inf, 100)
    assert search.runs[0].replicates_asked == 400


@pytest.mark.parametrize(
    ("last", "visited"),
    [(28, [40, 14, 28]), (20, [40, 14, 28, 20]), (5, [40, 14, 7, 5]), (0, [40, 14, 7, 5])],
)
def test_the_place_is_halved(scripted, last, visited):
    calls = scripted(lambda p: 0.999 if p <= last else 0.3)
    search = searched(case_of(), band=False)
    assert list(dict.fromkeys(p for p, _, _ in calls)) == visited
    assert [run.columns for run in search.runs] == sorted(visited)
    above = GRID[GRID.index(last) + 1] if last else 5
    assert (last <= search.limit() < above) if last else search.limit() == 0


def test_a_run_near_the_bar_goes_on_to_the_end_and_a_clear_one_does_not(scripted):
    calls = scripted(lambda p: 0.80)
    run = searched(case_of(), band=False).runs[-1]
    assert run.replicates == 400
    assert [place for p, number, place in calls if (p, number) == (40, 0)] == [0, 1, 2]
    clear = scripted(lambda p: 0.5)
    clear.clear()
    case = case_of()
    run = searched(case, band=False).runs[-1]
    assert run.replicates == 100
    off = np.abs(margins(case, run))
    assert (off > CLEAR * np.array([run.stability.error, run.power.error, 0])).all()


def test_without_early_stops_and_halving_everything_is_run(scripted):
    scripted(lambda p: 0.99)
    search = searched(case_of(), early=False, halving=False)
    assert [(run.columns, run.replicates) for run in search.runs] == [(p, 400) for p in GRID]


def test_the_band_is_covered_below_a_limit_that_is_in_doubt(scripted):
    # At the bar with all columns: half of the drawn limits lie below, and need fewer columns.
    scripted(lambda p: 0.865 if p > 20 else 0.999)
    doubtful = searched(case_of(target=TargetSpec(relevant=4, power=0.865, stability=0.1)))
    assert len(doubtful.runs) > 1
    found = doubtful.found()
    assert found.low > 0
    assert np.mean(np.array(found.draws) == 0) <= 0.05


def test_the_search_finds_what_the_whole_grid_shows():
    for effect in (0.3, 0.38, 0.45):
        case = case_of(target=TargetSpec(relevant=4, smallest_effect=effect))
        whole = run_law(case, case.law, "fitted", GRID, serial_map)
        limit = limit_on_grid(GRID, np.array([margins(case, run) for run in whole]))
        search = searched(case)
        low, high = search.found().low, search.found().high
        assert low <= (40 if math.isinf(limit) else limit)
        assert high is None or limit <= high
        assert sum(run.replicates for run in search.runs) < 0.75 * 400 * len(GRID)


def test_a_limit_without_its_band_is_the_same_limit():
    case = case_of()
    search = LimitSearch(case, case.law, "search", GRID, band=False)
    carry_out([search], serial_map)
    assert limit_of(case, case.law, GRID, serial_map) == search.limit()


def test_errors_are_the_same_at_every_number_of_columns():
    case = case_of()
    search = LimitSearch(case, case.law, "fitted", GRID)
    few, many = search.batch(10, 2, 0, 0), search.batch(40, 2, 0, 0)
    # Least squares on the relevant columns sees the errors alone.
    np.testing.assert_allclose(few.oracle, many.oracle, rtol=1e-12)
    assert not np.allclose(few.oracle, search.batch(10, 2, 1, 0).oracle[:1])
    assert not np.allclose(few.oracle, search.batch(10, 3, 0, 0).oracle)


def test_workers_change_nothing_and_searches_go_on_together():
    case = case_of(law=student_law(4, sd=1.0), replicates=120)
    asked = []

    def counted(function, units):
        units = list(units)
        asked.append(len(units))
        return [function(unit) for unit in units]

    one = stress(case, counted, points=4)
    assert asked[0] == 2 * SUPPORTS  # fitted law and twin at once
    with worker_pool(2) as mapper:
        assert stress(case, mapper, points=4) == one


def test_more_replicates_narrow_the_band():
    target = TargetSpec(relevant=4, smallest_effect=0.38)
    errors = [
        stress(case_of(target=target, replicates=replicates), serial_map, twins=False).runs[-1]
        for replicates in (100, 2000)
    ]
    # A quarter of the refits at the least: sd falls with their root, supports' part stays.
    assert errors[1].exact.error < errors[0].exact.error
    assert errors[0].replicates_asked == 100 < errors[1].replicates_asked == 2000


def test_grid_of_numbers_is_as_before():
    assert grid_of(40, 4) == GRID


def test_large_batches_are_carried_out_in_parts_with_errors_of_their_own():
    case = case_of(replicates=1200)
    search = LimitSearch(case, case.law, "fitted", GRID, early=False)
    assert search.parts(0) == [40] * 6
    first, second = search.batch(10, 1, 0, 0), search.batch(10, 1, 0, 1)
    assert first.replicates == second.replicates == 40
    assert not np.allclose(first.oracle, second.oracle)
    whole = run_law(case, case.law, "fitted", [10], serial_map)[0]
    assert whole.replicates == 1200
