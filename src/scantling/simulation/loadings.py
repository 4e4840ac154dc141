"""What multiplies the penalty of each column, and least squares on what was selected.

Loadings make one level fit all columns: from the scores of known errors, from the
residuals of an earlier fit, or, in the adaptive lasso, from first coefficients.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.core.streams import blocks
from scantling.errors import InputError
from scantling.simulation.lasso import solve_batch

BoolArray = NDArray[np.bool_]

STACK_CELLS = 2_000_000
"""Cells of stacked small systems solved at once (16 MB)."""

ROUNDS = 15
CHANGE = 1e-4
"""Iterated loadings stop after so many rounds, or when none changes by more, relative."""

LEAST = 0.1
"""Floor of first coefficients in the adaptive lasso, in units of the reference."""


def score_loadings(X: FloatArray, errors: FloatArray) -> FloatArray:
    """Return sqrt(mean_i x_ij^2 e_ir^2), shape (p, R), the self-normalised loadings.

    Belloni et al. (2012), Econometrica 80, 2369-2429.
    """
    loadings: FloatArray = np.sqrt((X * X).T @ (errors * errors) / len(X))
    return loadings


def adaptive_loadings(initial: FloatArray, reference: Any, *, floor: float = LEAST) -> FloatArray:
    """Return reference / max(|b|, floor * reference): small first coefficients pay more.

    Zou (2006), The adaptive lasso and its oracle properties, J. American Statistical
    Association 101, 1418-1429, exponent 1. The floor keeps columns the first fit
    left out in the race (common practice, no source).

    Parameters
    ----------
    initial : array, shape (p, R)
        First coefficients, of columns of one scale.
    reference : float or array, shape (R,)
        The coefficient whose loading is 1, such as the first fit's penalty: what it
        takes off every coefficient.
    floor : float
        Positive; the largest loading is 1/floor.
    """
    unit = np.asarray(reference, dtype=np.float64)
    if not (floor > 0 and (unit > 0).all()):
        raise InputError("reference, floor: positive numbers are needed")
    loadings: FloatArray = unit / np.maximum(np.abs(initial), floor * unit)
    return loadings


def refit_batch(X: FloatArray, Y: FloatArray, selected: BoolArray) -> FloatArray:
    """Return least-squares coefficients of each response on its own selected columns.

    Responses with equally many columns are solved together from one Gram matrix; a
    correction from the residuals then takes off what squaring the condition cost.
    Where the selected columns depend on each other the coefficients are of least norm.

    Parameters
    ----------
    X, Y : array, shapes (n, p) and (n, R)
    selected : array of bool, shape (p, R)

    Returns
    -------
    array, shape (p, R)
        Zero off the selected columns.
    """
    n = len(X)
    B = np.zeros(selected.shape)
    scale = np.sqrt(np.einsum("ij,ij->j", X, X) / n)
    union = np.flatnonzero(selected.any(axis=1) & (scale > 0))
    Z = X[:, union] / scale[union]
    gram = Z.T @ Z / n
    chosen = selected[union]
    counts = chosen.sum(axis=0)
    for k in np.unique(counts[counts > 0]):
        rows = np.flatnonzero(counts == k)
        for first, last in blocks(len(rows), max(STACK_CELLS // int(k) ** 2, 1)):
            some = rows[first:last]
            place = np.nonzero(chosen[:, some].T)[1].reshape(len(some), k)
            fit = _refit_stack(Z, Y[:, some], gram, place)
            at = union[place]
            B[at, some[:, None]] = fit / scale[at]
    return B


def _refit_stack(
    Z: FloatArray, Y: FloatArray, gram: FloatArray, place: NDArray[np.int64]
) -> FloatArray:
    """Return the coefficients, shape (R, k), of responses with k columns each."""
    n, k = len(Z), place.shape[1]
    stack = gram[place[:, :, None], place[:, None, :]]
    lowest = np.linalg.eigvalsh(stack)[:, 0]
    poor = (lowest < 1e-7) | (k > n)
    fit = np.zeros(place.shape)
    for r in np.flatnonzero(poor):
        fit[r] = np.linalg.lstsq(Z[:, place[r]], Y[:, r], rcond=1e-10)[0]
    good = np.flatnonzero(~poor)
    if good.size:
        at, y = place[good], Y[:, good]
        full = np.zeros((Z.shape[1], len(good)))
        who = np.arange(len(good))[:, None]
        for _ in range(2):
            slope = (Z.T @ (y - Z @ full) / n)[at, who]
            full[at, who] += np.linalg.solve(stack[good], slope[:, :, None])[:, :, 0]
        fit[good] = full[at, who]
    return fit


def iterated_loadings(
    X: FloatArray, Y: FloatArray, level: float, *, equal: bool = False, tol: float = 1e-8
) -> tuple[FloatArray, FloatArray]:
    """Fit with loadings from the fit's own residuals, as a user without the errors has to.

    Start from y - mean(y); then residuals of least squares on the columns selected,
    until no loading changes by more than 1e-4 of itself, or 15 rounds.
    Belloni et al. (2012), Econometrica 80, 2369-2429.

    Parameters
    ----------
    X, Y : array, shapes (n, p) and (n, R)
        Centred.
    level : float
        Penalty at loading 1: c Phi^-1(1 - g/(2p)) / sqrt(n).
    equal : bool
        One loading, rms(residual) rms(x_j), instead of sqrt(mean x_ij^2 u_i^2).
    tol : float
        Duality gap of the fits.

    Returns
    -------
    coefficients, loadings : array, shapes (p, R)
    """
    scale = np.sqrt((X * X).mean(axis=0))[:, None]

    def loadings_of(residual: FloatArray) -> FloatArray:
        if equal:
            return np.asarray(scale * np.sqrt((residual**2).mean(axis=0)))
        return score_loadings(X, residual)

    shape = X.shape[1], Y.shape[1]
    B, loadings = np.zeros(shape), loadings_of(Y - Y.mean(axis=0))
    rows = np.arange(shape[1])
    for turn in range(ROUNDS):
        start = B[:, rows] if turn else None
        weights = np.maximum(level * loadings[:, rows], 1e-300)
        B[:, rows], _ = solve_batch(X, Y[:, rows], weights, tol=tol, start=start)
        if turn == ROUNDS - 1:
            break
        fit = refit_batch(X, Y[:, rows], B[:, rows] != 0)
        fresh = loadings_of(Y[:, rows] - X @ fit)
        change = np.abs(fresh - loadings[:, rows]).max(axis=0)
        moved = change > CHANGE * loadings[:, rows].max(axis=0)
        rows = rows[moved]
        if not rows.size:
            break
        loadings[:, rows] = fresh[:, moved]
    return B, loadings
