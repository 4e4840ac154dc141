"""The lasso under Huber's loss for many responses on one set of columns.

(1/n) sum_i rho(y_i - a - x_i'b) + sum_j w_j |b_j|, rho(r) = r^2/2 for |r| <= tau and
tau |r| - tau^2/2 beyond. One matrix product over all open responses gives every
score; each response has a small working set, solved by `robust_fit`. The dual point is
theta = s (psi(r) - mean), s the largest factor up to 1 with |x_j'theta|/n <= w_j and
|theta_i| <= tau; its value is (1/n) sum (y_i theta_i - theta_i^2/2).
Sun et al. (2020), Adaptive Huber regression, J. American Statistical Association
115, 254-265 (the estimator).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.simulation.arguments import (
    columns_and_responses,
    penalty_table,
    per_response,
    refuse_gap,
)
from scantling.simulation.robust_fit import fit_huber

ENTER_AT_ONCE = 16
"""Columns that may enter a small working set in one round."""

ROUNDS = 60
"""Most rounds of solving and checking."""


def huber_batch(
    X: Any, Y: Any, penalty: Any, *, tau: Any, intercept: bool = True, tol: float = 1e-6
) -> tuple[FloatArray, FloatArray]:
    """Minimise (1/n) sum rho_tau(y_r - a - X b) + sum_j penalty_j |b_j| for every response.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses.
    penalty : float or array-like, shape (R,) or (p, R)
        Positive penalties, in the units of X'Y/n.
    tau : float or array-like, shape (R,)
        Threshold of the loss, in the units of Y; beyond the largest residual it is
        the lasso.
    intercept : bool
        Whether there is an intercept; it is not penalised.
    tol : float
        Largest duality gap accepted, over the loss of the best constant (of zero
        without intercept), taken at the median.

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
    thresholds = per_response(tau, "tau", responses.shape[1])
    tol = between(tol, "tol", 0.0, 1.0)
    B, A, gaps = solve_huber(columns, responses, table, thresholds, tol=tol, intercept=intercept)
    refuse_gap(gaps, tol)
    return B, A


def solve_huber(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    tau: FloatArray,
    *,
    tol: float,
    intercept: bool,
    start: tuple[FloatArray, FloatArray] | None = None,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return coefficients (p, R), intercepts (R,) and gaps (R,); the trusted kernel.

    `weights` is (1, R) or (p, R), `tau` (R,); `start` coefficients and intercepts to
    start from.
    """
    (n, p), replicates = X.shape, Y.shape[1]
    scale = np.sqrt(np.einsum("ij,ij->j", X, X) / n)
    usable = scale > 0
    scale[~usable] = 1.0
    Z = X / scale
    weights = np.broadcast_to(weights, (p, replicates)) / scale[:, None]
    middle = np.median(Y, axis=0) if intercept else np.zeros(replicates)
    unit = huber_loss(Y - middle, tau)
    B, A = np.zeros((p, replicates)), middle.copy()
    if start is not None:
        B, A = start[0] * scale[:, None], start[1].copy()
    gaps = np.zeros(replicates)
    rows = np.flatnonzero(unit > 0)
    sets = [np.flatnonzero(B[:, r]) for r in range(replicates)]
    size = np.minimum(tau, np.sqrt(2 * unit))
    rounding = 1e-15 * np.sqrt((Y**2).mean(axis=0))
    slack = np.maximum(max(min(1e-7, 0.1 * tol), 1e-13) * size, rounding)
    R = Y - A - Z @ B
    for turn in range(ROUNDS):
        gap, slope = huber_gap(
            Z, Y[:, rows], R[:, rows], B[:, rows], weights[:, rows], tau[rows], intercept
        )
        gaps[rows] = gap / unit[rows]
        rest = gaps[rows] > tol
        rows, slope = rows[rest], slope[:, rest]
        if not rows.size or turn == ROUNDS - 1:
            break
        for place, r in enumerate(rows.tolist()):
            before = len(sets[r])
            sets[r] = grown(sets[r], np.abs(slope[:, place]) - weights[:, r], slack[r])
            if turn and len(sets[r]) == before:
                slack[r] = max(0.01 * slack[r], 0.1 * rounding[r])
            _solve_one(Z, Y, weights, tau, r, sets, B, A, R, slack[r], intercept)
    return B / scale[:, None], A, gaps


def _solve_one(
    Z: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    tau: FloatArray,
    r: int,
    sets: list[Any],
    B: FloatArray,
    A: FloatArray,
    R: FloatArray,
    slack: float,
    intercept: bool,
) -> None:
    """Solve response r on its set, in place; columns that end at zero leave it."""
    on = sets[r]
    chosen, w, b = Z[:, on], weights[on, r], B[on, r]
    if intercept:
        chosen = np.column_stack([np.ones(len(Z)), chosen])
        w, b = np.concatenate([[0.0], w]), np.concatenate([[A[r]], b])
    b, R[:, r] = fit_huber(chosen, Y[:, r], w, float(tau[r]), b, slack)
    if intercept:
        A[r], b = b[0], b[1:]
    B[on, r] = b
    sets[r] = on[b != 0]


def grown(members: Any, excess: FloatArray, slack: float) -> Any:
    """Return the set with its strongest violators: at most 16, or a quarter of those present."""
    violators = np.flatnonzero(excess > slack)
    violators = np.setdiff1d(violators, members, assume_unique=True)
    room = max(ENTER_AT_ONCE, len(members) // 4)
    if len(violators) > room:
        violators = violators[np.argsort(-excess[violators], kind="stable")[:room]]
    return np.union1d(members, violators)


def huber_loss(residual: FloatArray, tau: FloatArray) -> FloatArray:
    """Return mean rho over rows, shape (R,)."""
    inside = np.minimum(np.abs(residual), tau)
    loss: FloatArray = (inside * (np.abs(residual) - inside / 2)).mean(axis=0)
    return loss


def huber_gap(
    Z: FloatArray,
    Y: FloatArray,
    residual: FloatArray,
    B: FloatArray,
    weights: FloatArray,
    tau: FloatArray,
    intercept: bool,
) -> tuple[FloatArray, FloatArray]:
    """Return the duality gaps, shape (R,), and the slopes Z'theta/n before shrinking, (p, R)."""
    theta = np.clip(residual, -tau, tau)
    if intercept:
        theta = theta - theta.mean(axis=0)
    slope = Z.T @ (theta / len(Y))
    largest = np.abs(theta).max(axis=0)
    worst = np.maximum(1.0, (np.abs(slope) / weights).max(axis=0))
    worst = np.maximum(worst, largest / tau)
    theta = theta / worst
    primal = huber_loss(residual, tau) + (weights * np.abs(B)).sum(axis=0)
    dual = ((Y - theta / 2) * theta).mean(axis=0)
    return np.abs(primal - dual), slope
