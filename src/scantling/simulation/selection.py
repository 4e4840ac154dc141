"""What a set of simulated refits says about a selection: stability, power, false share.

Z is the (M, d) table of selections, one row for each refit. The stability index is
Phi = 1 - [(1/d) sum_f (M/(M-1)) p_f (1 - p_f)] / [(kbar/d)(1 - kbar/d)],
with p_f the share of refits that select column f and kbar the mean number
selected; 1 if all refits agree, 0 in mean for random selections of the same
size. Nogueira et al. (2018), On the stability of feature selection algorithms,
J. Machine Learning Research 18, 1-54.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri, stdtrit

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.core.streams import blocks
from scantling.errors import InputError

BoolArray = NDArray[np.bool_]

PIECE_CELLS = 1_000_000
"""Cells of Z turned into floats at a time (8 MB)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SelectionSummary:
    """Selection statistics of one set of refits, or averaged over several sets.

    Attributes
    ----------
    replicates : int
        Refits behind the figures.
    level : float
        Level of every interval.
    stability, stability_low, stability_high : float or None
        Stability index and its interval; None if it is not defined.
    stability_error : float or None
        Standard error of the index.
    stability_note : str
        Why the index, or part of it, is missing; empty otherwise.
    power, power_low, power_high : float
        Mean share of the relevant columns selected, 0 to 1, and its interval.
    power_error : float
        Standard error of the power.
    false_share, false_share_low, false_share_high : float
        Mean of false / max(1, selected), 0 to 1, and its interval.
    false_share_error : float
        Standard error of the false share.
    exact : float
        Share of refits that select exactly the relevant columns.
    mean_size : float
        Mean number of columns selected.
    """

    replicates: int
    """Refits summarised."""
    level: float
    """Nominal coverage of the intervals."""
    stability: float | None
    """Stability index; None where it is undefined."""
    stability_low: float | None
    """Lower end of its interval."""
    stability_high: float | None
    """Upper end of its interval."""
    stability_error: float | None
    """Its standard error."""
    stability_note: str
    """Why it is undefined; empty otherwise."""
    power: float
    """Mean share of relevant columns selected."""
    power_low: float
    """Lower end of its interval."""
    power_high: float
    """Upper end of its interval."""
    power_error: float
    """Its standard error."""
    false_share: float
    """Mean share of false columns among the selected."""
    false_share_low: float
    """Lower end of its interval."""
    false_share_high: float
    """Upper end of its interval."""
    false_share_error: float
    """Its standard error."""
    exact: float
    """Share of refits that select exactly the relevant columns."""
    mean_size: float
    """Columns selected on average."""


def stability_index(Z: Any, level: float = 0.90) -> tuple[float, float, float] | None:
    """Return the stability index of a table of selections, with its interval.

    Parameters
    ----------
    Z : array-like of bool, shape (M, d)
        Row = one refit; rows are independent.
    level : float
        Level of the interval Phi -+ z sqrt(v), cut to the range of the index,
        -1/(M-1) to 1.

    Returns
    -------
    (value, low, high), or None where the index is not defined: fewer than two
    refits, or nothing, or everything, selected in all of them.

    Raises
    ------
    InputError
        If `Z` is not a boolean table or `level` is not between 0 and 1.
    """
    found = _stability(_selections(Z, "Z"))
    level = between(level, "level", 0.0, 1.0)
    return None if isinstance(found, str) else _stability_interval(*found, level)


