"""Assured columns: how many are proved safe, given the law and these columns.

Two bounds, both by truncation and Bennett (1962), Journal of the American Statistical
Association 57, 33-45, whose exponent is (V/b^2) h(t b/V), h(u) = (1+u) ln(1+u) - u. The first
truncates every score, and pays for each column's large scores; the second truncates the errors
once for all columns, and pays with the columns' largest values. The better of the two counts.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

from scantling.core.record import FloatArray
from scantling.design.spec import TargetSpec
from scantling.law.families import ErrorLaw
from scantling.planning.limit import Limit, make_limit, missing_limit
from scantling.simulation.loss_scores import ROBUST

STEP = 0.02
"""Of the grid in logs: sizes of columns are rounded up to it, which keeps the bound a bound."""
SMALLEST, LARGEST = -8.0, 14.0
"""Logs of the truncation points tried, over the errors' sd."""
FINEST = -14.0
"""Logs of column values below it count as this much."""
MOST = 10**12


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnSizes:
    """What the bounds need of the columns (mean 0, mean square 1)."""

    rows: int
    """n."""
    counts: FloatArray
    """Values of a column, on average, in each bin of log size from FINEST on."""
    largest: FloatArray
    """Largest size in each column, shape (P,)."""


def column_sizes(X: FloatArray) -> ColumnSizes:
    """Sizes of the columns of X (n, P)."""
    size = np.abs(X)
    with np.errstate(divide="ignore"):
        bins = np.ceil((np.log(size) - FINEST) / STEP)
    counts = np.bincount(np.maximum(bins, 0).astype(np.int64).ravel()) / X.shape[1]
    return ColumnSizes(rows=X.shape[0], counts=counts, largest=size.max(axis=0))


def bennett_h(u: FloatArray) -> FloatArray:
    """(1+u) ln(1+u) - u."""
    return np.asarray((1 + u) * np.log1p(u) - u)


def bennett(variance: float, bound: FloatArray, level: float) -> FloatArray:
    """P(sum > level) is at most this, terms at most `bound`, variances summing to `variance`."""
    return np.asarray(np.exp(-(variance / bound**2) * bennett_h(level * bound / variance)))


def exceedance(law: ErrorLaw, size: FloatArray) -> FloatArray:
    """P(|e| > size sd(e)), sizes increasing; volatility is constant."""
    scale = law.sd
    cdf = law.innovation.cdf
    return np.clip(cdf(-size * scale) + 1 - cdf(size * scale), 0.0, 1.0)


def first_bound(sizes: ColumnSizes, law: ErrorLaw, level: float) -> float:
    """P(|S_j| > level sd(e)) at most, averaged over columns.

    min over y of sum_i P(|x_ij e_i| > y) + 2 exp{-(n/y^2) h(level sqrt(n) y / n)}, errors in
    units of their sd.
    """
    n = sizes.rows
    logs = np.arange(SMALLEST, LARGEST, STEP)
    # P(|e| > y/x) for every difference of logs: one table serves all columns and all y.
    span = np.arange(SMALLEST - FINEST - STEP * (sizes.counts.size - 1), LARGEST - FINEST, STEP)[
        : logs.size + sizes.counts.size - 1
    ]
    tail = exceedance(law, np.exp(span))
    cost = np.convolve(tail, sizes.counts, mode="valid")[: logs.size]
    y = np.exp(logs[: cost.size])
    return float((cost + 2 * bennett(n, y, level * math.sqrt(n))).min())


def second_bound(sizes: ColumnSizes, law: ErrorLaw, level: float, risk: float) -> float:
    """Most columns for which n P(|e| > y) + 2 sum_j exp{...} stays below the risk.

    The terms x_ij (e_i 1(|e_i| <= y) - m), m the truncated mean, have mean zero and size at most
    max|x_j| (y + |m|), |m| <= sqrt(P(|e| > y)); a centred column kills m.
    """
    n = sizes.rows
    y = np.exp(np.arange(SMALLEST, LARGEST, 5 * STEP))
    beyond = exceedance(law, y)
    spare = risk - n * beyond
    usable = spare > 0
    if not usable.any():
        return 0.0
    y, beyond, spare = y[usable], beyond[usable], spare[usable]
    cut = y + np.sqrt(beyond)
    # Columns of like size share their exponent; rounded up, so that it stays a bound.
    largest, counts = np.unique(
        np.exp(np.ceil(np.log(sizes.largest) / STEP) * STEP), return_counts=True
    )
    passing = bennett(n, largest[:, None] * cut, level * math.sqrt(n))
    mean = (counts[:, None] * passing).sum(axis=0) / counts.sum()
    return float((spare / np.maximum(2 * mean, 1e-300)).max())


def assured_point(
    sizes: ColumnSizes, law: ErrorLaw, target: TargetSpec, response_sd: float
) -> float:
    """Largest number of columns proved safe at a level where the smallest effect still shows.

    The level is t = (sqrt(n) sd(y) effect - Phi^-1(power) sd(e)) / sd(e): a larger one would
    hide the effect. 0 where even that is not positive.
    """
    room = math.sqrt(sizes.rows) * response_sd * target.smallest_effect / law.sd
    level = room - float(ndtri(target.power))
    if level <= 0:
        return 0.0
    by_scores = target.risk / max(first_bound(sizes, law, level), 1e-300)
    by_errors = second_bound(sizes, law, level, target.risk)
    return float(math.floor(min(max(by_scores, by_errors), MOST) + 1e-9))


def assured(
    X: FloatArray, law: ErrorLaw, law_draws: tuple[ErrorLaw, ...], *, target: TargetSpec,
    response_sd: float, loss: str, mode: str, dependence: str = "", most: int | None = None,
) -> Limit:  # fmt: skip
    """Assured columns with their band over the law's draws.

    Parameters
    ----------
    X : array, shape (n, P)
        Columns of mean 0 and mean square 1, given.
    law, law_draws : ErrorLaw
        The law and those the sample cannot tell from it.
    target : TargetSpec
    response_sd : float
    loss, mode : str
    dependence : str
        What stands against independent errors given the columns; empty if nothing does.
    most : int, optional
        Columns asked for, of which X is a sample; default: its own.

    Returns
    -------
    Limit
        Null with a note where the proof does not apply. Averaged over which of the P columns
        are taken.
    """
    reason = ""
    if law.volatility is not None:
        reason = "the proof needs independent errors, and their volatility changes in time"
    elif law.autoregression is not None:
        reason = "the proof needs independent errors, and their level persists from row to row"
    elif dependence:
        reason = f"the proof needs errors independent of the columns and each other; {dependence}"
    elif loss in ROBUST:
        reason = f"the proof is for least squares, not for the {loss} loss"
    elif not math.isfinite(law.sd):
        reason = "the proof needs a variance, and the error law has none"
    if reason:
        return missing_limit(reason, mode=mode)
    sizes = column_sizes(X)
    point = assured_point(sizes, law, target, response_sd)
    draws = [
        assured_point(sizes, each, target, response_sd) if math.isfinite(each.sd) else 0.0
        for each in law_draws
    ] or [point]
    most = X.shape[1] if most is None else most
    capped = [math.inf if value >= most else value for value in draws]
    return make_limit(math.inf if point >= most else point, capped, most, mode=mode)
