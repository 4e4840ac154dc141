"""The logistic lasso for many binary responses on one set of columns.

(1/n) sum_i [log(1 + exp(h_i)) - y_i h_i] + sum_j w_j |b_j|, h = a + Xb, with the
intercept a not penalised. One matrix product over all open responses gives every score;
each response has a small working set, solved by Newton steps: the weighted quadratic
model, intercept partialled out, is a small lasso for `active_set`, and a backtracking
search keeps the objective falling. Lee et al. (2014), Proximal Newton-type methods for
minimizing composite functions, SIAM J. Optimization 24, 1420-1443.

The dual point is theta = s (y - 1/(1 + exp(-h))), with the intercept set so that theta
sums to zero and s the largest factor up to 1 with |x_j'theta|/n <= w_j; its value is the
mean entropy of y - theta.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import entr, expit

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.errors import InputError
from scantling.simulation.active_set import solve_together
from scantling.simulation.arguments import columns_and_responses, penalty_table, refuse_gap
from scantling.simulation.huber import ROUNDS, grown

STEPS = 50
"""Most Newton steps for one set of columns."""


def logistic_batch(
    X: Any, Y: Any, penalty: Any, *, tol: float = 1e-6
) -> tuple[FloatArray, FloatArray]:
    """Minimise (1/n) sum log-loss + sum_j penalty_j |b_j| for every response.

    The intercept is not penalised.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses, 0 or 1, with both values in each.
    penalty : float or array-like, shape (R,) or (p, R)
        Positive penalties, in the units of X.
    tol : float
        Largest duality gap accepted, over the loss of the best constant.

    Returns
    -------
    coefficients : array, shape (p, R)
    intercepts : array, shape (R,)

    Raises
    ------
    InputError
        If an argument is not numeric, not finite, of the wrong shape or sign, or a
        response has other values than 0 and 1 or only one of them.
    NotConvergedError
        (an InputError) If the gap is not reached; it carries the gap.
    """
    columns, responses = columns_and_responses(X, Y)
    other = responses[(responses != 0) & (responses != 1)]
    if other.size:
        raise InputError(f"Y: values of 0 and 1 are needed; found {other[0]:g}")
    share = responses.mean(axis=0)
    single = np.flatnonzero((share == 0) | (share == 1))
    if single.size:
        raise InputError(
            f"Y: both 0 and 1 are needed in each response; response {single[0] + 1} has only"
            f" {share[single[0]]:g}"
        )
    table = penalty_table(penalty, columns.shape[1], responses.shape[1])
    tol = between(tol, "tol", 0.0, 1.0)
    B, A, gaps = solve_logistic(columns, responses, table, tol=tol)
    refuse_gap(gaps, tol)
    return B, A


def solve_logistic(
    X: FloatArray, Y: FloatArray, weights: FloatArray, *, tol: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return coefficients (p, R), intercepts (R,) and gaps (R,); the trusted kernel."""
    (n, p), replicates = X.shape, Y.shape[1]
    scale = np.sqrt(np.einsum("ij,ij->j", X, X) / n)
    scale[scale == 0] = 1.0
    Z = X / scale
    weights = np.broadcast_to(weights, (p, replicates)) / scale[:, None]
    share = Y.mean(axis=0)
    unit = entr(share) + entr(1 - share)
    B, A, gaps = np.zeros((p, replicates)), np.log(share / (1 - share)), np.zeros(replicates)
    sets = [np.zeros(0, dtype=np.int64) for _ in range(replicates)]
    slack = np.full(replicates, max(min(1e-7, 0.1 * tol), 1e-14))
    rows = np.arange(replicates)
    for turn in range(ROUNDS):
        fitted = Z @ B[:, rows]
        A[rows] = _balance(fitted, A[rows], share[rows])
        gaps[rows], slope = _gap(Z, Y[:, rows], fitted + A[rows], B[:, rows], weights[:, rows])
        gaps[rows] /= unit[rows]
        rest = gaps[rows] > tol
        rows, slope = rows[rest], slope[:, rest]
        if not rows.size or turn == ROUNDS - 1:
            break
        for place, r in enumerate(rows):
            before = len(sets[r])
            on = grown(sets[r], np.abs(slope[:, place]) - weights[:, r], slack[r])
            if turn and len(on) == before:
                slack[r] = max(0.01 * slack[r], 1e-16)
            b, A[r] = _fit_one(Z[:, on], Y[:, r], weights[on, r], B[on, r], A[r], slack[r])
            B[on, r] = b
            sets[r] = on[b != 0]
    return B / scale[:, None], A, gaps


