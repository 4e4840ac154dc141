"""The lasso for many responses along a falling grid of penalties.

Each penalty starts where the last one ended. On an unchanged set of columns and
signs the solution is linear in the penalty: `path_block` keeps, for every
response, the inverse Gram matrix of its active columns, and changes it as columns
come and go. Where that does not do (columns that nearly depend on each other, very
large sets, more columns than a Gram matrix is made for, a very short grid) the
general method takes over: a solve on the old working sets, which is nearly always
close, and a pass over all columns that confirms it or lets columns in.
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
from scantling.simulation.active_set import BoolArray
from scantling.simulation.arguments import NotConvergedError, as_table, columns_and_responses
from scantling.simulation.lasso import BLOCK_CELLS, settle
from scantling.simulation.path_block import PathBlock, SharedColumns
from scantling.simulation.working_set import IndexArray, Problem, WorkingSets

GRAM_COLUMNS = 2500
"""Most columns of which the whole of X'X is made (50 MB)."""

GROUP_CELLS = 200_000
"""Cells of the gradients of responses that go down their grids in step (to stay in cache)."""

FEWEST_POINTS = 4
"""Penalties from which kept inverses are worth their start."""

LARGEST_SET = 400
"""Most columns of one response for which an inverse is kept."""

USUAL_RESPONSES = 400
"""Responses for which the kept inverses of one block are given room."""

INVERSE_CELLS = 64_000_000
"""Largest number of cells of all kept inverses of a block (512 MB)."""


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
    # Columns of one length often differ in it by rounding only.
    even = bool(np.ptp(factor) <= 1e-14 * factor[0, 0])
    gram: FloatArray | None = None
    shared: SharedColumns | None = None
    if p <= GRAM_COLUMNS:
        gram = columns.T @ columns
        gram /= n
        if len(grid) >= FEWEST_POINTS:
            shared = SharedColumns(columns, gram, tol)
    most = max(BLOCK_CELLS // p, 16)
    # The same for all batches of a usual size: what happens to a response is its own affair.
    together = max(USUAL_RESPONSES, min(most, Y.shape[1]))
    largest = int(min(LARGEST_SET, (INVERSE_CELLS / together) ** 0.5))
    if shared is not None and out is not None:
        most, largest = _group_size(p), LARGEST_SET
    for first, last in blocks(Y.shape[1], most):
        own = factor[:1, :1] if even else factor[:, first:last] if factor.shape[1] > 1 else factor
        level = grid[:, None, first:last]
        y = Y[:, first:last]
        slow = SlowRows(columns, y, gram, scale)
        groups = (
            [] if shared is None else _groups(shared, y, own, level[0, 0], tol=tol, most=largest)
        )
        for step in range(len(level)):
            gaps = np.zeros(last - first)
            if out is None:
                coefficients = np.zeros((last - first, p)).T
            else:
                coefficients = out[step, :, first:last]
            stuck = np.full(last - first, shared is None)
            for rows, group in groups:
                group.advance(level[step, 0, rows])
                group.write(coefficients.T, rows, scale)
                gaps[rows] = group.gaps
                stuck[rows] = group.failed
            # The gradient moves about as fast as the penalty: the strong rule.
            after = level[min(step + 1, len(level) - 1)]
            ahead = np.maximum(2 * after - level[step], 0.0) * own
            slow.advance(np.flatnonzero(stuck), level[step] * own, ahead, tol, coefficients, gaps)
            yield step, first, last, coefficients, gaps


def _group_size(p: int) -> int:
    return max(min(GROUP_CELLS // p, 1024), 64)


def _groups(
    shared: SharedColumns,
    Y: FloatArray,
    own: FloatArray,
    first: FloatArray,
    *,
    tol: float,
    most: int,
) -> list[tuple[IndexArray, PathBlock]]:
    """Return the responses that are not zero, in groups that go down their grids in step.

    `own` are factors of the penalties, shape (1, 1), (p, 1) or (p, R), `first` the first
    penalties and `most` the largest set of columns.
    """
    rows = np.flatnonzero(Y.any(axis=0))
    # A column of zeros never enters, whatever its weight.
    zero = np.logical_not(shared.double.any(axis=0))
    if own.shape != (1, 1) and zero.any():
        own = np.where(zero[:, None], 1.0, own)
    groups = []
    for begin, end in blocks(len(rows), _group_size(shared.p)):
        some = rows[begin:end]
        weights = own.T if own.shape[1] == 1 else np.ascontiguousarray(own[:, some].T)
        block = PathBlock(shared, Y[:, some], weights, first[some], tol=tol, most=most)
        groups.append((some, block))
    return groups


class SlowRows:
    """The responses of one block that need the general method, one penalty at a time.

    Those that come together stay together: what happens to one response never
    depends on when others come.
    """

    def __init__(
        self, X: FloatArray, Y: FloatArray, gram: FloatArray | None, scale: FloatArray
    ) -> None:
        self.X, self.Y, self.gram, self.scale = X, Y, gram, scale
        self.member: BoolArray = np.zeros(Y.shape[1], dtype=np.bool_)
        self.groups: list[tuple[IndexArray, WorkingSets]] = []

    def advance(
        self,
        rows: IndexArray,
        weights: FloatArray,
        ahead: FloatArray,
        tol: float,
        coefficients: FloatArray,
        gaps: FloatArray,
    ) -> None:
        """Take on what is new of `rows`, solve all and fill in their coefficients and gaps.

        `weights` and `ahead` are as in `settle`, for all responses of the block.
        """
        fresh = rows[~self.member[rows]]
        for members, sets in self.groups:
            sets.resume(weights[:, members])
            self._settle(members, sets, ahead, tol, coefficients, gaps, solve_first=True)
        if fresh.size:
            self.member[fresh] = True
            y = self.Y[:, fresh]
            problem = Problem(self.X, y, weights[:, fresh], self.gram, self.scale)
            self.groups.append((fresh, WorkingSets(problem, None)))
            self._settle(*self.groups[-1], ahead, tol, coefficients, gaps, solve_first=False)

    def _settle(
        self,
        rows: IndexArray,
        sets: WorkingSets,
        ahead: FloatArray,
        tol: float,
        coefficients: FloatArray,
        gaps: FloatArray,
        *,
        solve_first: bool,
    ) -> None:
        if len(rows) == len(self.member):
            settle(sets, tol, coefficients, gaps, solve_first=solve_first, ahead=ahead)
            return
        own, attained = np.zeros((len(coefficients), len(rows))), np.zeros(len(rows))
        settle(sets, tol, own, attained, solve_first=solve_first, ahead=ahead[:, rows])
        coefficients[:, rows], gaps[rows] = own, attained


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
