"""The score of each loss: what takes the place of the error in x_ij e_i.

Least squares and the square-root lasso have the error itself (the latter divides by its root
mean square, which equal loadings do anyway: Belloni et al. (2011), Biometrika 98). Huber's loss
clips it, Sun et al. (2020), Journal of the American Statistical Association 115; the absolute
loss keeps its sign, Wang (2013), Journal of Multivariate Analysis 120.
"""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray
from scantling.errors import InputError

LOSSES = ("squared", "huber", "absolute", "square-root")
ROBUST = ("huber", "absolute")
"""Losses whose score is bounded in the error."""
HUBER_BEND = 1.345
"""Errors beyond so many robust standard deviations are clipped: 95 % of least squares' efficiency
under normal errors; Huber (1964), Annals of Mathematical Statistics 35 (value from memory)."""
MAD_TO_SD = 1.4826


def huber_thresholds(errors: FloatArray) -> FloatArray:
    """tau of each draw (n, R) about its median: HUBER_BEND robust sd, shape (R,)."""
    middle = np.median(errors, axis=0)
    spread = MAD_TO_SD * np.median(np.abs(errors - middle), axis=0)
    # More than half of the errors equal: clip at their ordinary sd instead.
    spread = np.where(spread > 0, spread, errors.std(axis=0))
    return np.asarray(HUBER_BEND * spread)


def loss_scores(errors: FloatArray, loss: str) -> FloatArray:
    """psi(e), each draw centred, shape (n, R) like the centred errors given.

    Columns have mean zero, so centring changes no score, only keeps a constant out of the
    loadings.
    """
    if loss in ("squared", "square-root"):
        return errors
    if loss not in LOSSES:
        raise InputError(f"loss: one of {', '.join(LOSSES)} is needed; found {loss!r}")
    moved = errors - np.median(errors, axis=0)
    if loss == "huber":
        tau = huber_thresholds(errors)
        score = np.clip(moved, -tau, tau)
    else:
        score = np.sign(moved)
    return np.asarray(score - score.mean(axis=0))


def score_slope(errors: FloatArray, loss: str) -> float:
    """How much of a small effect reaches the mean score: E psi'(e), over all draws (n, R).

    1 for least squares, the share not clipped for Huber's loss, twice the density at the median
    for the absolute loss (share within a normal-reference bandwidth; Silverman (1986), Density
    estimation for statistics and data analysis).
    """
    if loss not in ROBUST:
        return 1.0
    moved = np.abs(errors - np.median(errors, axis=0))
    if loss == "huber":
        return float((moved < huber_thresholds(errors)).mean())
    robust_sd = MAD_TO_SD * float(np.median(moved))
    width = max(robust_sd, float(np.finfo(float).tiny)) * moved.size**-0.2
    return float((moved < width).mean() / width)
