"""How the noise limit grows with rows when columns and errors come from the same Student t.

For every number of degrees of freedom q and of rows n: so many batches, each with its own seed,
of `--draws` draws of errors on fresh columns of the same law. A batch's limit is the largest p
whose break-through risk stays accepted (equal loadings, risk 0.05); the slope of log limit on
log n is fitted to each batch, and given with the standard error between batches. Rows below the
range of the slope are shown beside it, because there the cap sqrt(n) on standardised columns
rules.

    python tests/validation/noise_growth.py --out reports/validation/noise_growth.md
"""

from __future__ import annotations

import argparse
import math
import time
from pathlib import Path

import numpy as np
from threadpoolctl import threadpool_limits
from write_up import preamble, table

from scantling.core.streams import serial_map
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import Plan, plan_noise, plan_scores

ROWS = (200, 500, 1000, 2000, 5000)
"""Of the slope."""
FEW_ROWS = (30, 50, 100)
"""Shown, not part of it."""
COLUMNS = {3.0: 4_000, 3.5: 12_000, 4.0: 40_000}
"""Columns drawn by degrees of freedom: a multiple of the largest limit."""
BEYOND = (5.0, 6.0, math.inf)
"""Laws for which none may be found; inf is the normal law."""
RISK = 0.05


def plan_of(df: float, rows: int, columns: int, draws: int, seed: int) -> Plan:
    """Columns and errors of one law."""
    return stated_plan(
        rows=rows, columns=columns, law="normal" if math.isinf(df) else f"student-t:df={df:g}",
        column_law=None, correlation=0.0, rule="plug-in", loss="squared", explained=None,
        replicates=draws, seed=seed,
        target=target_of(
            relevant=10, smallest_effect=0.15, risk=RISK, power=0.8, stability=0.75,
            false_share=0.2,
        ),
    )  # fmt: skip


def limit_of(df: float, rows: int, columns: int, draws: int, seed: int) -> tuple[float, float]:
    """Noise limit, inf if not reached, and the risk at all columns."""
    plan = plan_of(df, rows, columns, draws, seed)
    sample = plan_scores(plan, serial_map, draws=draws, twin=False)[0]
    limit, curve = plan_noise(plan, sample.found)
    return float(limit.columns or 0) if limit.reached else math.inf, curve[-1].risk


def slopes(limits: np.ndarray) -> np.ndarray:
    """Log-log slope of each batch: limits (batches, rows)."""
    x = np.log(ROWS) - np.log(ROWS).mean()
    return np.asarray(np.log(limits) @ x / (x @ x))


def pair(values: np.ndarray, digits: int) -> str:
    """Mean and its standard error."""
    error = values.std(ddof=1) / math.sqrt(values.size)
    return f"{values.mean():,.{digits}f} ({error:,.{digits}f})"


