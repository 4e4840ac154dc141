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
from scipy.stats import norm
from scipy.stats import t as student
from threadpoolctl import threadpool_limits
from write_up import preamble, table

from scantling.core.streams import serial_map
from scantling.planning.paper import stated_plan, target_of
from scantling.planning.plan import Plan, plan_noise, plan_scores
from scantling.simulation.scores import penalty_level

ROWS = (200, 500, 1000, 2000, 5000)
"""Of the slope."""
FEW_ROWS = (30, 50, 100)
"""Shown, not part of it."""
COLUMNS = {3.0: 1_500, 3.5: 5_000, 4.0: 16_000}
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


def one_large_product(df: float, rows: int) -> float:
    """Limit if scores were not standardised: the p at which one large product among n p, or the
    normal part of the scores, uses up the risk: p (n P(|x e| > L(p) sqrt(n)) + P(|N| > L(p)))."""
    sd = math.sqrt(df / (df - 2))
    logs = np.linspace(-12.0, 25.0, 7401)
    x = np.exp(logs)
    p = np.geomspace(1, 1e7, 1401)
    level = penalty_level(p, RISK)
    u = level * math.sqrt(rows)
    # Columns and errors in units of their sd; integrated over log x.
    density = 2 * sd * student.pdf(sd * x, df) * x * (logs[1] - logs[0])
    beyond = np.array([density @ (2 * student.sf(sd * each / x, df)) for each in u])
    used = p * (rows * beyond + 2 * norm.sf(level))
    place = int(np.argmax(used > RISK))
    share = (RISK - used[place - 1]) / (used[place] - used[place - 1])
    return float(np.exp(np.interp(share, [0, 1], np.log(p[place - 1 : place + 1]))))


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
    plain = {df: np.array([one_large_product(df, n) for n in ROWS]) for df in limits}
    for df, found in limits.items():
        each = slopes(found)
        rising.append(each.mean())
        local = np.log(found[:, -1] / found[:, -2]) / math.log(ROWS[-1] / ROWS[-2])
        rows.append(
            [f"{df:g}", pair(each, 3), f"{df / 2 - 1:.2f}", pair(each - (df / 2 - 1), 3),
             pair(local, 2), f"{slopes(plain[df][None])[0]:.3f}"]
        )  # fmt: skip
    lines += table(
        ["df = q", f"slope, n {ROWS[0]} to {ROWS[-1]}", "q/2 - 1", "difference",
         f"slope, n {ROWS[-2]} to {ROWS[-1]}", "slope without standardisation"],
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
    lines += ["The same without standardisation, by the formula below:", ""]
    lines += table(
        ["df", *(f"n = {n}" for n in ROWS)],
        [[f"{df:g}", *(f"{value:,.0f}" for value in plain[df])] for df in limits],
    )
    lines += [
        "## Why the slope is not q/2 - 1",
        "",
        "The exponent q/2 - 1 is that of a score with exactly q moments, at a fixed level. Four"
        " things move it here. (1) Columns and errors have equal indices, so the tail of their"
        " product is u^-q times a logarithm: P(|x e| > u) ~ c u^-q ln u. That takes about"
        " 1 / (2 ln u) off the slope, u = L(p) sqrt(n). (2) The level L(p) grows with p, which"
        " adds to it. (3) Part of the accepted risk is used by the normal part of the scores, the"
        " larger part at few columns. (4) Columns and errors are divided by their own root mean"
        " square in the sample: a column that holds a huge value is scaled down by it, to at most"
        " sqrt(n). That tames scores, and most where n is small: the limit is raised there, and"
        " its growth is flatter.",
        "",
        "The last column of the first table has the first three and not the fourth: the slope of"
        " the p at which p (n P(|x e| > L(p) sqrt(n)) + P(|N| > L(p))) reaches the risk, N"
        " normal, integrated numerically. What is left between it and the simulated slope is"
        " standardisation's doing; the simulated limits are above it at every n and come nearer"
        " as n grows. In very small samples the cap sqrt(n) keeps scores down by itself, and the"
        " limit falls before it rises (n = 30 to 200).",
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
    parser.add_argument("--batches", type=int, default=12)
    parser.add_argument("--draws", type=int, default=500)
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
