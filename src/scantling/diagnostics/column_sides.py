"""Left and right tails of many series, and which series are heavier on one side."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import stdtr

from scantling.core.record import FloatArray
from scantling.diagnostics.column_tails import (
    ColumnTails,
    Repeats,
    column_tails,
    find_repeats,
    holm_rejections,
)
from scantling.diagnostics.tail_index import block_length

SIDED_ROWS = 500
"""Rows from which left and right tails are told apart."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnSides:
    """Both tails of P series, each about the median."""

    left: ColumnTails
    """Left tails."""
    right: ColumnTails
    """Right tails."""
    heavier: np.ndarray
    """-1 heavier on the left, 1 on the right, 0 not told apart, shape (P,)."""


def column_sides(
    series: FloatArray, *, dependent: bool, repeats: Repeats | None = None
) -> ColumnSides | None:
    """Estimate both tails of every column of `series`; None below 500 rows.

    A series is heavier on one side if the two gammas differ by the t test on their joint block
    error, its degrees of freedom one and a half times the number of blocks, less one; Holm over
    series at 5 %.

    Parameters
    ----------
    series : array, shape (n, P), n >= 30
        Trusted: finite.
    dependent : bool
        Whether rows are in time order.
    repeats : Repeats, optional
        Of the same series, where they are known.
    """
    if series.shape[0] < SIDED_ROWS:
        return None
    repeats = repeats or find_repeats(series)
    left = column_tails(series, dependent=dependent, side="left", repeats=repeats)
    right = column_tails(series, dependent=dependent, side="right", repeats=repeats)
    heavier = heavier_sides(left, right, series.shape[0], dependent=dependent)
    return ColumnSides(left=left, right=right, heavier=heavier)


def heavier_sides(
    left: ColumnTails, right: ColumnTails, rows: int, *, dependent: bool
) -> np.ndarray:
    """Which side of each series is told apart as the heavier, as `ColumnSides.heavier`."""
    gap = right.gamma - left.gamma
    error = np.hypot(left.error, right.error)
    known = np.isfinite(gap) & (error > 0)
    p_value = np.ones(gap.size)
    # Overlapping blocks tell half as much again of a variance as separate ones do.
    freedom = 1.5 * rows / (block_length(rows) if dependent else 1) - 1
    p_value[known] = 2 * stdtr(freedom, -np.abs(gap[known] / error[known]))
    heavier = np.where(holm_rejections(p_value), np.sign(gap), 0)
    return np.nan_to_num(heavier).astype(int)