def report(
    limits: dict[float, np.ndarray], few: dict[float, np.ndarray], beyond: list[list[str]],
    args: argparse.Namespace, seconds: float,
) -> str:  # fmt: skip
    """The page, in markdown."""
    lines = preamble("Growth of the noise limit in rows", seconds)
    lines += [
        f"Columns and errors from the same Student t, independent; equal loadings, risk {RISK:g};"
        f" {args.batches} batches of {args.draws} draws at every number of rows. Standard errors"
        " between batches in brackets.",
        "",
    ]
    rows = []
    rising = []
    for df, found in limits.items():
        each = slopes(found)
        rising.append(each.mean())
        local = np.log(found[:, -1] / found[:, -2]) / math.log(ROWS[-1] / ROWS[-2])
        rows.append(
            [f"{df:g}", pair(each, 3), f"{df / 2 - 1:.2f}", pair(each - (df / 2 - 1), 3),
             pair(local, 2)]
        )  # fmt: skip
    lines += table(
        ["df = q", f"slope, n {ROWS[0]} to {ROWS[-1]}", "q/2 - 1", "difference",
         f"slope, n {ROWS[-2]} to {ROWS[-1]}"],
        rows,
    )  # fmt: skip
    verdict = "rises" if rising == sorted(rising) else "DOES NOT RISE"
    lines += [f"The slope {verdict} with the degrees of freedom.", ""]
    shown = [
        [f"{df:g}", *(_median(few[df][:, k]) for k in range(len(FEW_ROWS))),
         *(f"{np.median(limits[df][:, k]):,.0f}" for k in range(len(ROWS)))]
        for df in limits
    ]  # fmt: skip
    lines += ["## Noise limit, median over batches", ""]
    lines += table(["df", *(f"n = {n}" for n in (*FEW_ROWS, *ROWS))], shown)
    lines += [
        "## Why the slope is not q/2 - 1",
        "",
        "The exponent q/2 - 1 is that of a score with exactly q moments (up to powers of log p,"
        " through L(p)). Two things move it here. Columns and errors have equal indices, so the"
        " tail of their product is x^-q times a logarithm, P(|x e| > u) ~ c u^-q ln u: fewer"
        " columns at every n, the more so the larger u = L(p) sqrt(n), which takes about"
        " 1 / ln(u) off the slope. And columns and errors are divided by their own root mean"
        " square in the sample, at most sqrt(n) for a standardised value: a column that holds a"
        " huge value is scaled down by it. That tames the scores most where n is small, raises"
        " the limit there and so flattens the growth; it wears off more slowly the heavier the"
        " law, since the largest of n values is then a larger part of their mean square. In very"
        " small samples the cap sqrt(n) itself keeps scores down, and the limit falls before it"
        " rises (first columns of the table above).",
        "",
        "## Laws for which no limit may be found",
        "",
    ]
    lines += table(["law", "n", "columns", "draws", "noise limit", "risk at all columns"], beyond)
    return "\n".join(lines)


def _median(limits: np.ndarray) -> str:
    """Of limits of which some may not be reached."""
    value = float(np.median(limits))
    return f"{value:,.0f}" if math.isfinite(value) else "not reached"


def main() -> None:
    """Simulate, print and, if asked, write the page."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--batches", type=int, default=10)
    parser.add_argument("--draws", type=int, default=1500)
    parser.add_argument("--beyond-columns", type=int, default=1_000_000)
    parser.add_argument("--beyond-draws", type=int, default=200)
    parser.add_argument("--beyond-rows", type=int, nargs="+", default=[200])
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, help="file to write the page to")
    args = parser.parse_args()
    began = time.monotonic()
    limits: dict[float, np.ndarray] = {}
    few: dict[float, np.ndarray] = {}
    with threadpool_limits(limits=1):
        for df, columns in COLUMNS.items():
            found = np.array(
                [
                    [limit_of(df, n, columns, args.draws, args.seed + 1000 * batch)[0]
                     for n in (*FEW_ROWS, *ROWS)]
                    for batch in range(args.batches)
                ]
            )  # fmt: skip
            few[df], limits[df] = found[:, : len(FEW_ROWS)], found[:, len(FEW_ROWS) :]
            if not np.isfinite(limits[df]).all():
                raise SystemExit(f"df = {df:g}: a limit lies beyond {columns:,} columns")
            print(f"df {df:g}: slope {pair(slopes(limits[df]), 3)}", flush=True)
        beyond = []
        for df in BEYOND:
            for n in args.beyond_rows:
                limit, risk = limit_of(df, n, args.beyond_columns, args.beyond_draws, args.seed)
                name = "normal" if math.isinf(df) else f"t {df:g}"
                beyond.append(
                    [name, f"{n:,}", f"{args.beyond_columns:,}", f"{args.beyond_draws:,}",
                     "none" if math.isinf(limit) else f"{limit:,.0f}", f"{risk:.4f}"]
                )  # fmt: skip
                print(beyond[-1], flush=True)
    page = report(limits, few, beyond, args, time.monotonic() - began)
    print(page)
    if args.out is not None:
        args.out.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
