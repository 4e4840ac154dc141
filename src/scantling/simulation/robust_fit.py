"""One response, a few columns: Huber's loss with an absolute penalty, by Newton steps.

Minimise F(b) = (1/n) sum_i rho(y_i - z_i'b) + sum_j w_j |b_j|, with rho(r) = r^2/2 up
to |r| = tau and tau |r| - tau^2/2 beyond. F is piecewise quadratic: on the rows within
tau (the inliers) and the columns off zero (with their signs) the minimum is a linear
system. The step to it is cut by an exact line search over all the places where a row
crosses +-tau or a coefficient crosses zero, so F falls at every step, and a full step
that changes neither set is the solution. Madsen et al. (1990), Finite algorithms for
Huber's M-estimator, SIAM J. Scientific and Statistical Computing 11, 299-309 (the
piecewise Newton method, without a penalty).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dposv

from scantling.core.record import FloatArray
from scantling.simulation.active_set import BoolArray
from scantling.simulation.working_set import IndexArray

RIDGE = 1e-11
"""Added to the diagonal, over the mean square of a column, where the inliers are too few.

The step is a correction, so this slows a singular direction and does not move the solution."""

STEPS = 400
"""Most Newton steps for one set of columns; common problems need fewer than ten."""


def fit_huber(
    Z: FloatArray,
    y: FloatArray,
    weights: FloatArray,
    tau: float,
    start: FloatArray,
    slack: float,
) -> tuple[FloatArray, FloatArray]:
    """Return coefficients and residuals.

    Parameters
    ----------
    Z : array, shape (n, k)
        Columns of unit mean square.
    y : array, shape (n,)
    weights : array, shape (k,)
        0 for a column without penalty.
    tau : float
        Threshold of the loss.
    start : array, shape (k,)
    slack : float
        Violation of the optimality conditions that is left alone.
    """
    n = len(y)
    b = start.copy()
    r = y - Z @ b
    free = weights == 0
    signs = np.sign(b)
    last = False
    for step in range(STEPS):
        psi = np.clip(r, -tau, tau)
        gradient = Z.T @ psi / n
        wanted = np.where((signs != 0) | free, gradient - weights * signs, 0.0)
        off = (np.abs(gradient) - weights > slack) & (signs == 0) & ~free
        settled = last or not (np.abs(wanted) > slack).any()
        if settled and not off.any():
            break
        if settled or step == 0:
            signs[off] = np.sign(gradient[off])
            wanted[off] = (gradient - weights * signs)[off]
        inliers = Z[np.abs(r) <= tau]
        move = _move(inliers, wanted, np.flatnonzero((signs != 0) | free), n)
        early = (b == 0) & ~free & (move * signs < 0)
        if early.any():
            # A column that would leave zero against its sign was let in too early.
            signs[early] = 0.0
            wanted[early] = 0.0
            move = _move(inliers, wanted, np.flatnonzero((signs != 0) | free), n)
            move[(b == 0) & ~free & (move * signs <= 0)] = 0.0
        # Where the fall to be had is below the rounding of F, this is the last step.
        last = bool(wanted @ move <= 1e-17 * (np.abs(psi) @ np.abs(r)) / n)
        u = Z @ move
        length, crossed = _line_search(r, u, b, move, weights, tau)
        b = b + length * move
        b[crossed] = 0.0
        r = y - Z @ b
        signs = np.where(free, 0.0, np.sign(b))
    return b, r


def _move(inliers: FloatArray, wanted: FloatArray, at: IndexArray, n: int) -> FloatArray:
    """Return the Newton step on the columns `at`; the others do not move."""
    move = np.zeros(len(wanted))
    if at.size:
        move[at] = _newton(inliers[:, at], wanted[at], n)
    return move


def _newton(inliers: FloatArray, wanted: FloatArray, n: int) -> FloatArray:
    """Solve (Z_I'Z_I/n + ridge) move = wanted."""
    system = inliers.T @ inliers / n
    system.flat[:: len(wanted) + 1] += RIDGE
    _, move, fault = dposv(system, wanted)
    if fault == 0:
        return np.asarray(move, dtype=np.float64)
    return np.asarray(np.linalg.lstsq(system, wanted, rcond=None)[0], dtype=np.float64)


def _line_search(
    r: FloatArray,
    u: FloatArray,
    b: FloatArray,
    move: FloatArray,
    weights: FloatArray,
    tau: float,
) -> tuple[float, BoolArray]:
    """Return the t > 0 that minimises F(b + t move), and which coefficients are zero there.

    F' rises along the segment: linearly at rate sum u_i^2/n over the inliers, by
    2 w_j |move_j| where a coefficient crosses zero. It is summed up over the sorted
    crossings until it is no longer negative.
    """
    n = len(r)
    speed = np.abs(u)
    ahead = np.where(u < 0, -r, r)
    moving = speed > 1e-14 * max(float(speed.max(initial=0.0)), 1e-300)
    gain = np.where(moving, u * u, 0.0) / n
    with np.errstate(divide="ignore", invalid="ignore"):
        enter = np.where(moving, (ahead - tau) / speed, np.inf)
        leave = np.where(moving, (ahead + tau) / speed, np.inf)
        cross = np.where(b * move < 0, -b / move, np.inf)
    rate = float(gain[(enter <= 0) & (leave > 0)].sum())
    signs = np.where(b == 0, np.sign(move), np.sign(b))
    slope = float((weights * signs) @ move) - float(np.clip(r, -tau, tau) @ u) / n
    times = np.concatenate([enter, leave, cross])
    rates = np.concatenate([gain, -gain, np.zeros(len(b))])
    jumps = np.concatenate([np.zeros(2 * n), 2.0 * weights * np.abs(move)])
    keep = np.flatnonzero((times > 0) & np.isfinite(times))
    order = keep[np.argsort(times[keep], kind="stable")]
    times = times[order]
    after = rate + np.cumsum(rates[order])
    before = np.concatenate([[rate], after[:-1]])
    span = np.diff(times, prepend=0.0)
    jump = jumps[order]
    reached = slope + np.cumsum(before * span + jump)
    hit = np.flatnonzero(reached >= 0)
    none = np.zeros(len(b), dtype=np.bool_)
    if not hit.size:
        last = float(times[-1]) if times.size else 0.0
        return (last if times.size else 1.0), cross == last
    m = int(hit[0])
    low = float(reached[m] - jump[m])
    if low < 0:
        return float(times[m]), cross == times[m]
    lead = float(times[m - 1]) if m else 0.0
    base = float(reached[m - 1]) if m else slope
    return lead + min(-base / max(float(before[m]), 1e-300), float(span[m])), none
