"""The lasso under absolute loss for many responses on one set of columns.

(1/n) sum_i |y_i - a - x_i'b| + sum_j w_j |b_j| is a linear programme; its solution
interpolates as many rows as there are coefficients off zero. It is reached through
Huber's loss with a falling threshold: rho_tau / tau + w |b| differs from it by tau/2 at
most, each solution starts the next, and below some tau > 0 the rows within tau are the
interpolated ones. They and the signs then give the vertex and its dual point exactly.
Madsen et al. (1993), A finite smoothing algorithm for linear l1 estimation, SIAM J.
Optimization 3, 223-235. The gap is that of primal and dual points of the programme
itself, so nothing rests on the smoothing. Degenerate programmes, where the sets do not
settle, are solved as such (scipy's HiGHS) on the few columns that matter.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.simulation.arguments import (
    NotConvergedError,
    columns_and_responses,
    penalty_table,
    refuse_gap,
)
from scantling.simulation.huber import grown, solve_huber

SHRINK = 0.25
"""Factor from one threshold to the next."""

WARM = 0.1
"""Factor of the first threshold where there is a start."""

STEPS = 9
"""Most thresholds; below the last rounding decides. What is left is degenerate (tied rows,
dependent columns) and goes to the simplex method."""

PROGRAMMES = 50
"""Most linear programmes for one response, each with the columns the last one lacked."""


def absolute_batch(
    X: Any, Y: Any, penalty: Any, *, intercept: bool = True, tol: float = 1e-6
) -> tuple[FloatArray, FloatArray]:
    """Minimise (1/n) sum |y_r - a - X b| + sum_j penalty_j |b_j| for every response.

    Where the minimum is not unique, one of the minimisers is returned.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses.
    penalty : float or array-like, shape (R,) or (p, R)
        Positive penalties, in the units of X (those of X' sign(Y)/n).
    intercept : bool
        Whether there is an intercept; it is not penalised.
    tol : float
        Largest duality gap accepted, over the loss at the median (at zero without
        intercept).

    Returns
    -------
    coefficients : array, shape (p, R)
    intercepts : array, shape (R,)

    Raises
    ------
    InputError
        If an argument is not numeric, not finite, of the wrong shape or sign.
    NotConvergedError
        (an InputError) If the gap is not reached; it carries the gap.
    """
    columns, responses = columns_and_responses(X, Y)
    table = penalty_table(penalty, columns.shape[1], responses.shape[1])
    tol = between(tol, "tol", 0.0, 1.0)
    B, A, gaps = solve_absolute(columns, responses, table, tol=tol, intercept=intercept)
    refuse_gap(gaps, tol)
    return B, A


def solve_absolute(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    *,
    tol: float,
    intercept: bool,
    start: tuple[FloatArray, FloatArray] | None = None,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return coefficients (p, R), intercepts (R,) and gaps (R,); the trusted kernel.

    `start` holds coefficients and intercepts at a nearby penalty.
    """
    p, replicates = X.shape[1], Y.shape[1]
    weights = np.broadcast_to(weights, (p, replicates))
    A = np.median(Y, axis=0) if intercept else np.zeros(replicates)
    B, gaps = np.zeros((p, replicates)), np.zeros(replicates)
    unit = np.abs(Y - A).mean(axis=0)
    rows = np.flatnonzero(unit > 0)
    gaps[rows] = np.inf
    smooth = np.zeros((p, len(rows))), A[rows]
    tau = 0.5 * unit[rows]
    if start is not None:
        smooth, tau = (start[0][:, rows], start[1][rows]), WARM * tau
    for _ in range(STEPS):
        if not rows.size:
            break
        y, w = Y[:, rows], weights[:, rows]
        b, a, _ = solve_huber(
            X, y, w * tau, tau, tol=max(0.01 * tol, 1e-9), intercept=intercept, start=smooth
        )
        smooth = b, a
        residual = y - a - X @ b
        theta = np.clip(residual / tau, -1.0, 1.0)
        vertex, level, sharp = _vertices(X, y, w, (b, a), residual, tau, theta, intercept)
        points = [(b, a, theta), (vertex, level, sharp)]
        for coefficients, constant, dual in points:
            gap = _gap(X, y, w, coefficients, constant, dual, intercept) / unit[rows]
            better = gap < gaps[rows]
            at = rows[better]
            gaps[at], A[at] = gap[better], constant[better]
            B[:, at] = coefficients[:, better]
        go = gaps[rows] > tol
        rows, tau = rows[go], SHRINK * tau[go]
        smooth = smooth[0][:, go], smooth[1][go]
    for r in rows.tolist():
        _by_programme(X, Y[:, r] / unit[r], weights[:, r], tol, intercept, r, B, A, gaps, unit[r])
    return B, A, gaps


def _by_programme(
    X: FloatArray,
    y: FloatArray,
    weights: FloatArray,
    tol: float,
    intercept: bool,
    r: int,
    B: FloatArray,
    A: FloatArray,
    gaps: FloatArray,
    unit: float,
) -> None:
    """Improve response r, in place, by linear programmes on a growing set of columns."""
    on = np.flatnonzero(B[:, r])
    for _ in range(PROGRAMMES):
        b = np.zeros((len(weights), 1))
        b[on, 0], a, theta = _programme(X[:, on], y, weights[on], intercept)
        own = weights[:, None]
        level = np.array([a])
        gap = _gap(X, y[:, None], own, b, level, theta[:, None], intercept)[0]
        if gap < gaps[r]:
            gaps[r], B[:, r], A[r] = gap, unit * b[:, 0], unit * a
        larger = grown(on, np.abs(X.T @ theta) / len(y) / weights - 1.0, 1e-10)
        if gap <= tol or len(larger) == len(on):
            return
        on = larger


def _programme(
    X: FloatArray, y: FloatArray, weights: FloatArray, intercept: bool
) -> tuple[FloatArray, float, FloatArray]:
    """Solve one programme in b+, b-, r+, r-, a; return b, a and the dual point theta."""
    from scipy.optimize import linprog

    n, k = X.shape
    scale = 1.0 / weights
    rows = np.hstack([X * scale, -X * scale, np.eye(n), -np.eye(n), np.ones((n, 1))])
    cost = np.concatenate([np.full(2 * k, float(n)), np.ones(2 * n), [0.0]])
    bounds = [(0.0, None)] * (2 * k + 2 * n) + [(None, None) if intercept else (0.0, 0.0)]
    found = linprog(cost, A_eq=rows, b_eq=y, bounds=bounds, method="highs-ds")
    if found.x is None:
        raise NotConvergedError(
            f"penalty: the linear programme was given up ({found.message.split('.')[0]})",
            gap=np.inf,
            response=0,
        )
    b = (found.x[:k] - found.x[k : 2 * k]) * scale
    return b, float(found.x[-1]), np.asarray(found.eqlin.marginals, dtype=np.float64)


def _vertices(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    smooth: tuple[FloatArray, FloatArray],
    residual: FloatArray,
    tau: FloatArray,
    theta: FloatArray,
    intercept: bool,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return coefficients, intercepts and dual points where the inlying rows are interpolated.

    On those rows y = a + Xb for the columns off zero, and X'theta/n = w sign(b) for
    these, with theta = +-1 on the other rows. Where rows and columns differ in number
    both are taken by least squares.
    """
    n = len(Y)
    B, A, dual = smooth[0].copy(), smooth[1].copy(), theta.copy()
    for r in range(Y.shape[1]):
        on = np.flatnonzero(B[:, r])
        inlier = np.abs(residual[:, r]) <= tau[r]
        chosen = X[:, on]
        target = n * weights[on, r] * np.sign(B[on, r])
        if intercept:
            chosen = np.column_stack([np.ones(n), chosen])
            target = np.concatenate([[0.0], target])
        core = chosen[inlier]
        if not core.size:
            continue
        fit = _solve(core, Y[inlier, r])
        outer = chosen[~inlier].T @ np.sign(residual[~inlier, r])
        dual[~inlier, r] = np.sign(residual[~inlier, r])
        dual[inlier, r] = _solve(core.T, target - outer)
        if intercept:
            A[r], fit = fit[0], fit[1:]
        B[on, r] = fit
    return B, A, dual


def _solve(system: FloatArray, right: FloatArray) -> FloatArray:
    if system.shape[0] == system.shape[1]:
        try:
            return np.asarray(np.linalg.solve(system, right))
        except np.linalg.LinAlgError:
            pass
    return np.asarray(np.linalg.lstsq(system, right, rcond=None)[0])


def _gap(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    B: FloatArray,
    A: FloatArray,
    theta: FloatArray,
    intercept: bool,
) -> FloatArray:
    """Return primal less dual value, shape (R,), after shrinking theta until it is feasible."""
    if intercept:
        theta = theta - theta.mean(axis=0)
    slope = np.abs(X.T @ theta) / len(Y)
    worst = np.maximum(1.0, np.abs(theta).max(axis=0))
    worst = np.maximum(worst, (slope / weights).max(axis=0))
    primal = np.abs(Y - A - X @ B).mean(axis=0) + (weights * np.abs(B)).sum(axis=0)
    gap: FloatArray = np.abs(primal - (Y * theta).mean(axis=0) / worst)
    return gap
