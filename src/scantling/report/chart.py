"""Small plain-text charts."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from scantling.diagnostics.threshold_path import ThresholdPath
from scantling.planning.breakthrough import CurvePoint

HEIGHT = 8


def risk_chart(curve: Sequence[CurvePoint], accepted: float, width: int) -> list[str]:
    """Break-through risk over p (log scale): point '*', band ':', accepted risk '-'.

    Where marks meet the point wins, then the accepted risk's line.
    """
    if len(curve) < 2:
        return []
    top = max(*(c.high for c in curve), 1.5 * accepted)
    left, right = math.log(curve[0].p), math.log(curve[-1].p)
    span = width - 12
    rows = [[" "] * span for _ in range(HEIGHT)]

    def height(value: float) -> int:
        return min(HEIGHT - 1, round(value / top * (HEIGHT - 1)))

    marks = []
    for x in range(span):
        p = math.exp(left + (right - left) * x / (span - 1))
        place = next((i for i, c in enumerate(curve) if c.p >= p - 1e-9), len(curve) - 1)
        before, after = curve[max(0, place - 1)], curve[place]
        gap = math.log(after.p / before.p)
        share = 1.0 if gap <= 0 else (math.log(p) - math.log(before.p)) / gap
        marks.append(
            [
                getattr(before, k) + share * (getattr(after, k) - getattr(before, k))
                for k in ("risk", "low", "high")
            ]
        )
    for x, (risk, low, high) in enumerate(marks):
        for y in range(height(low), height(high) + 1):
            rows[y][x] = ":"
        rows[height(accepted)][x] = "-"
        rows[height(risk)][x] = "*"
    lines = []
    for y in range(HEIGHT - 1, -1, -1):
        # The row that stands for the accepted risk is labelled with it.
        label = f"{accepted if y == height(accepted) else top * y / (HEIGHT - 1):.3f}"
        lines.append(f"  {label:>6} |" + "".join(rows[y]).rstrip())
    lines.append("  " + " " * 6 + " +" + "-" * span)
    ends = f"{curve[0].p:,}", f"{curve[-1].p:,} columns"
    lines.append(" " * 10 + ends[0] + ends[1].rjust(span - len(ends[0])))
    lines.append(f"  * risk   : 90 % band   - accepted risk {accepted:g}")
    return lines


def path_chart(path: ThresholdPath, width: int) -> list[str]:
    """Hill's index over the number of largest values (log scale): '*', the stable stretch '='."""
    counts, index = path.counts, path.index
    if counts.size < 2:
        return []
    span = width - 12
    bottom, top = 0.0, float(min(index.max(), 3 * np.median(index)))
    left, right = math.log(counts[0]), math.log(counts[-1])
    rows = [[" "] * span for _ in range(HEIGHT)]
    for x in range(span):
        k = math.exp(left + (right - left) * x / (span - 1))
        value = float(np.interp(math.log(k), np.log(counts), index))
        y = min(HEIGHT - 1, round((value - bottom) / (top - bottom) * (HEIGHT - 1)))
        stable = path.stable_from <= k * (1 + 1e-9) and k <= path.stable_to * (1 + 1e-9)
        rows[y][x] = "=" if stable else "*"
    lines = [
        f"  {bottom + (top - bottom) * y / (HEIGHT - 1):>6.1f} |" + "".join(rows[y]).rstrip()
        for y in range(HEIGHT - 1, -1, -1)
    ]
    lines.append("  " + " " * 6 + " +" + "-" * span)
    first, last = f"{int(counts[0]):,}", f"{int(counts[-1]):,} largest values"
    lines.append(" " * 10 + first + last.rjust(span - len(first)))
    return lines


def extremes_table(extremes: Sequence[tuple[int, float, float, float]]) -> list[list[str]]:
    """Rows of rank, observed size, and the fitted law's median and 95 % point at that rank."""
    rows = [["Rank by size", "observed", "law's median", "law's 95 % point"]]
    for rank, seen, median, high in extremes:
        mark = "  above" if seen > high else ""
        rows.append([f"{rank}", f"{seen:.4g}", f"{median:.4g}", f"{high:.4g}{mark}"])
    return rows
