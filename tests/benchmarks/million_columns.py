"""Time and memory of the break-through stage for a million columns on paper.

A plan of 1,000 rows and 1,000,000 independent columns, 200 draws of errors under the law and
under its Gaussian twin: score ratios, risk curve with its band, noise and signal limit. Beside
it, in the same run and block by block in turn, the bare work no such run can do without: the
same draws of the same columns from the same generators in the same blocks, and their products
with both laws' errors, stacked. Processor time is compared, since the machine may be shared;
wall time is given too. One BLAS thread. Each law runs in a process of its own, whose peak
resident memory is the system's figure.

    python tests/benchmarks/million_columns.py --out reports/benchmarks/million_columns.md
"""

from __future__ import annotations

import argparse
import json
import math
import platform
import resource
import shlex
import subprocess
import sys
import time
from collections.abc import Callable, Iterable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import scipy
from threadpoolctl import threadpool_limits

import scantling
from scantling.planning.generative import twin_of
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import Plan, plan_noise, plan_scores, plan_signal_limit

BAR, MEMORY_BAR = 1.5, 2 * 1024**3


def plan_of(law: str, args: argparse.Namespace) -> Plan:
    """Columns and errors of one law."""
    return stated_plan(
        rows=args.rows, columns=args.columns, law=law, column_law=None, correlation=0.0,
        rule="plug-in", loss="squared", explained=None, replicates=args.draws, seed=args.seed,
        target=target_of(
            relevant=10, smallest_effect=0.15, risk=0.05, power=0.8, stability=0.75,
            false_share=0.2,
        ),
    )  # fmt: skip


class Clock:
    """Processor and wall seconds of what runs inside it, summed."""

    def __init__(self) -> None:
        """Nothing yet."""
        self.cpu = self.wall = 0.0

    def __enter__(self) -> Clock:
        """Start."""
        self._cpu, self._wall = time.process_time(), time.perf_counter()
        return self

    def __exit__(self, *fault: object) -> None:
        """Add."""
        self.cpu += time.process_time() - self._cpu
        self.wall += time.perf_counter() - self._wall


def measure(law: str, args: argparse.Namespace) -> dict[str, Any]:
    """One law: seconds of the stage and of the bare work, memory, and what was found."""
    plan = plan_of(law, args)
    source = plan.source
    bare, whole = Clock(), Clock()
    started = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    before = Clock()
    with before:
        errors = np.hstack(
            [source.errors(each, plan.rows, args.draws, plan.seed, 0)
             for each in (plan.law, twin_of(plan.law))]
        )  # fmt: skip
    bare.cpu, bare.wall = before.cpu, before.wall
    blocks: list[int] = []

    def in_turn(function: Callable[[Any], Any], chunks: Iterable[Any]) -> list[Any]:
        """The mapper: each unit of the stage, then the bare work of its blocks."""
        done = []
        for chunk in chunks:
            done.append(function(chunk))
            with bare:
                for table, start, stop in chunk:
                    blocks.append(stop - start)
                    source.columns(plan.rows, start, stop, plan.seed, table) @ errors
        return done

    with whole:
        fitted, twin = plan_scores(plan, in_turn, draws=args.draws)
        limit, curve = plan_noise(plan, fitted.found)
        signal = plan_signal_limit(plan, fitted)
    if sum(blocks) != args.columns:
        raise SystemExit("the blocks do not add up to the columns: several tables were drawn")
    cpu, wall = whole.cpu - (bare.cpu - before.cpu), whole.wall - (bare.wall - before.wall)
    return {
        "law": law,
        "blocks": len(blocks),
        "block": max(blocks),
        "cpu": cpu,
        "wall": wall,
        "bare_cpu": bare.cpu,
        "bare_wall": bare.wall,
        "before": started * 1024,
        "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024,
        "kept": int(fitted.found.ratio.size + twin.found.ratio.size),
        "noise": f"{limit.columns:,}" if limit.reached else "none",
        "signal": "all" if math.isinf(signal) else f"{signal:,.0f}",
        "risk": curve[-1].risk,
    }


def report(rows: list[dict[str, Any]], args: argparse.Namespace) -> str:
    """The page, in markdown."""
    lines = [
        "# A million columns on paper",
        "",
        f"Command: `python {shlex.join(sys.argv)}`.",
        f"{datetime.now(UTC):%Y-%m-%d}; scantling {scantling.__version__}, Python"
        f" {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__},"
        f" {platform.system()} {platform.machine()}.",
        "",
        f"{args.rows:,} rows, {args.columns:,} independent columns of the errors' law,"
        f" {args.draws} draws under the law and under its Gaussian twin; {rows[0]['blocks']:,}"
        f" blocks of {rows[0]['block']:,} columns. The stage: score ratios, risk curve with its"
        " band, noise and signal limit. Bare work: the same draws of columns and errors, from the"
        " same generators, and the products of each block with both laws' errors, stacked; done"
        " in turn with the stage, block by block. One BLAS thread.",
        "",
        "| law | stage, CPU s | bare, CPU s | ratio | wall s, stage / bare | peak memory, MiB |"
        " before it | ratios kept | noise limit | risk at all columns | signal limit |",
        "|" + "---|" * 11,
    ]
    for row in rows:
        ratio = row["cpu"] / row["bare_cpu"]
        lines.append(
            f"| {row['law']} | {row['cpu']:.1f} | {row['bare_cpu']:.1f} | {ratio:.2f} |"
            f" {row['wall']:.0f} / {row['bare_wall']:.0f} | {row['peak'] / 2**20:,.0f} |"
            f" {row['before'] / 2**20:,.0f} | {row['kept']:,} | {row['noise']} |"
            f" {row['risk']:.4f} | {row['signal']} |"
        )
    worst = max(row["cpu"] / row["bare_cpu"] for row in rows)
    peak = max(row["peak"] for row in rows)
    lines += [
        "",
        f"Time: at most {worst:.2f} times the bare work; bar {BAR}:"
        f" {'met' if worst <= BAR else 'NOT MET'}.",
        f"Memory: at most {peak / 2**30:.2f} GiB; bar {MEMORY_BAR / 2**30:.0f} GiB:"
        f" {'met' if peak <= MEMORY_BAR else 'NOT MET'}.",
        "",
    ]
    return "\n".join(lines)


def main() -> None:
    """Measure each law in its own process, print and, if asked, write the page."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--rows", type=int, default=1000)
    parser.add_argument("--columns", type=int, default=1_000_000)
    parser.add_argument("--draws", type=int, default=200)
    parser.add_argument("--laws", nargs="+", default=["student-t:df=4", "normal"])
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", help="measure this law in this process and print JSON")
    parser.add_argument("--out", type=Path, help="file to write the page to")
    args = parser.parse_args()
    if args.only:
        with threadpool_limits(limits=1):
            print(json.dumps(measure(args.only, args)))
        return
    rows = []
    for law in args.laws:
        command = [sys.executable, __file__, "--only", law]
        for name in ("rows", "columns", "draws", "seed"):
            command += [f"--{name}", str(getattr(args, name))]
        rows.append(json.loads(subprocess.run(command, check=True, capture_output=True).stdout))
    page = report(rows, args)
    print(page)
    if args.out is not None:
        args.out.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
