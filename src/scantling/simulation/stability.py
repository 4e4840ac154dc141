"""The stability index of a table of selections, and its interval.

Z is the (M, d) table of selections, one row for each refit. The index is
Phi = 1 - [(1/d) sum_f (M/(M-1)) p_f (1 - p_f)] / [(kbar/d)(1 - kbar/d)],
with p_f the share of refits that select column f and kbar the mean number
selected; 1 if all refits agree, 0 in mean for random selections of the same
size. Nogueira et al. (2018), On the stability of feature selection algorithms,
J. Machine Learning Research 18, 1-54.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.core.streams import blocks
from scantling.errors import InputError

BoolArray = NDArray[np.bool_]

PIECE_CELLS = 1_000_000
"""Cells of Z turned into floats at a time (8 MB)."""


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
    found = index_and_variance(selections(Z, "Z"))
    level = between(level, "level", 0.0, 1.0)
    return None if isinstance(found, str) else stability_interval(*found, level)


def selections(values: Any, name: str) -> BoolArray:
    """Return a table of selections, checked.

    Raises
    ------
    InputError
        If it is not a table of true and false.
    """
    table = np.asarray(values)
    if table.dtype != np.bool_ or table.ndim != 2 or not table.size:
        raise InputError(
            f"{name}: a table of true and false, refits by columns, is needed;"
            f" found {table.dtype} of shape {table.shape}"
        )
    return table


def index_and_variance(table: BoolArray) -> tuple[float, float, int] | str:
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


def stability_interval(
    phi: float, variance: float, m: int, level: float
) -> tuple[float, float, float]:
    """Return the index with the ends of its interval, cut to its range."""
    half = normal_point(level) * math.sqrt(variance)
    return phi, max(phi - half, -1 / (m - 1)), min(phi + half, 1.0)


def normal_point(level: float) -> float:
    """Return the normal quantile behind a two-sided interval of a level."""
    return float(ndtri(0.5 + level / 2))
