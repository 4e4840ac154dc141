"""The lasso for many responses along a falling grid of penalties.

Each penalty starts where the last one ended. On an unchanged set of columns and
signs the solution is linear in the penalty, so one solve on the old working
sets is nearly always close; a pass over all columns then confirms it or lets
columns in. The products X'X_W of columns that were ever in a set are kept for
the whole grid, so late penalties need no pass over the rows.
Friedman et al. (2010), Regularization paths for generalized linear models via
coordinate descent, J. Statistical Software 33, 1-22 (the grid and the warm
starts); Efron et al. (2004), Least angle regression, Annals of Statistics 32,
407-499 (the solution is piecewise linear).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from scantling.core.checks import between, finite_matrix
from scantling.core.record import FloatArray
from scantling.core.streams import MEMORY_BOUND, blocks
from scantling.errors import InputError
from scantling.simulation.arguments import NotConvergedError, as_table, columns_and_responses
from scantling.simulation.lasso import BLOCK_CELLS, settle
from scantling.simulation.working_set import Problem, WorkingSets

GRAM_COLUMNS = 2500
"""Most columns of which the whole of X'X is made (50 MB)."""


def lasso_path_batch(X: Any, Y: Any, penalties: Any, *, tol: float = 1e-6) -> FloatArray:
    """Minimise (1/2n) ||y_r - X b||^2 + penalty ||b||_1 for every response and penalty.

    There is no intercept: centre X and Y first if one is wanted.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses.
    penalties : array-like, shape (L,) or (L, R)
        Positive penalties, in the units of X'Y/n, none larger than the one before.
    tol : float
        Largest duality gap accepted at every penalty, over ||y_r||^2 / (2n).

    Returns
    -------
    array, shape (L, p, R)
        Coefficients.

    Raises
    ------
    InputError
        If an argument is not numeric, not finite, of the wrong shape or order, or
        the answer would not fit in memory (then use `walk_path`).
    NotConvergedError
        (an InputError) If the gap is not reached; it carries the gap.
    """
    columns, responses = columns_and_responses(X, Y)
    tol = between(tol, "tol", 0.0, 1.0)
    grid = _grid(penalties, responses.shape[1])
    shape = len(grid), columns.shape[1], responses.shape[1]
    if 8 * shape[0] * shape[1] * shape[2] > MEMORY_BOUND // 2:
        raise InputError(
            f"penalties: {shape[0]} penalties by {shape[1]} columns by {shape[2]} responses do not"
            f" fit in {MEMORY_BOUND // 2**21} MB; fewer of either are needed"
        )
    # Laid out by response, which is how the solver writes; the caller sees (L, p, R).
    out = np.zeros((shape[0], shape[2], shape[1])).transpose(0, 2, 1)
    for step, first, _, _, gaps in walk_path(columns, responses, grid, tol=tol, out=out):
        worst = int(np.argmax(gaps))
        if not gaps[worst] <= tol:
            raise NotConvergedError(
                f"penalties: response {first + worst + 1} at penalty {step + 1} reached a duality"
                f" gap of {gaps[worst]:.3g}; {tol:.3g} is asked for;"
                " larger penalties or a larger tol are needed",
                gap=float(gaps[worst]),
                response=first + worst,
            )
    return out


def walk_path(
    X: FloatArray,
    Y: FloatArray,
    grid: FloatArray,
    *,
    tol: float,
    loadings: FloatArray | None = None,
    out: FloatArray | None = None,
) -> Iterator[tuple[int, int, int, FloatArray, FloatArray]]:
    """Yield the solutions one penalty at a time; the trusted kernel.

    Parameters
    ----------
    X, Y : array, shapes (n, p) and (n, R)
        Finite float64 arrays.
    grid : array, shape (L, R)
        Positive penalties, falling.
    tol : float
        Duality gap over ||y_r||^2 / (2n).
    loadings : array, shape (p,) or (p, R), optional
        Factors of the penalty by column, and by response.
    out : array of zeros, shape (L, p, R), optional
        Where the coefficients are to be put; otherwise each step has an array of its own.

    Yields
    ------
    step, first, last, coefficients, gaps
        Number of the penalty; the responses first..last-1 that this is about;
        their coefficients, shape (p, last - first), and gaps.
    """
    n, p = X.shape
    scale = np.sqrt(np.einsum("ij,ij->j", X, X) / n)
    scale[scale == 0] = 1.0
    columns = X / scale
    factor = (1.0 if loadings is None else loadings) / (
        scale if loadings is None or loadings.ndim == 1 else scale[:, None]
    )
    if factor.ndim == 1:
        factor = factor[:, None]
    even = bool((factor == factor[0, 0]).all())
    gram = columns.T @ (columns / n) if p <= GRAM_COLUMNS else None
    for first, last in blocks(Y.shape[1], max(BLOCK_CELLS // p, 16)):
        own = factor[:1, :1] if even else factor[:, first:last] if factor.shape[1] > 1 else factor
        level = grid[:, None, first:last]
        problem = Problem(columns, Y[:, first:last], level[0] * own, gram, scale)
        sets = WorkingSets(problem, None)
        for step in range(len(level)):
            gaps = np.zeros(last - first)
            coefficients = np.zeros((p, last - first)) if out is None else out[step, :, first:last]
            sets.resume(level[step] * own)
            # The gradient moves about as fast as the penalty: the strong rule.
            after = level[min(step + 1, len(level) - 1)]
            ahead = np.maximum(2 * after - level[step], 0.0) * own
            settle(sets, tol, coefficients, gaps, solve_first=step > 0, ahead=ahead)
            yield step, first, last, coefficients, gaps


def _grid(penalties: Any, replicates: int) -> FloatArray:
    """Return the penalties as an array of shape (L, R), checked."""
    grid = finite_matrix(as_table(penalties), "penalties")
    if grid.shape[1] not in (1, replicates):
        raise InputError(
            f"penalties: one column or {replicates} (one per response) are needed;"
            f" found {grid.shape[1]}"
        )
    if not (grid > 0).all():
        raise InputError(f"penalties: positive numbers are needed; found {grid[~(grid > 0)][0]}")
    rises = np.argwhere(np.diff(grid, axis=0) > 0)
    if rises.size:
        raise InputError(
            f"penalties: none may be larger than the one before; number {rises[0][0] + 2} is"
        )
    return np.broadcast_to(grid, (len(grid), replicates))
