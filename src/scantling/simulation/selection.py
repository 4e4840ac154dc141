"""What a set of simulated refits says about a selection: stability, power, false share, loss.

Every criterion comes with its Monte Carlo error and an interval; the stability index and its
interval are those of `simulation.stability`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import stdtrit

from scantling.core.checks import between
from scantling.core.estimate import Estimate
from scantling.core.record import FloatArray
from scantling.errors import InputError
from scantling.simulation.stability import (
    BoolArray,
    index_and_variance,
    normal_point,
    selections,
    stability_index,
    stability_interval,
)

CRITERIA = ("power", "false_share", "exact", "sign_errors", "size")
"""Those that every set of refits has; each a mean over refits."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured(Estimate):
    """An estimate from simulation, with its Monte Carlo error."""

    error: float
    """Standard error, in units of the value."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SelectionSummary:
    """Selection statistics of one set of refits, or averaged over several sets."""

    replicates: int
    """Refits behind the figures."""
    level: float
    """Nominal coverage of every interval."""
    stability: Measured | None
    """Stability index; None where it is undefined."""
    stability_note: str
    """Why it, or part of it, is undefined; empty otherwise."""
    power: Measured
    """Mean share of the relevant columns selected, 0 to 1."""
    false_share: Measured
    """Mean of false / max(1, selected), 0 to 1."""
    exact: Measured
    """Share of refits that select exactly the relevant columns."""
    sign_errors: Measured
    """Mean share of the relevant columns selected with the wrong sign; 0 where signs are not
    given."""
    size: Measured
    """Mean number of columns selected."""
    prediction_loss: Measured | None
    """Mean squared error of the fitted values over that of least squares on the relevant columns;
    None where it is not given."""


def summarise_selection(
    selected: Any,
    relevant: Any,
    *,
    level: float = 0.90,
    wrong_signs: Any = None,
    loss: Any = None,
    oracle: Any = None,
) -> SelectionSummary:
    """Summarise refits that share one set of relevant columns.

    Parameters
    ----------
    selected : array-like of bool, shape (M, d)
        Which columns each refit selects; at least two refits.
    relevant : array-like of bool, shape (d,)
        Which columns matter; at least one.
    level : float
        Level of the intervals: mean -+ z times the Monte Carlo standard error,
        cut to 0 to 1. (Where all refits agree that error is zero.)
    wrong_signs : array-like, shape (M,), optional
        Relevant columns that each refit selects with the wrong sign.
    loss, oracle : array-like, shape (M,), optional
        Mean squared error of the fitted values about the true mean: of each refit, and of least
        squares on the relevant columns for the same response. The ratio of their means is
        reported, its error by the delta method.

    Raises
    ------
    InputError
        If the shapes, types or numbers are not as above.
    """
    table = selections(selected, "selected")
    level = between(level, "level", 0.0, 1.0)
    truth = np.asarray(relevant)
    if truth.dtype != np.bool_ or truth.shape != (table.shape[1],):
        raise InputError(
            f"relevant: {table.shape[1]} true or false values are needed;"
            f" found {truth.dtype} of shape {truth.shape}"
        )
    if not truth.any():
        raise InputError("relevant: at least one relevant column is needed; found none")
    if len(table) < 2:
        raise InputError(f"selected: at least 2 refits are needed; found {len(table)}")
    wanted = int(truth.sum())
    size = np.count_nonzero(table, axis=1)
    hits = np.count_nonzero(table[:, truth], axis=1)
    wrong = np.zeros(len(table))
    if wrong_signs is not None:
        wrong = _numbers(wrong_signs, "wrong_signs", table)
    stability, note = _stability(table, level)
    return SelectionSummary(
        replicates=len(table),
        level=level,
        stability=stability,
        stability_note=note,
        power=_mean(hits / wanted, level),
        false_share=_mean((size - hits) / np.maximum(size, 1), level),
        exact=_mean(((size == wanted) & (hits == wanted)).astype(np.float64), level),
        sign_errors=_mean(wrong / wanted, level),
        size=_mean(size.astype(np.float64), level, table.shape[1]),
        prediction_loss=None if loss is None or oracle is None else _ratio(
            _numbers(loss, "loss", table), _numbers(oracle, "oracle", table), level
        ),
    )  # fmt: skip


def pool_summaries(summaries: Sequence[SelectionSummary]) -> SelectionSummary:
    """Average summaries over supports, each support with the same weight.

    The average is over supports drawn at random, so its variance is that between
    the K supports over K; this already holds the Monte Carlo error within each
    of them. As K is small the estimate of it is rough: the interval uses the t
    law with K-1 degrees, and neither it nor the standard error is ever smaller
    than what the errors within supports, sqrt(sum_k se_k^2) / K, give alone.
    Supports whose stability is not defined are left out of that average, and
    the note says how many.

    Raises
    ------
    InputError
        If there is no summary, or their levels differ.
    """
    if not summaries:
        raise InputError("summaries: at least one summary is needed; found none")
    if len({summary.level for summary in summaries}) > 1:
        raise InputError("summaries: one level is needed in all of them; found several")
    if len(summaries) == 1:
        return summaries[0]
    level = summaries[0].level
    stable = [s.stability for s in summaries if s.stability is not None]
    losses = [s.prediction_loss for s in summaries if s.prediction_loss is not None]
    missing = len(summaries) - len(stable)
    tops = {"size": math.inf}
    pooled = {
        name: _pool([getattr(s, name) for s in summaries], level, 0.0, tops.get(name, 1.0))
        for name in CRITERIA
    }
    return SelectionSummary(
        replicates=sum(s.replicates for s in summaries),
        level=level,
        stability=_pool(stable, level, -1.0, 1.0) if stable else None,
        stability_note=f"not defined for {missing} of {len(summaries)} supports" if missing else "",
        prediction_loss=_pool(losses, level, 0.0, math.inf) if losses else None,
        **pooled,
    )


def _numbers(values: Any, name: str, table: BoolArray) -> FloatArray:
    array = np.asarray(values)
    if array.dtype.kind not in "fiu" or array.shape != (len(table),):
        raise InputError(
            f"{name}: {len(table)} numbers, one for each refit, are needed; found {array.dtype}"
            f" of shape {array.shape}"
        )
    if not np.isfinite(array).all():
        raise InputError(f"{name}: finite numbers are needed")
    return array.astype(np.float64)


def _stability(table: BoolArray, level: float) -> tuple[Measured | None, str]:
    found = index_and_variance(table)
    if isinstance(found, str):
        return None, found
    value, low, high = stability_interval(*found, level)
    return Measured(value=value, low=low, high=high, error=math.sqrt(found[1])), ""


def _mean(values: FloatArray, level: float, top: float = 1.0) -> Measured:
    """The mean of values from 0 to `top`."""
    error = float(values.std(ddof=1) / math.sqrt(len(values)))
    return _measured(float(values.mean()), error, normal_point(level) * error, 0.0, top)


def _ratio(loss: FloatArray, oracle: FloatArray, level: float) -> Measured | None:
    """Ratio of two means over the same refits; None where least squares has no error at all."""
    base = float(oracle.mean())
    if base <= 0:
        return None
    ratio = float(loss.mean()) / base
    error = float((loss - ratio * oracle).std(ddof=1) / math.sqrt(len(loss))) / base
    return _measured(ratio, error, normal_point(level) * error, 0.0, math.inf)


def _measured(value: float, error: float, half: float, floor: float, top: float) -> Measured:
    return Measured(
        value=value, low=max(value - half, floor), high=min(value + half, top), error=error
    )


def _pool(found: Sequence[Measured], level: float, floor: float, top: float) -> Measured:
    """Mean over supports with its interval and standard error; see `pool_summaries`."""
    k = len(found)
    values = [each.value for each in found]
    within = math.sqrt(sum(each.error**2 for each in found)) / k
    half, error = normal_point(level) * within, within
    if k > 1:
        apart = float(np.std(values, ddof=1)) / math.sqrt(k)
        half = max(half, float(stdtrit(k - 1, 0.5 + level / 2)) * apart)
        error = max(within, apart)
    return _measured(float(np.mean(values)), error, half, floor, top)


__all__ = [
    "CRITERIA", "BoolArray", "Measured", "SelectionSummary", "pool_summaries", "stability_index",
    "summarise_selection",
]  # fmt: skip