def _balance(fitted: FloatArray, intercept: FloatArray, share: FloatArray) -> FloatArray:
    """Return the intercepts at which mean probabilities equal the shares of ones.

    Newton's method, kept in a bracket that each step shortens.
    """
    low = np.log(share / (1 - share)) - fitted.max(axis=0)
    high = np.log(share / (1 - share)) - fitted.min(axis=0)
    a = np.clip(intercept, low, high)
    for _ in range(100):
        chance = expit(fitted + a)
        off = chance.mean(axis=0) - share
        low, high = np.where(off < 0, a, low), np.where(off > 0, a, high)
        step = a - off / np.maximum((chance * (1 - chance)).mean(axis=0), 1e-300)
        fresh = np.where((step > low) & (step < high), step, 0.5 * (low + high))
        fresh = np.where(off == 0, a, fresh)
        if (np.abs(fresh - a) <= 4e-16 * np.maximum(np.abs(a), 1.0)).all():
            break
        a = fresh
    return a


def _fit_one(
    Z: FloatArray, y: FloatArray, weights: FloatArray, b: FloatArray, a: float, slack: float
) -> tuple[FloatArray, float]:
    """Return coefficients and intercept of one response on a few columns."""
    n = len(y)
    h = a + Z @ b
    value = _objective(h, y, weights, b)
    for _ in range(STEPS):
        chance = expit(h)
        error, curve = y - chance, np.maximum(chance * (1 - chance), 1e-12)
        slope, tilt = Z.T @ error / n, float(error.mean())
        weighted = Z * curve[:, None]
        mass, cross = float(curve.mean()), weighted.sum(axis=0) / n
        violation = np.where(b != 0, np.abs(slope - weights * np.sign(b)), np.abs(slope) - weights)
        if abs(tilt) <= slack and not (violation > slack).any():
            break
        system = weighted.T @ Z / n - np.outer(cross, cross) / mass
        size = np.sqrt(np.maximum(system.diagonal(), 1e-12))
        pull = slope - cross * tilt / mass
        fresh, _ = solve_together(
            (system / size / size[:, None])[None],
            (pull / size)[None],
            (weights / size)[None],
            (b * size)[None],
            np.array([0.1 * slack]),
        )
        move = fresh[0] / size - b
        shift = (tilt - float(cross @ move)) / mass
        target = np.where(fresh[0] == 0, 0.0, b + move)
        fall = float(slope @ move) + tilt * shift
        fall -= float((weights * (np.abs(target) - np.abs(b))).sum())
        length = 1.0
        while length > 1e-10:
            trial = target if length == 1.0 else b + length * move
            level = a + length * shift
            h = level + Z @ trial
            attained = _objective(h, y, weights, trial)
            if attained <= value - 1e-4 * length * fall + 4e-16 * abs(value):
                break
            length *= 0.5
        b, a, value = trial, level, attained
        if fall <= 1e-17 * abs(value):
            break
    return b, a


def _objective(h: FloatArray, y: FloatArray, weights: FloatArray, b: FloatArray) -> float:
    return float((np.logaddexp(0.0, h) - y * h).mean() + weights @ np.abs(b))


def _gap(
    Z: FloatArray, Y: FloatArray, H: FloatArray, B: FloatArray, weights: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the duality gaps, shape (R,), and the slopes, shape (p, R)."""
    theta = Y - expit(H)
    slope = Z.T @ (theta / len(Y))
    shrink = 1.0 / np.maximum(1.0, (np.abs(slope) / weights).max(axis=0))
    primal = (np.logaddexp(0.0, H) - Y * H).mean(axis=0) + (weights * np.abs(B)).sum(axis=0)
    chance = Y - shrink * theta
    dual = (entr(chance) + entr(1 - chance)).mean(axis=0)
    return np.abs(primal - dual), slope
