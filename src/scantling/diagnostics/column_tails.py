"""Tail indices of many series at once: columns of the design, or their scores.

The same estimators as for one series; the standard error is the block bootstrap's in closed
form, through the influence of each row, so that thousands of columns take seconds.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import blocks
from scantling.diagnostics.tail_index import (
    TIE_SHARE,
    block_length,
    index_ends,
    magnitudes,
    moderate,
    prepare,
    repeat_share,
    tail_counts,
    tied_share,
)
from scantling.diagnostics.tail_interval import asymmetry_bias
from scantling.diagnostics.tail_kernel import TailEstimates, tail_estimates
from scantling.errors import InputError

SPARSE_SHARE = 0.05
COLUMNS_PER_PASS = 256


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnTails:
    """Tail estimates of P series; entries of series not assessed are nan and flagged."""

    gamma: FloatArray
    """1/index by the weighted Hill regression, shape (P,)."""
    error: FloatArray
    """Its standard error, block form, shape (P,)."""
    gamma_low: FloatArray
    """Lower end of gamma's 90 % interval, shape (P,); may be negative."""
    gamma_high: FloatArray
    """Upper end, shape (P,)."""
    hill_gamma: FloatArray
    """Hill on the largest 5 %, shape (P,)."""
    hill_error: FloatArray
    """The larger of gamma/sqrt(k) and the block form, shape (P,)."""
    p_value: FloatArray
    """Of the thin-tail test, shape (P,); 1 where not assessed."""
    active_share: FloatArray
    """Share of rows that differ from the series' mode, shape (P,)."""
    threshold_count: int
    """Upper order statistics the weighted Hill uses."""
    refused: tuple[tuple[int, str], ...] = ()
    """Number of each series not assessed, and why."""

    @property
    def assessed(self) -> np.ndarray:
        """Which series have an index, shape (P,), bool."""
        return np.isfinite(self.gamma)

    @property
    def sparse(self) -> np.ndarray:
        """Which series differ from their mode on under 5 % of rows, shape (P,), bool."""
        return self.active_share < SPARSE_SHARE

    def interval(self, series: int) -> tuple[float, float]:
        """Ends of the 90 % interval of one series' index; the upper may be inf."""
        return index_ends(float(self.gamma_low[series]), float(self.gamma_high[series]))

    def median_column(self) -> int | None:
        """Number of the series whose gamma is the (lower) median; None if none is assessed."""
        known = np.flatnonzero(self.assessed)
        if not known.size:
            return None
        order = known[np.argsort(self.gamma[known], kind="stable")]
        return int(order[(order.size - 1) // 2])


@dataclass(frozen=True, slots=True, kw_only=True)
class Repeats:
    """How values repeat in each of P series; the same whichever tail is looked at."""

    active_share: FloatArray
    """Share of rows that differ from the mode, shape (P,)."""
    plain: np.ndarray
    """Whether values repeat too little to matter, shape (P,), bool."""


def find_repeats(series: FloatArray) -> Repeats:
    """Look for modes and ties in every column of `series` (n, P)."""
    n, width = series.shape
    active_share, plain = np.empty(width), np.empty(width, dtype=bool)
    for first, last in blocks(width, COLUMNS_PER_PASS):
        mode_share, tied = _repeats(moderate(series[:, first:last]))
        active_share[first:last] = 1 - mode_share
        plain[first:last] = (mode_share <= repeat_share(n)) & (tied <= TIE_SHARE)
    return Repeats(active_share=read_only(active_share), plain=plain)


def column_tails(
    series: FloatArray, *, dependent: bool, side: str = "both", repeats: Repeats | None = None
) -> ColumnTails:
    """Estimate the tails of every column of `series`.

    Parameters
    ----------
    series : array, shape (n, P), n >= 30
        Trusted: finite.
    dependent : bool
        Whether rows are in time order; standard errors then use blocks of ceil(n^0.6) rows.
    side : {'both', 'left', 'right'}
        Which tail; 'both' pools magnitudes about the median.
    repeats : Repeats, optional
        Of the same series, where they are known.

    Returns
    -------
    ColumnTails
    """
    n, width = series.shape
    out = {field.name: np.full(width, np.nan) for field in fields(TailEstimates)}
    repeats = repeats or find_repeats(series)
    odd = np.flatnonzero(~repeats.plain).tolist()

    def keep(columns: list[int], part: FloatArray) -> None:
        block = block_length(len(part)) if dependent else 1
        found = tail_estimates(
            magnitudes(part, side),
            tail_counts(len(part), side),
            block=block,
            skew_bias=asymmetry_bias(part) if side == "both" else 0.0,
        )
        for name, values in out.items():
            values[columns] = getattr(found, name)

    for first in range(0, width, COLUMNS_PER_PASS):
        here = slice(first, min(first + COLUMNS_PER_PASS, width))
        part = moderate(series[:, here])
        plain = repeats.plain[here]
        if plain.any():
            keep([first + int(j) for j in np.flatnonzero(plain)], part[:, plain])
    refused = []
    for j in odd:
        try:
            ready = prepare(series[:, j], name="series").values
        except InputError as reason:
            refused.append((j, str(reason).removeprefix("series: ")))
            continue
        if np.sort(magnitudes(ready, "both"))[::-1][ready.size // 2] <= 0:
            refused.append((j, "more than half of the values are equal"))
            continue
        keep([j], ready[:, None])
    out["p_value"][np.isnan(out["p_value"])] = 1.0
    return ColumnTails(
        **{name: read_only(values) for name, values in out.items()},
        active_share=repeats.active_share,
        threshold_count=tail_counts(n, side)[0],
        refused=tuple(refused),
    )


def _repeats(part: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Per column: share of the mode, and share of ties among the largest tenth."""
    n = part.shape[0]
    tied, near = tied_share(part)
    ordered = np.sort(part, axis=0)
    edges = np.ones((n + 1, part.shape[1]), dtype=bool)
    edges[1:-1] = ordered[1:] - ordered[:-1] > near
    mode_share = np.empty(part.shape[1])
    for j in range(part.shape[1]):
        mode_share[j] = np.diff(np.flatnonzero(edges[:, j])).max() / n
    return mode_share, tied


def holm_rejections(p_values: FloatArray, level: float = 0.05) -> np.ndarray:
    """Which hypotheses Holm's step-down rejects at `level`, shape (P,), bool.

    Holm (1979), Scandinavian Journal of Statistics 6.
    """
    order = np.argsort(p_values, kind="stable")
    count = p_values.size
    passed = np.cumprod(p_values[order] <= level / (count - np.arange(count))).astype(bool)
    rejected = np.zeros(count, dtype=bool)
    rejected[order] = passed
    return rejected
