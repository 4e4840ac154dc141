"""Units on a real dask cluster of two worker processes on this machine: the same results."""

from __future__ import annotations

import math
import os
import signal
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scantling.core.streams import Work, stream, worker_pool
from scantling.errors import InputError, NotAvailableError, ResourceError

distributed = pytest.importorskip("distributed", reason="needs the cluster extra")
pytestmark = pytest.mark.filterwarnings("default")  # dask's own warnings are not ours to judge


@pytest.fixture
def cluster() -> Iterator[Any]:
    """Two worker processes of one thread each."""
    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None,
            host="127.0.0.1",
        ) as found,
    ):  # fmt: skip
        yield found


def products(folder: Path | None = None) -> Callable[[int], tuple[np.ndarray, float, int]]:
    """A unit of matrix products on a table of over a megabyte; says in a file that it began."""
    X = np.random.default_rng(4).standard_normal((300, 500))

    def unit(number: int) -> tuple[np.ndarray, float, int]:
        if folder is not None:
            (folder / f"{os.getpid()}").touch()
        rng = stream(1, "cluster test", number)
        total = sum(X.T @ rng.standard_normal((300, 40)) for _ in range(20 + number % 3))
        return total.sum(axis=0), math.fsum(total.ravel()), os.getpid()

    return unit


def same(found: list[Any], wanted: list[Any]) -> bool:
    """Whether the numbers agree to the last bit."""
    return all(
        np.array_equal(one[0], other[0]) and one[1] == other[1]
        for one, other in zip(found, wanted, strict=True)
    )


def test_one_worker_two_processes_and_a_cluster_agree_to_the_last_bit(cluster: Any) -> None:
    unit = products()
    with worker_pool(1) as mapper:
        alone = mapper(unit, range(60))
    with worker_pool(2) as mapper:
        pair = mapper(unit, range(60))
        pair_again = mapper(unit, range(60))
    with worker_pool(Work(cluster=cluster.scheduler_address)) as mapper:
        far = mapper(unit, range(60))
        # A second call, with another function, through the same connection.
        assert mapper(lambda k: k**2, range(5)) == [0, 1, 4, 9, 16]
    assert same(pair, alone) and same(pair_again, alone) and same(far, alone)
    assert {one[2] for one in alone} == {os.getpid()}
    pids = {worker["pid"] for worker in cluster_pids(cluster)}
    assert {one[2] for one in far} == pids


def cluster_pids(cluster: Any) -> list[dict[str, int]]:
    """Process of each worker."""
    with distributed.Client(cluster.scheduler_address, set_as_default=False) as client:
        return [{"pid": pid} for pid in client.run(os.getpid).values()]


def test_a_worker_killed_mid_run_changes_nothing(cluster: Any, tmp_path: Path) -> None:
    unit = products(tmp_path)
    with worker_pool(1) as mapper:
        wanted = mapper(products(), range(150))
    killed: list[int] = []

    def watch(done: int, units: int) -> None:
        # The first worker that has begun is killed when a fifth of the units are back.
        if done > units // 5 and not killed:
            killed.append(int(next(tmp_path.iterdir()).name))
            os.kill(killed[0], signal.SIGKILL)

    with worker_pool(Work(cluster=cluster.scheduler_address, watch=watch)) as mapper:
        found = mapper(unit, range(150))
    assert killed and same(found, wanted)
    # Others took over what it had not finished.
    assert sum(one[2] != killed[0] for one in found) > 30


def test_a_fault_in_a_unit_comes_back_as_it_is(cluster: Any) -> None:
    def unit(number: int) -> int:
        if number == 7:
            raise InputError("column 7: no")
        return number

    with (
        worker_pool(Work(cluster=cluster.scheduler_address)) as mapper,
        pytest.raises(InputError, match=r"^column 7: no$"),
    ):
        mapper(unit, range(10))


def test_an_address_where_nothing_answers_is_refused() -> None:
    with (
        pytest.raises(InputError, match=r"^--cluster tcp://127\.0\.0\.1:9: no dask scheduler"),
        worker_pool(Work(cluster="tcp://127.0.0.1:9")),
    ):
        pass
    assert not issubclass(NotAvailableError, ResourceError)
