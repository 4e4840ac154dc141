"""One seed, split into named streams; block sizes that never depend on workers.

Every unit of work (a block of replicates, a permutation test, a bootstrap)
gets its own SeedSequence, derived from the design's seed, the name of the
purpose and the number of the unit. Results therefore do not depend on how
many workers there are, on the order of work or on interruption.
"""

from __future__ import annotations

import operator
import time
import zlib
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np

from scantling.core.journal import Journal
from scantling.core.workers import Cluster, Here, Processes
from scantling.errors import InputError

MEMORY_BOUND = 2 * 1024**3
"""Bytes a run may hold; what would exceed it is refused or streamed."""

WORKER_BYTES = 200 * 1024**2
"""Bytes a worker process takes for itself: interpreter and libraries."""
WORKER_TABLES = 5
"""Tables of the size of X that a unit holds at its peak: columns taken, their products, draws."""
Mapper = Callable[[Callable[[Any], Any], Iterable[Any]], list[Any]]
"""Anything that applies a function to every unit and keeps their order."""


def stream(seed: int, purpose: str, *units: int) -> np.random.Generator:
    """Return the generator of one unit of work.

    The key is (seed, crc32 of the purpose, unit numbers); crc32 is used because,
    unlike Python's hash, it is the same in every process. A purpose is used with one number of
    units throughout, because a last unit 0 is the same as none.

    Raises
    ------
    InputError
        If the seed is not a whole number, 0 or more.
    """
    try:
        start = operator.index(seed)
    except TypeError as fault:
        raise InputError(f"seed: a whole number is needed; found {seed!r}") from fault
    if start < 0:
        raise InputError(f"seed: 0 or more is needed; found {seed}")
    key = [start, zlib.crc32(purpose.encode()), *[int(unit) for unit in units]]
    return np.random.default_rng(np.random.SeedSequence(key))


def blocks(total: int, size: int) -> list[tuple[int, int]]:
    """Return (start, stop) of consecutive blocks of at most `size` units."""
    return [(start, min(start + size, total)) for start in range(0, total, size)]


def serial_map(function: Callable[[Any], Any], units: Iterable[Any]) -> list[Any]:
    """Apply `function` to every unit, in order, in this thread."""
    return [function(unit) for unit in units]


@dataclass(frozen=True, slots=True, kw_only=True)
class Work:
    """How units are to be carried out; nothing in it changes a result."""

    workers: int = 1
    """Processes on this machine."""
    cluster: str | None = None
    """Address of a dask scheduler that takes the place of `workers`."""
    journal: Journal | None = None
    """Where finished units are kept and found again."""
    watch: Callable[[int, int], None] | None = None
    """Called with the units done and all units of a mapper call, as it goes on."""


@contextmanager
def worker_pool(work: int | Work, table: int = 0) -> Iterator[Mapper]:
    """Yield a mapper over worker processes, with one BLAS thread in each.

    One BLAS thread per kernel keeps sums in the same order whatever the number of workers.

    Parameters
    ----------
    work : int or Work
        The number of workers, or everything about them.
    table : int
        Bytes of the largest table the units work on; workers are left out that would not fit
        into the memory bound.

    Raises
    ------
    InputError
        If a cluster is asked for that is not there.
    """
    from threadpoolctl import threadpool_limits

    asked = work if isinstance(work, Work) else Work(workers=work)
    with threadpool_limits(limits=1):
        pool: Here | Processes | Cluster
        if asked.cluster is not None:
            pool = Cluster(asked.cluster)
        elif workers_that_fit(asked.workers, table) > 1:
            pool = Processes(workers_that_fit(asked.workers, table))
        else:
            pool = Here()
        try:
            yield _Mapping(pool, asked)
        except BaseException:
            pool.close(stopped=True)
            raise
        pool.close(stopped=False)


def workers_that_fit(workers: int, table: int) -> int:
    """How many of the workers the memory bound allows beside this process; at least 1."""
    one = WORKER_BYTES + WORKER_TABLES * table
    return max(1, min(workers, (MEMORY_BOUND - one) // one))


class _Mapping:
    """The mapper: journal first, then the pool; results in the order of the units."""

    __slots__ = ("_pool", "_work")

    def __init__(self, pool: Here | Processes | Cluster, work: Work) -> None:
        self._pool, self._work = pool, work

    def __call__(self, function: Callable[[Any], Any], units: Iterable[Any]) -> list[Any]:
        """Apply `function` to every unit and keep their order."""
        every = list(units)
        journal, watch = self._work.journal, self._work.watch
        name = f"{function.__module__}.{function.__qualname__}"
        call = journal.begin() if journal is not None else 0
        done = journal.find(call, name, len(every)) if journal is not None else {}
        left = [(number, unit) for number, unit in enumerate(every) if number not in done]
        if watch is not None:
            watch(len(done), len(every))
        for number, result in self._pool.run(function, left):
            done[number] = result
            if journal is not None:
                journal.keep(call, name, len(every), number, result, time.monotonic())
            if watch is not None:
                watch(len(done), len(every))
        return [done[number] for number in range(len(every))]
