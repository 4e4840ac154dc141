"""Which moments are said to exist, over laws whose moments are known.

    python tests/validation/moment_answers.py --out reports/validation/moment_answers.md

Every replication is a column of `series_group`, which is how the tool answers for columns and
scores. For the errors two vetoes are added (a randomised test, and the fitted volatility for
order 4): they turn some 'exists' into 'unclear' and are not part of this study.
"""

from __future__ import annotations

import argparse
import math
import time
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

from scantling.core.streams import blocks, stream
from scantling.diagnostics.battery import series_group
from scantling.diagnostics.moments import ORDERS

ROWS = (250, 1000, 5000)
LAWS = (
    student(2), student(2.5), student(3), student(4), student(5), student(6), student(10),
    pareto(2), pareto(3), stable(1.7), NORMAL, LAPLACE, skewed_student(4, 1.2),
    skewed_student(4, 1.5), garch(0.15, 0.80), garch(0.08, 0.90, 5), garch(0.11, 0.88),
)  # fmt: skip
VALUES_AT_ONCE = 1_000_000
CLEAR = 0.5
"""Distance of order and index from which an answer should not be wrong."""
MOST_WRONG = 0.05
Shares = tuple[float, float, float]
"""exists, missing, unclear."""


def exists(law: KnownLaw, order: int) -> bool:
    """The truth: at order = index no moment of these laws exists."""
    return order < law.index


def answers(law: KnownLaw, rows: int, replications: int, seed: int) -> dict[int, Shares]:
    """Shares of the three answers at every order."""
    codes: dict[int, list[np.ndarray]] = {order: [] for order in ORDERS}
    for number, (start, stop) in enumerate(blocks(replications, VALUES_AT_ONCE // rows)):
        rng = stream(seed, f"moment answers, {law.name}", rows, number + 1)
        group = series_group(law.draw(rng, rows, stop - start), dependent=True)
        for order in ORDERS:
            codes[order].append(group.moments[order])
    out = {}
    for order, parts in codes.items():
        found = np.concatenate(parts)
        out[order] = (
            float(np.mean(found == 1)), float(np.mean(found == -1)), float(np.mean(found == 0))
        )  # fmt: skip
    return out


def wrong(law: KnownLaw, order: int, shares: Shares) -> float:
    """Share of wrong answers; 'unclear' is never wrong."""
    return shares[1] if exists(law, order) else shares[0]


def reading(found: dict[tuple[KnownLaw, int], dict[int, Shares]]) -> list[str]:
    """Where answers are wrong in more than 5 % of samples."""

    def words(clear: bool, least_rows: int) -> str:
        cells: dict[str, list[str]] = {}
        for (law, rows), by_order in found.items():
            for order, shares in by_order.items():
                share = wrong(law, order, shares)
                near = abs(order - law.index) < CLEAR
                if rows >= least_rows and near != clear and share > MOST_WRONG:
                    where = f"order {order} of {law.name}"
                    cells.setdefault(where, []).append(f"{100 * share:.1f} % at {rows}")
        return "; ".join(f"{where} {', '.join(some)}" for where, some in cells.items()) or "none"

    return [
        "## Reading",
        "",
        "- Wrong in more than 5 %, order at least 0.5 from the index, 1000 rows or more: "
        + words(True, 1000)
        + ".",
        "- The same, from 250 rows: " + words(True, 250) + ".",
        "- Wrong in more than 5 %, order nearer to the index: " + words(False, 250) + ".",
        "- Stable laws and volatility near integration look lighter in range than they are: see"
        " tail_intervals.md.",
        "",
    ]


def main() -> None:
    """Run the study and write its tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replications", type=int, default=2000)
    parser.add_argument("--replications-5000", type=int, help="at n = 5000; default: the same")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, default=Path("reports/validation/moment_answers.md"))
    options = parser.parse_args()
    counts = dict.fromkeys(ROWS, options.replications)
    counts[5000] = options.replications_5000 or options.replications
    started = time.perf_counter()
    found: dict[tuple[KnownLaw, int], dict[int, Shares]] = {}
    with threadpool_limits(1):
        for rows in ROWS:
            for law in LAWS:
                found[law, rows] = answers(law, rows, counts[rows], options.seed)
                print(f"{time.perf_counter() - started:5.0f} s  n {rows}, {law.name}", flush=True)
    lines = preamble("Moments: answers over known laws", time.perf_counter() - started)
    lines += [
        "Shares of exists / missing / unclear, per cent, then the share of wrong answers with its"
        " Monte Carlo standard error in brackets; * where the moment is infinite. Series are"
        " taken as dependent and about their medians, as the tool takes them; the symmetric Pareto"
        " laws have no values near theirs, which the tool is then left to guess.",
        "",
    ]
    lines += reading(found)
    for rows in ROWS:
        lines += [f"## n = {rows} ({counts[rows]} replications)", ""]
        body = []
        for law in LAWS:
            row = [law.name, f"{law.index:.2f}" if math.isfinite(law.index) else "none"]
            for order in ORDERS:
                shares = found[law, rows][order]
                share = wrong(law, order, shares)
                row.append(
                    " / ".join(f"{100 * s:.0f}" for s in shares)
                    + f", {100 * share:.1f} ({100 * share_error(share, counts[rows]):.1f})"
                    + ("" if exists(law, order) else " *")
                )
            body.append(row)
        lines += table(["law", "index", *(f"order {order}" for order in ORDERS)], body)
    options.out.parent.mkdir(parents=True, exist_ok=True)
    options.out.write_text("\n".join(lines), encoding="utf-8")


if __name__ == "__main__":
    main()
