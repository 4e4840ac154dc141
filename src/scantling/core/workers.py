"""Units of work in processes, on this machine or a cluster; results never depend on where.

A thread would not do: units are many small numpy calls, and the interpreter lock leaves two
threads hardly faster than one. Starting processes takes about a second, so they are started
where enough is left to do, and this process goes on computing until they are up; units too
light to be worth sending stay here.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib import import_module
from typing import Any

from scantling.errors import InputError, NotAvailableError, ResourceError

FIRST_LOOK = 0.25
"""Seconds of units before which processes are never started."""
WORTH_STARTING = 4.0
"""Seconds the units left in a call must be expected to take for processes to be started: that
costs each of them about a second of work."""
LONG_RUN = 10.0
"""Seconds of units after which they are started whatever is left in the call: more will come."""
WORTH_SENDING = 0.05
"""Seconds the units left in a call must be expected to take for them to be sent."""
TASK = 0.08
"""Seconds of units that are sent together."""
IDLE = 60
"""Seconds after which idle processes leave."""
LOOK = 0.5
"""Seconds between a worker's looks at whether its parent is still there."""
ATTEMPTS = 3
"""How often units are sent when workers of a cluster are lost."""

Numbered = list[tuple[int, Any]]
"""Units, or their results, with their numbers."""


class Shipped:
    """A function on its way to the workers; counts as large, so that a cluster gets it once."""

    __slots__ = ("__weakref__", "function", "sender")

    def __init__(self, function: Callable[[Any], Any]) -> None:
        """Hold the function."""
        self.function = function
        self.sender = os.getpid()

    def __sizeof__(self) -> int:
        """What a cluster takes for its size."""
        return 1 << 20


class Here:
    """Computes every unit in this thread."""

    __slots__ = ()

    def run(self, function: Callable[[Any], Any], units: Numbered) -> Iterator[tuple[int, Any]]:
        """Yield (number, result), in order."""
        for number, unit in units:
            yield number, function(unit)

    def close(self, *, stopped: bool) -> None:
        """Nothing to end."""


class Processes:
    """Computes in worker processes what is worth sending to them."""

    __slots__ = ("_each", "_fault", "_spent", "_starting", "_workers")

    def __init__(self, workers: int) -> None:
        """Nothing is started yet."""
        self._workers = workers
        self._spent = 0.0
        self._each: dict[str, float] = {}
        self._starting: threading.Thread | None = None
        self._fault: BaseException | None = None

    def run(self, function: Callable[[Any], Any], units: Numbered) -> Iterator[tuple[int, Any]]:
        """Yield (number, result) as they come, in any order.

        Raises
        ------
        ResourceError
            If a worker process is killed, as happens where memory runs out.
        """
        known = self._each.get(function.__qualname__, 0.0)  # seconds a unit took last time
        if known * len(units) > WORTH_SENDING and self._ready(0.0, known * len(units)):
            yield from self._send(function, units, known)
            return
        began = time.perf_counter()
        for done, (number, unit) in enumerate(units):
            spent = time.perf_counter() - began
            if done:
                self._each[function.__qualname__] = spent / done
            left = spent / done * (len(units) - done) if done else 0.0
            if left > WORTH_SENDING and self._ready(spent, left):
                self._spent += spent
                yield from self._send(function, units[done:], spent / done)
                return
            yield number, function(unit)
        self._spent += time.perf_counter() - began

    def close(self, *, stopped: bool) -> None:
        """Leave the processes to the next pool; unused, they end by themselves.

        After a stop they are ended at once: what they compute is of no use.
        """
        if self._starting is None:
            return
        if stopped:
            from joblib.externals.loky import get_reusable_executor

            get_reusable_executor(reuse=True).shutdown(wait=False, kill_workers=True)
        else:
            self._starting.join()

    def _ready(self, spent: float, left: float) -> bool:
        """Whether the processes are up; starts them once that is worth it."""
        if self._starting is None:
            so_far = self._spent + spent
            if so_far < FIRST_LOOK or (left < WORTH_STARTING and so_far < LONG_RUN):
                return False
            names = [name for name in sys.modules if name.startswith("scantling.")]
            load = Shipped(_load)
            with deaf_children():
                loading = self._parallel([(load, [(k, names)]) for k in range(self._workers)])
            self._starting = threading.Thread(target=self._wait, args=(loading,), daemon=True)
            self._starting.start()
        return not self._starting.is_alive() and self._fault is None

    def _wait(self, loading: Iterator[Numbered]) -> None:
        """Wait until the processes have loaded what units need; runs in a thread."""
        try:
            for _ in loading:
                pass
        except BaseException as fault:
            self._fault = fault

    def _send(
        self, function: Callable[[Any], Any], units: Numbered, each: float
    ) -> Iterator[tuple[int, Any]]:
        from joblib.externals.loky.process_executor import TerminatedWorkerError

        shipped = Shipped(function)
        tasks = [(shipped, part) for part in grouped(units, self._workers, each)]
        try:
            for results in self._parallel(tasks):
                yield from results
        except TerminatedWorkerError as fault:
            raise ResourceError(
                "--workers: a worker process was killed, perhaps for want of memory;"
                " fewer workers help"
            ) from fault

    def _parallel(self, tasks: list[tuple[Shipped, Numbered]]) -> Iterator[Numbered]:
        from joblib import Parallel, delayed, parallel_config

        with parallel_config("loky", inner_max_num_threads=1, idle_worker_timeout=IDLE):
            found = Parallel(
                n_jobs=self._workers, return_as="generator_unordered", batch_size=1,
                # No more than the workers take at once: loky faults when stopped with a backlog.
                pre_dispatch="2 * n_jobs",
            )(delayed(compute)(*task) for task in tasks)  # fmt: skip
        return iter(found)


