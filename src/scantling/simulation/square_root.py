"""The square-root lasso for many responses on one set of columns.

sqrt(mean r^2) + sum_j w_j |b_j|, r = y - Xb, is the least over sigma > 0 of
mean(r^2)/(2 sigma) + sigma/2 + sum_j w_j |b_j|: a lasso with penalties sigma w_j at the
sigma that equals its own residual's root mean square. With s = sigma^2 the residual
mean square of that lasso rises with s, and is m + q s while columns and signs stay the
same, m that of least squares on the columns and q = v'G^-1 v with v the signed weights:
the next sigma is sqrt(m/(1 - q)), exact on the right columns; a bracket keeps it safe.
Belloni et al. (2011), Square-root lasso: pivotal recovery of
sparse signals via conic programming, Biometrika 98, 791-806; Sun et al. (2012), Scaled
sparse linear regression, Biometrika 99, 879-898 (the iteration on sigma).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.linalg import solve_triangular

from scantling.core.checks import between
from scantling.core.record import FloatArray
from scantling.simulation.arguments import columns_and_responses, penalty_table, refuse_gap
from scantling.simulation.lasso import solve_batch

INNER_TOL = 1e-10
"""Duality gap of the lasso at each sigma; it only has to find the columns and signs."""

FALL = 1e-2
"""Factor of sigma^2 from one round to the next where the solution seems to be a perfect fit."""

ROUNDS = 60
"""Most values of sigma tried; common problems need five."""


def square_root_batch(X: Any, Y: Any, penalty: Any, *, tol: float = 1e-6) -> FloatArray:
    """Minimise sqrt(mean (y_r - X b)^2) + sum_j penalty_j |b_j| for every response.

    There is no intercept: centre X and Y first if one is wanted.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns, of any scale.
    Y : array-like, shape (n, R) or (n,)
        Responses.
    penalty : float or array-like, shape (R,) or (p, R)
        Positive penalties, in the units of X.
    tol : float
        Largest duality gap accepted, over the root mean square of the response.

    Returns
    -------
    array, shape (p, R)
        Coefficients.

    Raises
    ------
    InputError
        If an argument is not numeric, not finite, of the wrong shape or sign.
    NotConvergedError
        (an InputError) If the gap is not reached, as where the penalty is so small
        that the fit is perfect; it carries the gap.
    """
    columns, responses = columns_and_responses(X, Y)
    table = penalty_table(penalty, columns.shape[1], responses.shape[1])
    tol = between(tol, "tol", 0.0, 1.0)
    coefficients, gaps = solve_square_root(columns, responses, table, tol=tol)
    refuse_gap(gaps, tol)
    return coefficients


def solve_square_root(
    X: FloatArray,
    Y: FloatArray,
    weights: FloatArray,
    *,
    tol: float,
    start: FloatArray | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Return coefficients (p, R) and gaps (R,) over rms(y); the trusted kernel.

    `start` holds coefficients at a nearby penalty; mostly zero.
    """
    p, replicates = X.shape[1], Y.shape[1]
    power = (Y**2).mean(axis=0)
    coefficients, gaps = np.zeros((p, replicates)), np.zeros(replicates)
    rows = np.flatnonzero(power > 0)
    upper, lower = np.full(replicates, np.inf), np.zeros(replicates)
    high, low = power[rows], np.zeros(len(rows))
    start = np.zeros((p, len(rows))) if start is None else start[:, rows]
    s = np.maximum(((Y[:, rows] - X @ start) ** 2).mean(axis=0), 1e-12 * high)
    for turn in range(ROUNDS):
        inner = INNER_TOL if turn < 6 else 1e-3 * INNER_TOL
        own, y = weights[:, rows], Y[:, rows]
        start, _ = solve_batch(X, y, np.sqrt(s) * own, tol=inner, start=start)
        mean = ((y - X @ start) ** 2).mean(axis=0)
        high, low = np.where(mean < s, s, high), np.where(mean < s, low, s)
        exact, guess = _same_columns(X, y, np.broadcast_to(own, start.shape), start)
        for B in (start, exact):
            primal, dual = _values(X, y, B, own)
            lower[rows] = np.maximum(lower[rows], dual)
            better = primal < upper[rows]
            upper[rows[better]] = primal[better]
            coefficients[:, rows[better]] = B[:, better]
        gaps[rows] = np.abs(upper[rows] - lower[rows]) / np.sqrt(power[rows])
        inside = (guess > low) & (guess < high)
        # No guess: the fit on these columns is perfect, or falls with sigma all the way.
        plain = np.where(np.isnan(guess) & (low == 0), FALL * s, mean)
        plain = np.where((plain > low) & (plain < high), plain, 0.5 * (low + high))
        s = np.where(inside, guess, plain)
        go = (gaps[rows] > tol) & (s > 1e-24 * power[rows])
        if not go.any():
            break
        rows, s, low, high, start = rows[go], s[go], low[go], high[go], start[:, go]
    return coefficients, gaps


def _same_columns(
    X: FloatArray, Y: FloatArray, weights: FloatArray, B: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the solutions on the columns and signs of B, and their sigma^2 (nan if none)."""
    n = len(Y)
    exact, guess = B.copy(), np.full(Y.shape[1], np.nan)
    for r in range(Y.shape[1]):
        on = np.flatnonzero(B[:, r])
        signed = weights[on, r] * np.sign(B[on, r])
        y = Y[:, r] / np.sqrt(n)
        basis, inverse = _orthogonal(X[:, on] / np.sqrt(n))
        fit, push = basis.T @ y, inverse.T @ signed
        rate = float(push @ push)
        rest = float(((y - basis @ fit) ** 2).sum())
        if rest <= 1e-24 * float(Y[:, r] @ Y[:, r]) / n:
            exact[on, r] = inverse @ fit
        elif rate < 1:
            guess[r] = rest / (1 - rate)
            exact[on, r] = inverse @ (fit - np.sqrt(guess[r]) * push)
    return exact, guess


def _orthogonal(Z: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return Q with orthonormal columns and T with Z T = Q, of Z's rank."""
    if Z.shape[1] <= Z.shape[0]:
        basis, upper = np.linalg.qr(Z)
        size = np.abs(upper.diagonal())
        if size.min(initial=np.inf) > 1e-8 * size.max(initial=0.0):
            return basis, np.asarray(solve_triangular(upper, np.eye(len(size))))
    left, size, right = np.linalg.svd(Z, full_matrices=False)
    keep = size > size.max(initial=0.0) * 1e-12
    return left[:, keep], right[keep].T / size[keep]


def _values(
    X: FloatArray, Y: FloatArray, B: FloatArray, weights: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return primal and dual values, each of shape (R,).

    The dual point is u = s r / rms(r), s the largest factor up to 1 with
    |x_j'u|/n <= w_j; its value is mean(y u).
    """
    n = len(Y)
    residual = Y - X @ B
    sigma = np.sqrt((residual**2).mean(axis=0))
    dual = np.divide(residual, sigma, out=np.zeros_like(residual), where=sigma > 0)
    worst = np.maximum(1.0, (np.abs(X.T @ dual / n) / weights).max(axis=0))
    primal = sigma + (weights * np.abs(B)).sum(axis=0)
    return primal, (Y * dual).mean(axis=0) / worst
