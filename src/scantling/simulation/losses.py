"""One way to fit each loss, along falling penalties, with its intercept and its criterion."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from scantling.core.record import FloatArray
from scantling.simulation.absolute import solve_absolute
from scantling.simulation.huber import solve_huber
from scantling.simulation.logistic import solve_logistic
from scantling.simulation.path import walk_path
from scantling.simulation.square_root import solve_square_root

LOSSES = ("squared", "square-root", "huber", "absolute", "logistic")


def walk_loss(
    X: FloatArray,
    Y: FloatArray,
    grid: FloatArray,
    loadings: FloatArray,
    *,
    loss: str,
    tau: FloatArray,
    tol: float,
) -> Iterator[tuple[FloatArray, FloatArray]]:
    """Yield coefficients (p, R) and intercepts (R,) for each row of `grid`.

    Parameters
    ----------
    X, Y : array, shapes (n, p) and (n, R)
    grid : array, shape (L, R)
        Positive penalties, falling.
    loadings : array, shape (p, 1) or (p, R)
        Positive factors of the penalty.
    loss : str
        One of LOSSES. All have an intercept that is not penalised.
    tau : array, shape (R,)
        Threshold of Huber's loss; not used otherwise.
    tol : float
        Relative duality gap. Where it is not reached, as at a perfect fit, the fit
        that came closest is given.
    """
    middle, level = X.mean(axis=0), Y.mean(axis=0)
    if loss == "squared":
        steps = walk_path(X - middle, Y - level, grid, tol=tol, loadings=loadings)
        for step, first, last, B, _ in steps:
            if (first, last) != (0, Y.shape[1]):
                raise AssertionError(f"responses come in blocks at step {step}")
            yield B, level - middle @ B
        return
    start: tuple[FloatArray, FloatArray] | None = None
    for penalty in grid:
        weights = penalty * loadings
        if loss == "square-root":
            near = None if start is None else start[0]
            B, _ = solve_square_root(X - middle, Y - level, weights, tol=tol, start=near)
            A = level - middle @ B
            start = B, A
        elif loss == "huber":
            B, A, _ = solve_huber(X, Y, weights, tau, tol=tol, intercept=True, start=start)
            start = B, A
        elif loss == "absolute":
            B, A, _ = solve_absolute(X, Y, weights, tol=tol, intercept=True, start=start)
            start = B, A
        else:
            B, A, _ = solve_logistic(X, Y, weights, tol=tol)
        yield B, A


def row_losses(Y: FloatArray, fitted: FloatArray, loss: str, tau: FloatArray) -> FloatArray:
    """Return what each row costs, shape (n, R); squares for the square-root lasso."""
    if loss == "logistic":
        return np.asarray(np.logaddexp(0.0, fitted) - Y * fitted)
    size = np.abs(Y - fitted)
    if loss == "absolute":
        return np.asarray(size)
    if loss == "huber":
        inside = np.minimum(size, tau)
        return np.asarray(inside * (size - inside / 2))
    return np.asarray(size**2)


def deviance(mean_loss: FloatArray, rows: int, loss: str) -> FloatArray:
    """Return -2 log-likelihood up to a constant, for information criteria.

    Normal errors of unknown variance for squares (and for Huber's loss, common
    practice, no source), Laplace's of unknown scale for absolute loss, as in
    Lee et al. (2014), J. American Statistical Association 109, 216-229.
    """
    if loss == "logistic":
        return np.asarray(2.0 * rows * mean_loss)
    with np.errstate(divide="ignore"):
        logs = np.log(mean_loss)
    return np.asarray((2.0 if loss == "absolute" else 1.0) * rows * logs)


def null_scores(X: FloatArray, Y: FloatArray, loss: str, tau: FloatArray) -> FloatArray:
    """Return the scores at the best constant, shape (p, R): no column enters above the largest."""
    if loss == "absolute":
        rest = np.sign(Y - np.median(Y, axis=0))
        rest = rest - rest.mean(axis=0)
    elif loss == "huber":
        rest = np.clip(Y - huber_location(Y, tau), -tau, tau)
    else:
        rest = Y - Y.mean(axis=0)
        if loss == "square-root":
            rest = rest / np.maximum(np.sqrt((rest**2).mean(axis=0)), 1e-300)
    return np.asarray(X.T @ (rest / len(X)))


def huber_location(Y: FloatArray, tau: FloatArray) -> FloatArray:
    """Return the constant with the least Huber loss for each response, by bisection."""
    low, high = Y.min(axis=0), Y.max(axis=0)
    for _ in range(60):
        middle = 0.5 * (low + high)
        above = np.clip(Y - middle, -tau, tau).mean(axis=0) > 0
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.asarray(0.5 * (low + high))


def error_scores(errors: FloatArray, loss: str, tau: FloatArray) -> FloatArray:
    """Return what multiplies the columns in the scores, given the errors, shape (n, R)."""
    if loss == "square-root":
        return np.asarray(errors / np.sqrt((errors**2).mean(axis=0)))
    if loss == "huber":
        return np.asarray(np.clip(errors, -tau, tau))
    if loss == "absolute":
        return np.where(errors == 0, 1.0, np.sign(errors))
    if loss == "logistic":
        return np.full(errors.shape, 0.5)
    return errors
