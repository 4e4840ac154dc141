"""Bias, error and coverage of the tail index's default interval over known laws.

    python tests/validation/tail_intervals.py --out reports/validation/tail_intervals.md

Every replication of a law is a column, so that one call of the package's kernel estimates many.
Beside the default stand rival estimators and the interval that was the default before: the same
estimate and block error, with a bias of at most 0.06 wherever the estimate lies (Armstrong et
al. (2018), Econometrica 86). The bias tables of diagnostics/tail_interval.py were read off the
last part: mean estimates and biases over a finer grid of laws.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from known_laws import (
    LAPLACE,
    NORMAL,
    KnownLaw,
    garch,
    pareto,
    skewed_student,
    stable,
    student,
)
from threadpoolctl import threadpool_limits
from write_up import preamble, share_error, table

from scantling.core.record import FloatArray
from scantling.core.streams import blocks, stream
from scantling.diagnostics.tail_estimators import (
    bias_reduced_hill,
    hill,
    rank_half_index,
    weighted_hill,
)
from scantling.diagnostics.tail_index import THIN_LEVEL, block_length, tail_counts
from scantling.diagnostics.tail_interval import (
    BIAS_HIGH,
    BIAS_LOW,
    SLOW_MIXING,
    SLOW_SHARE,
    folded_quantile,
)
from scantling.diagnostics.tail_kernel import tail_estimates

LEVEL = 0.90
FORMER_BOUND = 0.06
ROWS = (100, 250, 1000, 5000)
CLAIMED = ("t 2.5", "t 3", "t 4", "t 6", "t 10", "Pareto 3", "GARCH-n (0.15, 0.8)",
           "GARCH-t5 (0.08, 0.9)")  # fmt: skip
"""Laws the interval is meant for, from 250 rows."""
LEAST, LEAST_T10 = 0.88, 0.80
NARROWER = 0.15
LAWS = (
    student(2.5), student(3), student(4), student(6), student(10),
    pareto(2), pareto(3), pareto(3, centred=True), stable(1.7), NORMAL, LAPLACE,
    skewed_student(4, 1.2), skewed_student(4, 1.5),
    garch(0.15, 0.80), garch(0.08, 0.90, 5), garch(0.11, 0.88),
)  # fmt: skip
GRID = (
    *(student(df) for df in (2.2, 2.5, 3, 3.5, 4, 5, 6, 8, 10, 12, 15)),
    *(pareto(index) for index in (2, 3, 4, 6)),
    garch(0.10, 0.85), garch(0.15, 0.80), garch(0.10, 0.88), garch(0.05, 0.94),
    garch(0.11, 0.88), garch(0.05, 0.90, 5), garch(0.10, 0.80, 5), garch(0.05, 0.94, 5),
    garch(0.08, 0.90, 5),
)  # fmt: skip
VALUES_AT_ONCE = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """How one interval did in one cell."""

    coverage: float
    """Share of replications whose interval holds gamma."""
    width: float
    """Median width, counted from 0 where the lower end is negative."""
    width_error: float
    """Monte Carlo standard error of the median width."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Cell:
    """One law at one number of rows."""

    law: KnownLaw
    """What was drawn."""
    rows: int
    """Length of each series."""
    replications: int
    """Series drawn."""
    misses: dict[str, FloatArray]
    """Estimate less gamma, per estimator, shape (replications,)."""
    now: Interval
    """The default interval."""
    before: Interval
    """The former default."""
    finite: float
    """Share in which the thin-tail test finds a finite index."""


