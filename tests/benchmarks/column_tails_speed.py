"""Time the tails of many columns and their scores against a loop over scipy's Pareto fit.

    python tests/benchmarks/column_tails_speed.py --out reports/benchmarks/column_tails_speed.md

One BLAS thread. The loop fits scipy.stats.pareto to the largest 5 % of each column, which is
Hill's estimate alone; ours gives index, interval, second opinion and thin-tail test. The loop is
timed on some columns and scaled up.
"""

from __future__ import annotations

import argparse
import platform
import resource
import time
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path

import numpy as np
from scipy.stats import pareto
from threadpoolctl import threadpool_limits

from scantling.diagnostics.battery import series_group


def pareto_loop(columns: np.ndarray, count: int) -> float:
    """Seconds scipy takes for one fit a column."""
    started = time.perf_counter()
    for column in columns.T:
        top = np.sort(np.abs(column - np.median(column)))[::-1][: count + 1]
        pareto.fit(top[:count], floc=0, fscale=top[count])
    return time.perf_counter() - started


def main() -> None:
    """Measure and write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rows", type=int, default=1000)
    parser.add_argument("--columns", type=int, default=10_000)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    rng = np.random.default_rng(1)
    X = rng.standard_t(4, (options.rows, options.columns))
    errors = rng.standard_t(4, options.rows)
    some = X[:, :500]
    ours, loops = [], []
    with threadpool_limits(limits=1):
        for _ in range(options.rounds):
            started = time.perf_counter()
            series_group(X, dependent=True)
            series_group(X * errors[:, None], dependent=True)
            ours.append(time.perf_counter() - started)
            once = pareto_loop(some, options.rows // 20)
            loops.append(2 * once * options.columns / some.shape[1])
    ratios = [loop / own for loop, own in zip(loops, ours, strict=True)]
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
    lines = [
        "# Tails of many columns and their scores",
        "",
        f"Command: `python tests/benchmarks/column_tails_speed.py --rows {options.rows}"
        f" --columns {options.columns} --rounds {options.rounds} --out {options.out}`.",
        f"{datetime.now(UTC).date()}; scantling {version('scantling')}, Python"
        f" {platform.python_version()}, numpy {np.__version__}, scipy {version('scipy')}; one BLAS"
        " thread.",
        "",
        "| columns x rows | ours, s (min / median / max) | loop over scipy's Pareto fit, s | loop"
        " over ours | peak memory, GiB |",
        "|---|---|---|---|---|",
        f"| {options.columns:,} x {options.rows:,}, columns and scores;"
        " both, left and right tails, moments"
        f" | {min(ours):.1f} / {np.median(ours):.1f} / {max(ours):.1f}"
        f" | {min(loops):.1f} / {np.median(loops):.1f} / {max(loops):.1f}"
        f" | {min(ratios):.2f} / {np.median(ratios):.2f} / {max(ratios):.2f} | {peak:.2f} |",
        "",
    ]
    options.out.write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