class Cluster:
    """Computes on a dask cluster; what is lost with a worker is sent again."""

    __slots__ = ("_client",)

    def __init__(self, address: str) -> None:
        """Connect.

        Raises
        ------
        NotAvailableError
            If the cluster extra is not installed.
        InputError
            If nothing answers at the address, or it has no workers.
        """
        try:
            from distributed import Client
        except ImportError as fault:
            raise NotAvailableError(
                "--cluster: needs the cluster extra (pip install 'scantling[cluster]')"
            ) from fault
        try:
            self._client = Client(address, timeout=10, set_as_default=False)
            self._client.wait_for_workers(1, timeout=10)
        except (OSError, ValueError, TimeoutError) as fault:
            raise InputError(
                f"--cluster {address}: no dask scheduler with workers answers there"
            ) from fault

    def run(self, function: Callable[[Any], Any], units: Numbered) -> Iterator[tuple[int, Any]]:
        """Yield (number, result) as they come, in any order.

        Raises
        ------
        ResourceError
            If workers are lost again and again.
        """
        left = dict(units)
        for attempt in range(ATTEMPTS):
            try:
                for results in self._parallel(function, list(left.items())):
                    for number, result in results:
                        del left[number]
                        yield number, result
                return
            except Exception as fault:
                lost = type(fault).__module__.startswith(("distributed", "concurrent", "asyncio"))
                if not lost:
                    raise
                if attempt + 1 == ATTEMPTS:
                    message = "--cluster: its workers are lost again and again"
                    raise ResourceError(message) from fault

    def close(self, *, stopped: bool) -> None:
        """Leave the cluster; it goes on."""
        self._client.close()

    def _parallel(self, function: Callable[[Any], Any], units: Numbered) -> Iterator[Numbered]:
        from joblib import Parallel, delayed, parallel_config

        shipped = Shipped(function)
        parts = grouped(units, sum(self._client.ncores().values()), 0.0)
        # On every worker beforehand: what only a killed worker held could not be had again.
        with parallel_config("dask", client=self._client, scatter=[shipped]):
            yield from Parallel(
                return_as="generator_unordered", batch_size=1, pre_dispatch="all"
            )(delayed(compute)(shipped, part) for part in parts)  # fmt: skip


def grouped(units: Numbered, workers: int, each: float) -> list[Numbered]:
    """Units in tasks of about TASK seconds, yet at least four for each worker.

    The last come first, the first of them alone: where units grow, the largest must neither begin
    when all else is done nor share a task.
    """
    alone = 2 * max(1, workers)
    backwards = units[::-1]
    rest = max(0, len(units) - alone)
    most = max(1, rest // alone)
    size = max(1, min(most, int(TASK / each) if each > 0 else most))
    return [
        *([unit] for unit in backwards[:alone]),
        *(backwards[start : start + size] for start in range(alone, len(units), size)),
    ]


def compute(shipped: Shipped, units: Numbered) -> Numbered:
    """Compute some units in a worker, with one BLAS thread."""
    from threadpoolctl import threadpool_limits

    if not _settled:
        _settled.append(threadpool_limits(limits=1))  # for the life of this process
        if os.getppid() == shipped.sender:
            if threading.current_thread() is threading.main_thread():
                signal.signal(signal.SIGINT, signal.SIG_IGN)  # of those started later
            threading.Thread(target=_leave_with, args=(shipped.sender,), daemon=True).start()
    return [(number, shipped.function(unit)) for number, unit in units]


_settled: list[Any] = []


def _leave_with(parent: int) -> None:
    """End this process soon after its parent was killed: no one is left to tell it to."""
    while os.getppid() == parent:
        time.sleep(LOOK)
    os._exit(1)


def _load(names: list[str]) -> None:
    """Import what this process has loaded; takes long enough for each worker to get one."""
    for name in names:
        import_module(name)
    time.sleep(0.05)


@contextmanager
def deaf_children() -> Iterator[None]:
    """Have processes started meanwhile never hear an interrupt: it is for this one to act on.

    Ignored signals stay ignored in what is started. (A mask would be inherited too, but loky
    takes it off.) Only the main thread can do this; an interrupt that falls into these few
    hundredths of a second has to be repeated.
    """
    before = signal.getsignal(signal.SIGINT)
    if threading.current_thread() is not threading.main_thread() or before is None:
        yield
        return
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
