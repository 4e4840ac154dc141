"""One seed, split into named streams; block sizes that never depend on workers.

Every unit of work (a block of replicates, a permutation test, a bootstrap)
gets its own SeedSequence, derived from the design's seed, the name of the
purpose and the number of the unit. Results therefore do not depend on how
many workers there are, on the order of work or on interruption.
"""

from __future__ import annotations

import operator
import zlib
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from typing import Any, TypeVar

import numpy as np

from scantling.errors import InputError

MEMORY_BOUND = 2 * 1024**3
"""Bytes a run may hold; what would exceed it is refused or streamed."""

Unit = TypeVar("Unit")
Result = TypeVar("Result")
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


@contextmanager
def worker_pool(workers: int) -> Iterator[Mapper]:
    """Yield a mapper over `workers` threads, with one BLAS thread in each.

    One BLAS thread per kernel keeps sums in the same order whatever the
    number of workers; the kernels spend their time in numpy, which releases
    the interpreter lock.
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        if workers <= 1:
            yield serial_map
            return
        with ThreadPoolExecutor(max_workers=workers) as pool:
            yield lambda function, units: list(pool.map(function, units))
