"""Worker processes: same results, sent only when worth it, faults and lost workers in words."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable

import numpy as np
import pytest

from scantling.core.streams import MEMORY_BOUND, Work, stream, worker_pool, workers_that_fit
from scantling.core.workers import grouped
from scantling.errors import InputError, ResourceError


def slow(seconds: float) -> Callable[[int], tuple[int, float]]:
    """A unit that takes so long and says which process computed it."""
    X = np.random.default_rng(3).standard_normal((200, 700))  # above a megabyte: shared

    def unit(number: int) -> tuple[int, float]:
        time.sleep(seconds)
        rng = stream(7, "workers test", number)
        return os.getpid(), float((X.T @ rng.standard_normal((200, 5))).sum())

    return unit


@pytest.mark.parametrize(("units", "workers", "each"), [(35, 2, 0.2), (1, 8, 0.0), (200, 3, 1e-4)])
def test_tasks_hold_every_unit_once_the_last_first(units: int, workers: int, each: float) -> None:
    numbered = [(k, -k) for k in range(units)]
    tasks = grouped(numbered, workers, each)
    assert [one for task in tasks for one in task] == numbered[::-1]
    assert len(tasks) >= min(units, 4 * workers)


def test_heavy_units_go_to_other_processes_and_light_ones_stay() -> None:
    seen: list[tuple[int, int]] = []
    with worker_pool(Work(workers=2, watch=lambda *at: seen.append(at))) as mapper:
        light = mapper(slow(0.0), range(20))
        heavy = mapper(slow(0.1), range(120))
    assert {one[0] for one in light} == {os.getpid()}
    others = {one[0] for one in heavy} - {os.getpid()}
    assert len(others) == 2
    with worker_pool(1) as mapper:
        alone = mapper(slow(0.0), range(120))
    assert [one[1] for one in heavy] == [one[1] for one in alone]  # to the last bit
    # Every unit is reported once, in order of completion.
    assert seen == [(k, 20) for k in range(21)] + [(k, 120) for k in range(121)]


def test_a_fault_in_a_worker_comes_back_as_it_is() -> None:
    def unit(number: int) -> int:
        time.sleep(0.1)
        if number == 60:
            raise InputError("column 7: no")
        return number

    with worker_pool(2) as mapper, pytest.raises(InputError, match=r"^column 7: no$"):
        mapper(unit, range(120))


def test_a_killed_worker_is_one_sentence() -> None:
    here = os.getpid()

    def unit(number: int) -> int:
        time.sleep(0.1)
        if os.getpid() != here:
            os.kill(os.getpid(), signal.SIGKILL)
        return number

    with worker_pool(2) as mapper, pytest.raises(ResourceError, match="a worker process was kill"):
        mapper(unit, range(200))
    with worker_pool(2) as mapper:  # and the next pool works
        assert mapper(lambda k: k, range(5)) == [0, 1, 2, 3, 4]


def test_workers_that_would_not_fit_into_memory_are_left_out() -> None:
    assert workers_that_fit(2, 0) == 2
    assert workers_that_fit(2, 2000 * 5000 * 8) == 2
    assert workers_that_fit(8, 2000 * 5000 * 8) < 8
    assert workers_that_fit(8, MEMORY_BOUND) == 1
