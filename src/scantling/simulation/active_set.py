"""Many small lasso problems at once, each on its own few columns.

Every problem is min_b b'Gb/2 - c'b + sum_j w_j |b_j| with G of unit diagonal,
given by the gradient g = c - G a at the point a it starts from: a gradient taken
from residuals is then refined, not recomputed, where columns nearly depend.
The method is the feature-sign search: on a guessed set of signs the problem is
a linear system; a step that would change signs is cut by an exact line search,
so the objective falls at every step and the search ends after finitely many.
All problems take their steps together in one batched solve.
Lee et al. (2007), Efficient sparse coding algorithms, Advances in Neural
Information Processing Systems 19, 801-808.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dposv

from scantling.core.record import FloatArray

BoolArray = NDArray[np.bool_]

RIDGE = 1e-12
"""Added to the unit diagonal so that dependent columns can be solved for.

The step is a correction to the present point, so the ridge slows a nearly
singular direction but does not move the solution. It has to exceed the
rounding of a Gram matrix, about 1e-15 times its order."""

PACKED_ABOVE = 40
"""Order above which a system is solved alone on its active columns, not padded in a stack."""

CAUTIOUS_AFTER = 60
"""Steps after which violating columns enter one at a time, as in the textbook."""


def solve_together(
    gram: FloatArray,
    slopes: FloatArray,
    weights: FloatArray,
    start: FloatArray,
    slack: FloatArray,
) -> tuple[FloatArray, BoolArray]:
    """Solve R lasso problems of K columns each.

    Parameters
    ----------
    gram : array, shape (R, K, K)
        Symmetric, non-negative definite, unit diagonal. A padded column has an
        identity row, zero slope and weight one.
    slopes, weights, start : array, shape (R, K)
        c - G start, w > 0 and the point to start from.
    slack : array, shape (R,)
        Violation of the optimality conditions that is left alone, in units of c.

    Returns
    -------
    coefficients : array, shape (R, K)
    settled : array of bool, shape (R,)
        Whether the optimality conditions hold within the slack.
    """
    coefficients = start.copy()
    settled = np.zeros(len(gram), dtype=np.bool_)
    rows = np.arange(len(gram))
    b = start.copy()
    gradient = slopes.copy()
    signs = np.sign(b)
    _admit(signs, gradient, weights, slack, np.full(len(gram), True), single=False)
    for step in range(100 + 4 * gram.shape[1]):
        b, signs, full = _step(gram, weights, b, signs, gradient)
        gradient = slopes - _apply(gram, b - start)
        still = np.abs(gradient - weights * signs) <= slack[:, None]
        stationary = full & (still | (signs == 0)).all(axis=1)
        grew = _admit(signs, gradient, weights, slack, stationary, single=step >= CAUTIOUS_AFTER)
        done = stationary & ~grew
        if done.any():
            coefficients[rows[done]] = b[done]
            settled[rows[done]] = True
            go = ~done
            rows, b, signs, gradient = rows[go], b[go], signs[go], gradient[go]
            gram, slopes, weights = gram[go], slopes[go], weights[go]
            start, slack = start[go], slack[go]
        if not rows.size:
            break
    coefficients[rows] = b
    return coefficients, settled


def sweep_together(
    gram: FloatArray, slopes: FloatArray, weights: FloatArray, start: FloatArray, sweeps: int
) -> tuple[FloatArray, FloatArray]:
    """Return the point, and the gradient there, after cyclic coordinate descent.

    All R problems go side by side. For the few problems whose sign search has not
    settled: slower, but each update lowers the objective whatever the rounding.
    Shapes as in `solve_together`. Friedman et al. (2007), Pathwise coordinate
    optimization, Annals of Applied Statistics 1, 302-332.
    """
    b = start.copy()
    gradient = slopes.copy()
    for _ in range(sweeps):
        for k in range(gram.shape[1]):
            pull = gradient[:, k] + b[:, k]
            fresh = np.sign(pull) * np.maximum(np.abs(pull) - weights[:, k], 0.0)
            change = fresh - b[:, k]
            if change.any():
                gradient -= change[:, None] * gram[:, k]
                b[:, k] = fresh
    return b, slopes - _apply(gram, b - start)


def _apply(gram: FloatArray, b: FloatArray) -> FloatArray:
    product: FloatArray = np.matmul(gram, b[:, :, None])[:, :, 0]
    return product


def _step(
    gram: FloatArray,
    weights: FloatArray,
    b: FloatArray,
    signs: FloatArray,
    gradient: FloatArray,
) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Move every problem once; the last item says where the whole step was taken."""
    active = signs != 0
    wanted = np.where(active, gradient - weights * signs, 0.0)
    move = _solve_active(gram, active, wanted)
    target = b + move
    wrong = target * signs < 0
    # A column at zero that would leave it against its sign was let in too early:
    # it is taken out again and the problem stays where it is for this step.
    early = wrong & (b == 0)
    hasty = early.any(axis=1)
    cut = wrong.any(axis=1) & ~hasty
    full = ~hasty & ~cut
    b = np.where(full[:, None], target, b)
    if cut.any():
        b[cut] = _line_search(b[cut], move[cut], wanted[cut], weights[cut], wrong[cut])
    signs = np.where(hasty[:, None], np.where(early, 0.0, signs), np.sign(b))
    return b, signs, full


