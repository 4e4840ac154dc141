"""The lasso for many responses on one set of columns, to a stated duality gap.

In simulation the columns stay and the errors change, so almost all the work is
shared. One matrix product gives every score; each response then has its own
small working set, solved by `active_set` on pieces of a Gram matrix of only the
columns that are in some working set; one pass over all columns checks the
optimality conditions, gives the gap and finds the columns that must be added.

The gap is that of the dual point min(1, min_j w_j / |g_j|) * residual, with
g = X'residual/n, written without the difference of two large numbers:
(1 - s)^2 ||r||^2/(2n) + sum_j (w_j |b_j| - s b_j g_j). Fercoq et al. (2015),
Mind the duality gap: safer rules for the lasso, ICML, 333-342.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.core.streams import blocks
from scantling.errors import InputError
from scantling.simulation.arguments import NotConvergedError, columns_and_responses
from scantling.simulation.working_set import Problem, WorkingSets

BLOCK_CELLS = 4_000_000
"""Largest p times responses handled at once: about 32 MB for each array of that shape."""

ENTER_AT_ONCE = 16
"""Columns that may enter a small working set in one round."""

ROUNDS = 120
"""Most rounds of solving and checking; common problems need two."""


def lasso_batch(X: Any, Y: Any, penalty: Any, *, tol: float = 1e-6) -> FloatArray:
    """Minimise (1/2n) ||y_r - X b||^2 + penalty_r ||b||_1 for every response y_r.

    There is no intercept: centre X and Y first if one is wanted.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses; one dimension is read as one response.
    penalty : float or array-like, shape (R,)
        Penalties, 0 or more, in the units of X'Y/n. With penalty 0 the answer is
        least squares, of least norm where columns depend on each other.
    tol : float
        Largest duality gap accepted, over ||y_r||^2 / (2n), between 0 and 1.
        Below about 1e-13 rounding decides.

    Returns
    -------
    array, shape (p, R)
        Coefficients. Columns are zero for a response that is zero.

    Raises
    ------
    InputError
        If an argument is not numeric, not finite, of the wrong shape, too large
        or small to be squared, or negative where it may not be.
    NotConvergedError
        (an InputError) If the gap is not reached; it carries the gap.
    """
    columns, responses = columns_and_responses(X, Y)
    tol = between(tol, "tol", 0.0, 1.0)
    penalties = _penalties(penalty, responses.shape[1])
    coefficients = np.zeros((columns.shape[1], responses.shape[1]))
    gaps = np.zeros(responses.shape[1])
    free = penalties == 0
    if free.any():
        coefficients[:, free], gaps[free] = _least_squares(columns, responses[:, free])
    if not free.any():
        coefficients, gaps = solve_batch(columns, responses, penalties, tol=tol)
    elif not free.all():
        coefficients[:, ~free], gaps[~free] = solve_batch(
            columns, responses[:, ~free], penalties[~free], tol=tol
        )
    worst = int(np.argmax(gaps))
    if not gaps[worst] <= tol:
        raise NotConvergedError(
            f"penalty: response {worst + 1} with penalty {penalties[worst]:.6g} reached a duality"
            f" gap of {gaps[worst]:.3g}; {tol:.3g} is asked for; a larger penalty or tol is needed",
            gap=float(gaps[worst]),
            response=worst,
        )
    return coefficients


def solve_batch(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray | float,
    *,
    tol: float,
    start: FloatArray | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Solve the lasso with a penalty for each column and response; the trusted kernel.

    Parameters
    ----------
    X, Y : array, shapes (n, p) and (n, R)
        Finite float64 arrays.
    weights : float or array, shape (R,) or (p, R)
        Penalties, positive except for columns that are zero throughout.
    tol : float
        Duality gap over ||y_r||^2 / (2n) at which a response is left alone.
    start : array, shape (p, R), optional
        Coefficients to start from, such as those at a nearby penalty; mostly zero,
        as every column that is not is solved for.

    Returns
    -------
    coefficients : array, shape (p, R)
    gaps : array, shape (R,)
        Attained gaps, over ||y_r||^2 / (2n); the caller decides what to do with
        one above `tol`.
    """
    p, replicates = X.shape[1], Y.shape[1]
    table = np.asarray(weights, dtype=np.float64)
    if table.ndim < 2:
        table = np.broadcast_to(table, (replicates,))[None, :]
    coefficients = np.zeros((p, replicates))
    gaps = np.zeros(replicates)
    for first, last in blocks(replicates, max(BLOCK_CELLS // p, 16)):
        problem = Problem(X, Y[:, first:last], table[:, first:last])
        given = None if start is None else start[:, first:last]
        sets = WorkingSets(problem, given)
        settle(sets, tol, coefficients[:, first:last], gaps[first:last])
    return coefficients, gaps


def settle(
    sets: WorkingSets,
    tol: float,
    coefficients: FloatArray,
    gaps: FloatArray,
    *,
    solve_first: bool = False,
    ahead: FloatArray | None = None,
) -> None:
    """Solve every response of a block and fill its coefficients and gaps.

    With `solve_first` the sets are solved before they are first checked: right where
    they hold the answer at a nearby penalty and the gradients there. `ahead` is the
    strength at which columns enter a finished set, for the next penalty.
    """
    power = sets.problem.power
    open_rows = np.flatnonzero(power > 0)
    if not open_rows.size:
        return
    slack = np.full(len(power), max(min(1e-9, 0.01 * tol), 1e-15))
    stalled = np.zeros(len(power), dtype=np.int64)
    best = np.full(len(power), np.inf)
    if solve_first:
        sets.solve(open_rows, slack, rescue=stalled > 1)
    for _ in range(ROUNDS):
        exact = bool((stalled[open_rows] > 0).any())
        objective, gap, grew = sets.check(
            open_rows, slack, size=ENTER_AT_ONCE, exact=exact, tol=tol, ahead=ahead
        )
        # Rounding can hold a response up; it is given up after a few such rounds.
        stalled[open_rows] += ~grew | (objective >= best[open_rows])
        slack[open_rows[~grew]] *= 0.01
        best[open_rows] = np.minimum(best[open_rows], objective)
        gaps[open_rows] = gap
        finished = (gap <= tol) | (stalled[open_rows] > 5)
        sets.release(open_rows[finished], coefficients)
        open_rows = open_rows[~finished]
        if not open_rows.size:
            return
        sets.solve(open_rows, slack, rescue=stalled > 1)
    _, gap, _ = sets.check(open_rows, slack, size=0, exact=True)
    gaps[open_rows] = gap
    sets.release(open_rows, coefficients)


def _penalties(penalty: Any, replicates: int) -> FloatArray:
    """Return the penalties as an array of shape (R,), checked."""
    try:
        array: FloatArray = np.asarray(penalty, dtype=np.float64)
    except (TypeError, ValueError) as fault:
        raise InputError(f"penalty: numbers are needed; found {type(penalty).__name__}") from fault
    if array.ndim > 1 or (array.ndim == 1 and array.size != replicates):
        raise InputError(
            f"penalty: one number or {replicates} of them (one per response) are needed;"
            f" found shape {array.shape}"
        )
    bad = array[~(np.isfinite(array) & (array >= 0))]
    if bad.size:
        raise InputError(f"penalty: finite numbers of 0 or more are needed; found {bad[0]}")
    return np.broadcast_to(array, (replicates,))


def _least_squares(X: FloatArray, Y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return least-squares coefficients of least norm and what the fit still misses.

    The gap is the squared length of the residual's projection on the columns,
    which is zero at a minimum, over ||y||^2.
    """
    scale = np.sqrt((X**2).mean(axis=0))
    scale[scale == 0] = 1.0
    left, values, right = np.linalg.svd(X / scale, full_matrices=False)
    keep = values > values[0] * max(X.shape) * np.finfo(float).eps
    left, values, right = left[:, keep], values[keep], right[keep]
    coefficients = (right.T @ ((left.T @ Y) / values[:, None])) / scale[:, None]
    missed = ((left.T @ (Y - X @ coefficients)) ** 2).sum(axis=0)
    power = (Y**2).sum(axis=0)
    return coefficients, np.divide(missed, power, out=np.zeros_like(missed), where=power > 0)
