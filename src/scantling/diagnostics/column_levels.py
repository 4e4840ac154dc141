"""How much of a column's level is left one row later: near 1 it is hardly told from a random walk.

The score of such a column varies by the long-run factor 1 + 2 sum_k rho_x(k) rho_e(k) where the
errors persist as well: two random walks look related however many rows there are (Granger et al.
(1974), Journal of Econometrics 2, 111-120).
"""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.autoregression import NEAR_UNIT_ROOT
from scantling.diagnostics.structure import column_blocks, standardised


def first_autocorrelations(X: FloatArray) -> FloatArray:
    """Autocorrelation of each column from one row to the next.

    sum_t x_t x_(t-1) / sum_t x_t^2 of the centred column, which a mean that is estimated pulls
    down by about (1 + 4 rho)/n: Kendall (1954), Biometrika 41, 403-404 (from memory).

    Parameters
    ----------
    X : array, shape (n, P)
        Columns that vary, in time order.

    Returns
    -------
    array, shape (P,)
        Between -1 and 1, read-only.

    Raises
    ------
    InputError
        If a column is constant.
    """
    out = np.empty(X.shape[1])
    for start, stop in column_blocks(X):
        part = standardised(X[:, start:stop], "X", start)
        out[start:stop] = np.einsum("ij,ij->j", part[1:], part[:-1]) / len(part)
    return read_only(out)


def near_random_walks(autocorrelations: FloatArray) -> tuple[int, ...]:
    """Columns that keep 95 % or more of their level, in order."""
    return tuple(int(j) for j in np.flatnonzero(autocorrelations >= NEAR_UNIT_ROOT))
