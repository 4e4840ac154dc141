"""Tail indices of many series at once: columns of the design, or their scores.

The same estimators as for one series; the standard error is the block bootstrap's in closed
form, through the influence of each row, so that thousands of columns take seconds.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.greenwood import greenwood_p_value, greenwood_statistic
from scantling.diagnostics.tail_estimators import (
    block_standard_error,
    hill,
    hill_influence,
    influence,
    weighted_hill,
    weighted_hill_coefficients,
)
from scantling.diagnostics.tail_index import (
    BIAS_BOUND,
    TIE_SHARE,
    bias_aware_factor,
    block_length,
    hill_count,
    moderate,
    prepare,
    repeat_share,
    thin_count,
    tied_share,
)
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

    def intervals(self, level: float = 0.90) -> tuple[FloatArray, FloatArray]:
        """Ends of the bias-aware interval of gamma, each (P,); nan where not assessed."""
        half = np.full(self.gamma.shape, np.nan)
        for j in np.flatnonzero(self.assessed):
            error = max(float(self.error[j]), 1e-12)
            half[j] = error * bias_aware_factor(BIAS_BOUND / error, level)
        return self.gamma - half, self.gamma + half

    def median_column(self) -> int | None:
        """Number of the series whose gamma is the (lower) median; None if none is assessed."""
        known = np.flatnonzero(self.assessed)
        if not known.size:
            return None
        order = known[np.argsort(self.gamma[known], kind="stable")]
        return int(order[(order.size - 1) // 2])


def mode_of(column: FloatArray) -> tuple[float, float]:
    """The commonest value of a series and its share of the rows."""
    values, counts = np.unique(column, return_counts=True)
    top = int(counts.argmax())
    return float(values[top]), float(counts[top]) / column.size


def column_tails(series: FloatArray, *, dependent: bool) -> ColumnTails:
    """Estimate the tails of every column of `series`.

    Parameters
    ----------
    series : array, shape (n, P), n >= 30
        Trusted: finite.
    dependent : bool
        Whether rows are in time order; standard errors then use blocks of ceil(n^0.6) rows.

    Returns
    -------
    ColumnTails
    """
    n, width = series.shape
    out = {
        name: np.full(width, np.nan)
        for name in ("gamma", "error", "hill_gamma", "hill_error", "active_share")
    }
    p_value = np.ones(width)
    odd: list[int] = []
    for first in range(0, width, COLUMNS_PER_PASS):
        here = slice(first, min(first + COLUMNS_PER_PASS, width))
        part = moderate(series[:, here])
        mode_share, tied = _repeats(part)
        out["active_share"][here] = 1 - mode_share
        plain = (mode_share <= repeat_share(n)) & (tied <= TIE_SHARE)
        odd += [first + int(j) for j in np.flatnonzero(~plain)]
        if plain.any():
            columns = first + np.flatnonzero(plain)
            for name, values in _estimates(part[:, plain], dependent).items():
                target = p_value if name == "p_value" else out[name]
                target[columns] = values
    refused = []
    for j in odd:
        column = moderate(series[:, j])
        value, share = mode_of(column)
        column = column - (value if share > repeat_share(n) else 0.0)
        try:
            ready = prepare(column, name="series").values
        except InputError as reason:
            refused.append((j, str(reason).removeprefix("series: ")))
            continue
        kappa = ready.size // 2
        if np.sort(np.abs(ready - np.median(ready)))[::-1][kappa] <= 0:
            refused.append((j, "more than half of the values are equal"))
            continue
        for name, values in _estimates(ready[:, None], dependent).items():
            target = p_value if name == "p_value" else out[name]
            target[j] = values[0]
    return ColumnTails(
        **{name: read_only(values) for name, values in out.items()},
        p_value=read_only(p_value),
        threshold_count=n // 2,
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


def _estimates(part: FloatArray, dependent: bool) -> dict[str, FloatArray]:
    """All estimates for columns without ties or zeros."""
    n = part.shape[0]
    kappa, k_hill, k_thin = n // 2, hill_count(n), thin_count(n)
    magnitude = np.abs(part - np.median(part, axis=0))
    order = np.argsort(-magnitude, axis=0, kind="stable")
    ordered = np.take_along_axis(magnitude, order, axis=0)
    logs = np.log(np.maximum(ordered, np.finfo(float).tiny))
    block = block_length(n) if dependent else 1
    errors = []
    for by_rank in (
        influence(logs, weighted_hill_coefficients(kappa)),
        hill_influence(logs, k_hill),
    ):
        in_time = np.empty_like(logs)
        np.put_along_axis(in_time, order, by_rank, axis=0)
        errors.append(block_standard_error(in_time, block))
    second = hill(ordered, k_hill)
    return {
        "gamma": weighted_hill(ordered, kappa),
        "error": errors[0],
        "hill_gamma": second,
        "hill_error": np.maximum(errors[1], second / math.sqrt(k_hill)),
        "p_value": greenwood_p_value(greenwood_statistic(ordered, k_thin), k_thin),
    }


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
