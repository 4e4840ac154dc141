"""Streams: fixed by seed, purpose and unit; blocks; order kept whatever the workers."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.core.streams import blocks, serial_map, stream, worker_pool
from scantling.errors import InputError


def test_a_stream_is_fixed_by_seed_purpose_and_unit() -> None:
    first = stream(3, "bootstrap", 7).random(4)
    assert np.array_equal(first, stream(3, "bootstrap", 7).random(4))
    for other in (
        stream(4, "bootstrap", 7), stream(3, "permutation", 7), stream(3, "bootstrap", 8),
        stream(3, "bootstrap"), stream(3, "bootstrap", 7, 1), stream(3, "bootstrap", 0, 7),
    ):  # fmt: skip
        assert not np.array_equal(first, other.random(4))


def test_a_stream_is_the_same_in_another_process() -> None:
    code = "from scantling.core.streams import stream; print(stream(1, 'x', 2).integers(10**9))"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert int(found.stdout) == stream(1, "x", 2).integers(10**9)


def test_streams_of_neighbouring_units_are_uncorrelated() -> None:
    draws = np.array([stream(1, "x", unit).standard_normal(400) for unit in range(40)])
    correlation = np.corrcoef(draws)[np.triu_indices(40, 1)]
    assert np.abs(correlation).max() < 0.25  # 5 standard errors of 780 correlations
    assert correlation.std() == pytest.approx(0.05, abs=0.006)


@pytest.mark.parametrize("seed", [-1, 1.5, "one", None])
def test_a_seed_that_is_no_whole_number_is_refused(seed: object) -> None:
    with pytest.raises(InputError, match=r"^seed: "):
        stream(seed, "x")  # type: ignore[arg-type]


def test_numpy_whole_numbers_are_seeds() -> None:
    assert stream(np.int64(5), "x").random() == stream(5, "x").random()  # type: ignore[arg-type]


@pytest.mark.parametrize(("total", "size"), [(0, 3), (1, 3), (3, 3), (10, 3), (10, 100)])
def test_blocks_cover_every_unit_once(total: int, size: int) -> None:
    found = blocks(total, size)
    assert [unit for start, stop in found for unit in range(start, stop)] == list(range(total))
    assert all(0 < stop - start <= size for start, stop in found)


@pytest.mark.parametrize("workers", [0, 1, 2, 5])
def test_workers_keep_the_order(workers: int) -> None:
    with worker_pool(workers) as mapper:
        assert mapper(lambda unit: unit**2, range(50)) == serial_map(lambda u: u**2, range(50))


def test_a_failing_unit_is_not_swallowed() -> None:
    with worker_pool(2) as mapper, pytest.raises(ZeroDivisionError):
        mapper(lambda unit: 1 / unit, [1, 0])


def test_read_only_arrays_refuse_writing_and_leave_the_original_alone() -> None:
    original = np.arange(3.0)
    frozen = read_only(original)
    with pytest.raises(ValueError, match="read-only"):
        frozen[0] = 1.0
    original[0] = 5.0  # the caller's own array stays writable, and is viewed, not copied
    assert frozen[0] == 5.0
    assert read_only([1, 2]).dtype == np.float64