def _solve_active(gram: FloatArray, active: BoolArray, wanted: FloatArray) -> FloatArray:
    """Solve (G + RIDGE) move = wanted on the active columns; the others do not move."""
    if gram.shape[1] > PACKED_ABOVE:
        move = np.zeros_like(wanted)
        for r in range(len(gram)):
            on = np.flatnonzero(active[r])
            if on.size:
                system = gram[r].ravel().take(on[:, None] * gram.shape[1] + on)
                system.flat[:: on.size + 1] += RIDGE
                move[r, on] = _solve_one(system, wanted[r, on])
        return move
    system = gram * (active[:, :, None] & active[:, None, :])
    diagonal = np.arange(gram.shape[1])
    system[:, diagonal, diagonal] = 1.0 + RIDGE
    solved = np.linalg.solve(system, wanted[:, :, None])[:, :, 0]
    return np.where(active, solved, 0.0)


def _solve_one(system: FloatArray, wanted: FloatArray) -> FloatArray:
    """Solve one positive definite system; rounding may have made it slightly indefinite."""
    # The transpose is the same matrix in the order LAPACK wants; only half of it is spoilt.
    diagonal = system.diagonal().copy()
    _, solution, fault = dposv(system.T, wanted, lower=True, overwrite_a=True)
    if fault == 0:
        return np.asarray(solution, dtype=np.float64)
    whole = np.tril(system, -1)
    return np.asarray(np.linalg.solve(whole + whole.T + np.diag(diagonal), wanted))


def _line_search(
    b: FloatArray, move: FloatArray, wanted: FloatArray, weights: FloatArray, wrong: BoolArray
) -> FloatArray:
    """Return the exact minimiser of each objective on the segment from b to b + move.

    Along the segment the slope is curvature * (t - 1), plus 2 w_j |move_j| for
    every column whose sign has changed. After i changes it vanishes at h_i, and
    the minimiser is the least max(t_i, h_i), with t_i the i-th change.
    """
    change = np.full(b.shape, np.inf)
    np.divide(-b, move, out=change, where=wrong)
    order = np.argsort(change, axis=1, kind="stable")
    times = np.take_along_axis(change, order, axis=1)
    jumps = np.where(wrong, 2.0 * weights * np.abs(move), 0.0)
    raised = np.cumsum(np.take_along_axis(jumps, order, axis=1), axis=1)
    curvature = np.maximum((move * wanted).sum(axis=1), np.finfo(float).tiny)
    levels = np.maximum(times, 1.0 - raised / curvature[:, None])
    length = np.minimum(levels.min(axis=1), 1.0)
    moved = b + length[:, None] * move
    moved[change == length[:, None]] = 0.0
    return moved


def _admit(
    signs: FloatArray,
    gradient: FloatArray,
    weights: FloatArray,
    slack: FloatArray,
    where: BoolArray,
    *,
    single: bool,
) -> BoolArray:
    """Give a sign, in place, to violating columns at zero; say which problems grew."""
    excess = np.where(signs == 0, np.abs(gradient) - weights - slack[:, None], 0.0)
    least = excess.max(axis=1, keepdims=True) if single else 0.0
    excess[~where] = 0.0
    enters = (excess > 0) & (excess >= least)
    signs[enters] = np.sign(gradient[enters])
    return np.asarray(enters.any(axis=1), dtype=np.bool_)