def chunks(
    law: KnownLaw, rows: int, replications: int, seed: int
) -> Iterator[tuple[FloatArray, FloatArray]]:
    """Magnitudes of all replications and their skew bias, some columns at a time."""
    for number, (start, stop) in enumerate(blocks(replications, VALUES_AT_ONCE // rows)):
        rng = stream(seed, f"tail intervals, {law.name}", rows, number + 1)
        yield law.with_skew(rng, rows, stop - start)


def estimates(magnitude: FloatArray, skew: FloatArray) -> dict[str, FloatArray]:
    """The default, its ends, and the rivals, each of shape (columns,)."""
    rows = magnitude.shape[0]
    counts = tail_counts(rows)
    found = tail_estimates(magnitude, counts, block=block_length(rows), level=LEVEL, skew_bias=skew)
    error = np.maximum(found.error, 1e-12)
    half = error * folded_quantile(FORMER_BOUND / error, LEVEL)
    ordered = np.sort(magnitude, axis=0)[: -(rows // 4) - 2 : -1]
    columns = np.ascontiguousarray(ordered.T)
    return {
        "default": found.gamma,
        "Hill 5 %": found.hill_gamma,
        "Hill sqrt n": hill(ordered, int(rows**0.5)),
        "rank-1/2 10 %": np.array([1 / rank_half_index(x, rows // 10) for x in columns]),
        "bias-reduced 20 %": np.array([bias_reduced_hill(x, rows // 5) for x in columns]),
        "low": found.gamma_low,
        "high": found.gamma_high,
        "former low": found.gamma - half,
        "former high": found.gamma + half,
        "p": found.p_value,
    }


ESTIMATORS = ("default", "Hill 5 %", "rank-1/2 10 %", "bias-reduced 20 %", "Hill sqrt n")


def judged(low: FloatArray, high: FloatArray, gamma: float) -> Interval:
    """Coverage and median width; the median's error from its order statistics."""
    width = np.sort(high - np.maximum(low, 0))
    spread = 0.5 / np.sqrt(width.size)
    ends = np.quantile(width, [0.5 - spread, 0.5 + spread])
    return Interval(
        coverage=float(np.mean((low <= gamma) & (gamma <= high))),
        width=float(np.median(width)),
        width_error=float(np.ptp(ends)) / 2,
    )


def cell(law: KnownLaw, rows: int, replications: int, seed: int) -> Cell:
    """Draw and estimate one cell."""
    parts = [estimates(*part) for part in chunks(law, rows, replications, seed)]
    found = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    return Cell(
        law=law,
        rows=rows,
        replications=replications,
        misses={name: found[name] - law.gamma for name in ESTIMATORS},
        now=judged(found["low"], found["high"], law.gamma),
        before=judged(found["former low"], found["former high"], law.gamma),
        finite=float(np.mean(found["p"] <= THIN_LEVEL)),
    )


def error_words(misses: FloatArray) -> str:
    """Bias and RMSE in thousandths, each with its Monte Carlo error."""
    root = np.sqrt(misses.size)
    rmse = float(np.sqrt(np.mean(misses**2)))
    of_rmse = float(np.std(misses**2)) / (2 * rmse * root)
    return (
        f"{1e3 * misses.mean():+.0f} ({1e3 * misses.std() / root:.1f})"
        f" / {1e3 * rmse:.0f} ({1e3 * of_rmse:.1f})"
    )


def share_words(share: float, replications: int) -> str:
    """A share in per cent with its Monte Carlo error."""
    return f"{100 * share:.1f} ({100 * share_error(share, replications):.1f})"


def width_words(interval: Interval) -> str:
    """A median width in thousandths with its Monte Carlo error."""
    return f"{1e3 * interval.width:.0f} ({1e3 * interval.width_error:.1f})"


def meets(found: Cell) -> bool:
    """Whether coverage reaches what is claimed."""
    return found.now.coverage >= (LEAST_T10 if found.law.name == "t 10" else LEAST)


def reading(cells: list[Cell]) -> list[str]:
    """What the tables say."""
    claimed = [c for c in cells if c.law.name in CLAIMED and c.rows >= 250]
    covered = [c for c in claimed if meets(c)]
    narrow = [c for c in claimed if c.now.width <= (1 - NARROWER) * c.before.width]
    ratio = np.median([c.now.width / c.before.width for c in claimed])

    def names(some: list[Cell]) -> str:
        words = [
            f"{c.law.name} at {c.rows} ({share_words(c.now.coverage, c.replications)})"
            for c in some
        ]
        return ", ".join(words) or "none"

    defeated = []
    for law in LAWS:
        shares = [c.now.coverage for c in cells if c.law is law]
        if np.isfinite(law.index) and min(shares) < 0.80:
            defeated.append(f"{law.name} ({', '.join(f'{100 * s:.0f}' for s in shares)})")
    wide = [c for c in claimed if c not in narrow]
    return [
        "## Reading",
        "",
        "Shares in per cent, Monte Carlo standard errors behind them.",
        "",
        f"- Laws the interval is meant for, 250 rows or more: coverage reaches {LEAST:.0%}"
        f" (t 10: {LEAST_T10:.0%}) in {len(covered)} of {len(claimed)} cells; it misses it in "
        + names([c for c in claimed if not meets(c)])
        + ".",
        f"- In {len(narrow)} of these {len(claimed)} cells the median width is at least"
        f" {NARROWER:.0%} below the former default's (median ratio of widths {ratio:.2f}); not in "
        + (
            ", ".join(
                f"{c.law.name} at {c.rows} (ratio {c.now.width / c.before.width:.2f})" for c in wide
            )
            or "none"
        )
        + ".",
        "- At 100 rows, below the bar: "
        + names([c for c in cells if c.law.name in CLAIMED and c.rows < 250 and not meets(c)])
        + ".",
        "- Laws that defeat it, with coverage below 80 % at some number of rows (per cent at n ="
        f" {', '.join(map(str, ROWS))}): "
        + "; ".join(defeated)
        + ". Stable laws look lighter in range than they are, at every n examined; near"
        " integration volatility outlives the blocks; a law without values near its median"
        " has no stable centre, and one skewed about it beyond the allowance is no longer a pure"
        " power once both halves are pooled.",
        "- Normal and Laplace have no index: coverage there is of gamma = 0, and the thin-tail test"
        " answers instead.",
        "",
    ]


def cell_tables(cells: list[Cell]) -> list[str]:
    """The tables of errors and of intervals, one of each per number of rows."""
    lines = []
    for rows in ROWS:
        some = [c for c in cells if c.rows == rows]
        lines += [f"## n = {rows} ({some[0].replications} replications)", ""]
        lines += ["Bias / RMSE of gamma, thousandths.", ""]
        lines += table(
            ["law", "gamma", *ESTIMATORS],
            (
                [c.law.name, f"{c.law.gamma:.3f}", *map(error_words, c.misses.values())]
                for c in some
            ),
        )
        lines += ["Nominal 90 % interval of gamma: coverage, per cent; median width, thousandths."]
        lines += [""]
        lines += table(
            ["law", "coverage", "width", "former coverage", "former width", "ratio of widths",
             "called finite, per cent"],
            (
                [
                    c.law.name,
                    share_words(c.now.coverage, c.replications), width_words(c.now),
                    share_words(c.before.coverage, c.replications), width_words(c.before),
                    f"{c.now.width / c.before.width:.2f}",
                    share_words(c.finite, c.replications),
                ]
                for c in some
            ),
        )  # fmt: skip
    return lines


def grid_row(law: KnownLaw, counts: dict[int, int], seed: int) -> list[str]:
    """Mean estimate and bias of one law at every number of rows, and the band there."""
    row = [law.name, f"{law.gamma:.3f}"]
    for rows, replications in counts.items():
        found = np.concatenate(
            [
                weighted_hill(np.sort(part, axis=0)[::-1], rows // 2)
                for part, _ in chunks(law, rows, replications, seed)
            ]
        )
        mean = float(found.mean())
        slow = SLOW_MIXING * np.interp(mean, *SLOW_SHARE) * (250 / rows) ** 0.25
        low = np.interp(mean, *BIAS_LOW) - slow
        high = np.interp(mean, *BIAS_HIGH)
        bias = mean - law.gamma
        error = found.std() / np.sqrt(replications)
        row.append(
            f"{mean:.3f}, {1e3 * bias:+.1f} ({1e3 * error:.1f})"
            f" in {1e3 * low:+.0f}..{1e3 * high:+.0f}"
            + ("" if low - 2 * error <= bias <= high + 2 * error else " OUTSIDE")
        )
    return row


def main() -> None:
    """Run the study and write its tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replications", type=int, default=2000)
    parser.add_argument("--replications-5000", type=int, help="at n = 5000; default: the same")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, default=Path("reports/validation/tail_intervals.md"))
    options = parser.parse_args()
    counts = dict.fromkeys(ROWS, options.replications)
    counts[5000] = options.replications_5000 or options.replications
    started = time.perf_counter()
    cells = []
    with threadpool_limits(1):
        for rows in ROWS:
            for law in LAWS:
                cells.append(cell(law, rows, counts[rows], options.seed))
                print(
                    f"{time.perf_counter() - started:5.0f} s  n {rows:5d}  {law.name:25s}"
                    f" coverage {cells[-1].now.coverage:.3f} width {cells[-1].now.width:.3f}"
                    f" former {cells[-1].before.coverage:.3f} {cells[-1].before.width:.3f}",
                    flush=True,
                )
        longer = {rows: counts[rows] for rows in ROWS if rows >= 250}
        grid = [grid_row(law, longer, options.seed) for law in GRID]
    lines = preamble("Tail index: bias, error, and coverage", time.perf_counter() - started)
    lines += [
        "Magnitudes about the sample median; of the symmetric Pareto laws about 0, but for the row"
        " that says otherwise (no values lie near 0, so their sample median is anywhere between"
        " -1 and 1). Normal and Laplace have gamma 0. Former default: the same estimate and block"
        " error, bias at most 0.06 everywhere. Widths are counted from 0 where the lower end is"
        " negative. Monte Carlo standard errors in brackets.",
        "",
    ]
    lines += reading(cells) + cell_tables(cells)
    lines += [
        "## Bias of the default over a finer grid",
        "",
        "Mean estimate, bias in thousandths (Monte Carlo standard error), and the range of biases"
        " the interval allows at that estimate, from `BIAS_LOW`, `SLOW_MIXING` and `BIAS_HIGH`,"
        " which were read off these points; OUTSIDE: by more than two errors.",
        "",
    ]
    lines += table(["law", "gamma", *(f"n = {rows}" for rows in longer)], grid)
    options.out.parent.mkdir(parents=True, exist_ok=True)
    options.out.write_text("\n".join(lines), encoding="utf-8")


if __name__ == "__main__":
    main()
