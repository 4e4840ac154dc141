"""Is the assured level passed more often than the risk, over the known designs?

    python tests/validation/assured_levels.py --out reports/validation/assured_levels.md

For every design of the risk study whose errors are independent: the smallest level at which all
its columns are assured under the true law, and how often 4,000 fresh draws of those errors pass it
on the same columns. The proof says: never more often than the risk.
"""

from __future__ import annotations

import argparse
import time
from pathlib import Path

import numpy as np
from risk_calibration import BLOCK, DRAWS, level
from risk_grid import GRID, SEED, KnownDesign
from risk_reading import RISK
from threadpoolctl import threadpool_limits
from write_up import preamble, share_error, table

from scantling.core.record import FloatArray
from scantling.core.streams import blocks, stream
from scantling.law.families import ErrorLaw
from scantling.law.notation import parse_law
from scantling.planning.assured import ColumnSizes, column_sizes, first_bound, second_bound

SKEW = 1.5
"""Stretch of the right side of the grid's skewed t; ours is (stretch^2 - 1)/(stretch^2 + 1)."""
TRUE_LAWS = {
    "normal": "normal", "Laplace": "laplace", "GED 1.3": "ged:shape=1.3",
    "t 2.5": "student-t:df=2.5", "t 3": "student-t:df=3", "t 4": "student-t:df=4",
    "t 6": "student-t:df=6",
    "skewed t 4": f"skewed-t:df=4,skew={(SKEW**2 - 1) / (SKEW**2 + 1):.10f}",
}  # fmt: skip
"""The tool's own record of each true law, at variance 1."""


def assures_all(sizes: ColumnSizes, law: ErrorLaw, at: float) -> bool:
    """Whether all columns are assured at a level, in sd of the errors."""
    most = max(RISK / first_bound(sizes, law, at), second_bound(sizes, law, at, RISK))
    return most >= sizes.largest.size


def assured_level(X: FloatArray, law: ErrorLaw) -> float | None:
    """Smallest level, to 1 %, at which all columns of X are assured; None up to 1,000."""
    sizes = column_sizes(X)
    low, high = 1.0, 2.0
    while not assures_all(sizes, law, high):
        low, high = high, 2 * high
        if high > 1000:
            return None
    while high > 1.01 * low:
        middle = (low * high) ** 0.5
        low, high = (low, middle) if assures_all(sizes, law, middle) else (middle, high)
    return high


def passing(design: KnownDesign, X: FloatArray, at: float, rng: np.random.Generator) -> float:
    """Share of draws of the true errors of which any score passes the level."""
    n, passed = len(X), 0
    for start, stop in blocks(DRAWS, BLOCK):
        errors = design.law.draw(rng, np.ones(n), stop - start)
        passed += int((np.abs(X.T @ errors) > at * np.sqrt(n)).any(axis=0).sum())
    return passed / DRAWS


def main() -> None:
    """Run and write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--samples", type=int, default=2)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    started = time.perf_counter()
    rows, shares, unknown = [], [], 0
    with threadpool_limits(1):
        for design in GRID:
            if design.errors not in TRUE_LAWS:
                continue
            law = parse_law(TRUE_LAWS[design.errors])
            for number in range(1, options.samples + 1):
                sample = design.sample(stream(SEED, f"assured, {design.name}", number))
                at = assured_level(sample.X, law)
                if at is None:
                    unknown += 1
                    continue
                rng = stream(SEED, f"assured draws, {design.name}", number)
                share = passing(design, sample.X, at, rng)
                shares.append(share)
                rows.append(
                    [design.name, f"{at:.2f}", f"{at / level(design.width):.2f}", f"{share:.4f}"]
                )
    worst = max(shares)
    error = share_error(max(worst, 1 / DRAWS), DRAWS)
    lines = preamble("How often the assured level is passed", time.perf_counter() - started)
    lines += [
        "## Reading",
        "",
        f"Over {len(shares)} samples of {len(rows) // options.samples} designs the level at which"
        f" all columns are assured is passed in at most {worst:.4f} ({error:.4f}) of draws, against"
        f" a risk of {RISK:g}; in {sum(share > RISK for share in shares)} samples more often than"
        f" the risk. {unknown} samples have no such level up to 1,000 sd. Under volatility and for"
        " robust losses no columns are assured.",
        "",
        *table(["design", "level, sd", "over the plug-in level", "share passing"], rows),
    ]
    options.out.write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines[:10]))


if __name__ == "__main__":
    main()