def summarise_selection(selected: Any, relevant: Any, *, level: float = 0.90) -> SelectionSummary:
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

    Raises
    ------
    InputError
        If the shapes, types or numbers are not as above.
    """
    table = _selections(selected, "selected")
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
    power, power_error = _mean_and_error(hits / wanted)
    false, false_error = _mean_and_error((size - hits) / np.maximum(size, 1))
    z = _normal_point(level)
    found = _stability(table)
    undefined = isinstance(found, str)
    phi = (None, None, None) if isinstance(found, str) else _stability_interval(*found, level)
    return SelectionSummary(
        replicates=len(table),
        level=level,
        stability=phi[0],
        stability_low=phi[1],
        stability_high=phi[2],
        stability_error=None if isinstance(found, str) else math.sqrt(found[1]),
        stability_note=str(found) if undefined else "",
        power=power,
        power_low=max(power - z * power_error, 0.0),
        power_high=min(power + z * power_error, 1.0),
        power_error=power_error,
        false_share=false,
        false_share_low=max(false - z * false_error, 0.0),
        false_share_high=min(false + z * false_error, 1.0),
        false_share_error=false_error,
        exact=float(np.mean((size == wanted) & (hits == wanted))),
        mean_size=float(size.mean()),
    )


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
    stable = [s for s in summaries if s.stability is not None]
    phi: tuple[float | None, ...] = (None, None, None, None)
    if stable:
        values = [float(s.stability or 0.0) for s in stable]
        errors = [float(s.stability_error or 0.0) for s in stable]
        phi = _pool(values, errors, level, -1.0)
    missing = len(summaries) - len(stable)
    power = _pool([s.power for s in summaries], [s.power_error for s in summaries], level, 0.0)
    false = _pool(
        [s.false_share for s in summaries], [s.false_share_error for s in summaries], level, 0.0
    )
    return SelectionSummary(
        replicates=sum(s.replicates for s in summaries),
        level=level,
        stability=phi[0],
        stability_low=phi[1],
        stability_high=phi[2],
        stability_error=phi[3],
        stability_note=f"not defined for {missing} of {len(summaries)} supports" if missing else "",
        power=power[0],
        power_low=power[1],
        power_high=power[2],
        power_error=power[3],
        false_share=false[0],
        false_share_low=false[1],
        false_share_high=false[2],
        false_share_error=false[3],
        exact=float(np.mean([s.exact for s in summaries])),
        mean_size=float(np.mean([s.mean_size for s in summaries])),
    )


def _selections(values: Any, name: str) -> BoolArray:
    table = np.asarray(values)
    if table.dtype != np.bool_ or table.ndim != 2 or not table.size:
        raise InputError(
            f"{name}: a table of true and false, refits by columns, is needed;"
            f" found {table.dtype} of shape {table.shape}"
        )
    return table


def _stability(table: BoolArray) -> tuple[float, float, int] | str:
    """Return the index, its variance and M, or why it is not defined.

    v = (4/M^2) sum_i (Phi_i - mean Phi)^2 with Phi_i = [(1/d) sum_f z_if p_f
    - k_i kbar/d^2 + (Phi/2)(2 kbar k_i/d^2 - k_i/d - kbar/d + 1)] / [(kbar/d)(1 - kbar/d)].
    """
    m, d = table.shape
    if m < 2:
        return "fewer than two refits"
    size = np.count_nonzero(table, axis=1)
    total = int(size.sum())
    if total == 0:
        return "no refit selects any column"
    if total == m * d:
        return "every refit selects every column"
    share: FloatArray = np.count_nonzero(table, axis=0) / m
    filled = total / (m * d)
    spread = filled * (1 - filled)
    phi = 1 - m / (m - 1) * float(share @ (1 - share)) / d / spread
    agreement = np.empty(m)
    for first, last in blocks(m, max(PIECE_CELLS // d, 1)):
        agreement[first:last] = table[first:last].astype(np.float64) @ share
    own = size / d
    each = agreement / d - own * filled + phi / 2 * (2 * filled * own - own - filled + 1)
    each /= spread
    return phi, 4 / m**2 * float(((each - each.mean()) ** 2).sum()), m


def _stability_interval(
    phi: float, variance: float, m: int, level: float
) -> tuple[float, float, float]:
    half = _normal_point(level) * math.sqrt(variance)
    return phi, max(phi - half, -1 / (m - 1)), min(phi + half, 1.0)


def _mean_and_error(values: FloatArray) -> tuple[float, float]:
    return float(values.mean()), float(values.std(ddof=1) / math.sqrt(len(values)))


def _normal_point(level: float) -> float:
    return float(ndtri(0.5 + level / 2))


def _pool(
    values: Sequence[float], errors: Sequence[float], level: float, floor: float
) -> tuple[float, float, float, float]:
    """Return mean, low, high and standard error over supports; see `pool_summaries`."""
    k = len(values)
    mean = float(np.mean(values))
    within = math.sqrt(sum(error**2 for error in errors)) / k
    half, error = _normal_point(level) * within, within
    if k > 1:
        apart = float(np.std(values, ddof=1)) / math.sqrt(k)
        half = max(half, float(stdtrit(k - 1, 0.5 + level / 2)) * apart)
        error = max(within, apart)
    return mean, max(mean - half, floor), min(mean + half, 1.0), error
