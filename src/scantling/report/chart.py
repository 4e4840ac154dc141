"""Small plain-text charts."""

from __future__ import annotations

import math
from collections.abc import Sequence

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
