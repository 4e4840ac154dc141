"""Time the stress runs on one and on several workers, and compare their results.

    python tests/benchmarks/workers.py --out reports/benchmarks/workers.md

Independent t(4) columns and errors. Rounds alternate between one worker and several; processes
are started before the clock, as they are once in a run. Beside the wall clock stands the CPU
time: of one worker, over that of this process and the busiest worker process together. On a
machine that does nothing else the two ratios agree; on a busy one only the second means much.
"""

from __future__ import annotations

import argparse
import os
import platform
import time
from collections.abc import Callable, Iterable
from contextlib import AbstractContextManager
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np

from scantling.core.journal import Journal
from scantling.core.streams import Mapper, Work, stream, worker_pool
from scantling.design.spec import TargetSpec
from scantling.law.notation import parse_law
from scantling.planning.case import Case, draw_laws
from scantling.planning.stress import Stress, stress
from scantling.simulation.rules import RULES


def make_case(rows: int, columns: int, replicates: int, rule: str) -> Case:
    """A stated design as the simulations see it."""
    X = stream(1, "benchmark").standard_t(4, (rows, columns))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    law = parse_law("student-t:df=4")
    return Case(
        X=X, law=law, law_draws=draw_laws(law, 1), response_sd=1.2, residual_sd=1.0,
        target=TargetSpec(relevant=10, smallest_effect=0.2), rule=rule, replicates=replicates,
        seed=1, time_ordered=True,
    )  # fmt: skip


class Counted:
    """A mapper that adds up the CPU time of units by process."""

    def __init__(self, mapper: Mapper) -> None:
        """Count from nothing."""
        self.mapper = mapper
        self.elsewhere: dict[int, float] = {}
        self.units = 0

    def __call__(self, function: Callable[[Any], Any], units: Iterable[Any]) -> list[Any]:
        """Apply and count."""
        here = os.getpid()

        def one(unit: Any) -> tuple[Any, int, float]:
            started = time.process_time()
            result = function(unit)
            return result, os.getpid(), time.process_time() - started

        one.__qualname__ = function.__qualname__
        done = self.mapper(one, units)
        self.units += len(done)
        for _, pid, seconds in done:
            if pid != here:
                self.elsewhere[pid] = self.elsewhere.get(pid, 0.0) + seconds
        return [result for result, _, _ in done]


def warm(mapper: Mapper) -> None:
    """Have the processes started."""

    def unit(number: int) -> int:
        time.sleep(0.05)
        return number

    # A call worth starting processes for, and others until they are up.
    for count in (100, 20, 20):
        mapper(unit, range(count))


def timed(case: Case, pool: AbstractContextManager[Mapper]) -> tuple[float, float, int, Stress]:
    """Wall-clock seconds, CPU seconds on the longest path, units, and the result."""
    with pool as mapper:
        warm(mapper)
        counted = Counted(mapper)
        wall, cpu = time.perf_counter(), time.process_time()
        found = stress(case, counted)
        cpu = time.process_time() - cpu + max(counted.elsewhere.values(), default=0.0)
        return time.perf_counter() - wall, cpu, counted.units, found


def main() -> None:
    """Measure and write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rows", type=int, default=500)
    parser.add_argument("--columns", type=int, default=1000)
    parser.add_argument("--replicates", type=int, default=400)
    parser.add_argument("--rule", choices=RULES, default="cross-validated")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    case = make_case(options.rows, options.columns, options.replicates, options.rule)
    alone, several, kept = [], [], []
    with TemporaryDirectory() as folder:
        for place in range(options.rounds):
            alone.append(timed(case, worker_pool(1)))
            several.append(timed(case, worker_pool(options.workers, case.X.nbytes)))
            with Journal(Path(folder) / str(place)) as journal:
                kept.append(timed(case, worker_pool(Work(journal=journal))))
    same = all(each[3] == alone[0][3] for each in [*alone, *several, *kept])
    load = os.getloadavg()[0]

    def row(name: str, runs: list[tuple[float, float, int, Stress]]) -> str:
        cells = [name]
        for column in (0, 1):
            seconds = np.array([run[column] for run in runs])
            ratio = np.array([one[column] for one in alone]) / seconds
            cells.append(" / ".join(f"{f(seconds):.2f}" for f in (np.min, np.median, np.max)))
            cells.append(" / ".join(f"{f(ratio):.2f}" for f in (np.min, np.median, np.max)))
        return f"| {' | '.join(cells)} |"

    lines = [
        "# Stress runs on several workers",
        "",
        f"Command: `python tests/benchmarks/workers.py --rows {options.rows}"
        f" --columns {options.columns} --replicates {options.replicates}"
        f" --rule {options.rule} --workers {options.workers} --rounds {options.rounds}"
        f" --out {options.out}`.",
        f"{datetime.now(UTC).date()}; scantling {version('scantling')}, Python"
        f" {platform.python_version()}, numpy {np.__version__}, joblib {version('joblib')};"
        f" {os.cpu_count()} cores, load average {load:.1f} at the end (what runs beside it is in"
        " it); one BLAS thread a process.",
        "",
        f"{alone[0][2]} units. min / median / max of {options.rounds} rounds.",
        "",
        "| run | wall, s | one worker over it | CPU of the longest path, s | one worker over it |",
        "|---|---|---|---|---|",
        row("1 worker", alone),
        row(f"{options.workers} workers", several),
        row("1 worker, with journal", kept),
        "",
        f"Results identical in all runs: {'yes' if same else 'NO'}.",
        "",
    ]
    options.out.write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
