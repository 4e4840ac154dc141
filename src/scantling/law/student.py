"""Student t by maximum likelihood, for one sample or for many at once.

The law is scanned over gamma = 1/df, so that the normal (gamma = 0) is an end of the scan
and not at infinity; for each gamma the scale solves its likelihood equation by a few steps
of iteratively reweighted least squares.
"""

from __future__ import annotations

import numpy as np
from scipy.special import gammaln

from scantling.core.record import FloatArray

SCAN = (
    0.002, 0.02, 0.05, 0.08, 0.11, 0.14, 0.17, 0.2, 0.235, 0.27, 0.31, 0.36, 0.42, 0.5,
    0.6, 0.72, 0.86, 1.0,
)  # fmt: skip
"""Values of 1/df scanned; between them the likelihood is interpolated by a parabola."""
VERTEX_STEPS = 12
"""Reweighting steps for the scale at the interpolated maximum."""


def log_constant(df: FloatArray) -> FloatArray:
    """Log of the density's constant at scale 1."""
    return np.asarray(gammaln((df + 1) / 2) - gammaln(df / 2) - 0.5 * np.log(np.pi * df))


def reweighted(
    squares: FloatArray, df: FloatArray, square_scale: FloatArray, steps: int
) -> tuple[FloatArray, FloatArray]:
    """Log-likelihood and squared scale, each (B,), after reweighting steps at given df.

    `squares` is (B, n), `df` and `square_scale` (B,); with no steps the likelihood is that at
    the given scale.
    """
    each = df[:, None]
    for _ in range(steps):
        weighted = (each + 1) * squares / (each + squares / square_scale[:, None])
        square_scale = weighted.mean(axis=1)
    logs = np.log1p(squares / (each * square_scale[:, None])).sum(axis=1)
    constant = squares.shape[1] * (log_constant(df) - 0.5 * np.log(square_scale))
    return constant - (df + 1) / 2 * logs, square_scale


def profile(
    samples: FloatArray, gammas: tuple[float, ...] | FloatArray, *, steps: int = 6
) -> tuple[FloatArray, FloatArray]:
    """Profile log-likelihood over gamma = 1/df, location 0.

    Parameters
    ----------
    samples : array, shape (B, n)
    gammas : sequence of G increasing values in (0, 1]
    steps : int
        Reweighting steps per gamma, each started from its neighbour's scale.

    Returns
    -------
    log-likelihood, scale : arrays, shape (G, B)
    """
    squares = samples**2
    square_scale = squares.mean(axis=1)
    likelihoods, scales = [], []
    for position, gamma in enumerate(gammas):
        df = np.full(square_scale.shape, 1 / float(gamma))
        likelihood, square_scale = reweighted(
            squares, df, square_scale, steps if position else 3 * steps
        )
        likelihoods.append(likelihood)
        scales.append(np.sqrt(square_scale))
    return np.array(likelihoods), np.array(scales)


def fit_student(samples: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Maximum-likelihood 1/df, scale and log-likelihood of each row of `samples` (B, n).

    Lange et al. (1989), Journal of the American Statistical Association 84, for the
    reweighting; location 0.
    """
    likelihood, scale = profile(samples, SCAN)
    grid = np.array(SCAN)
    rows = np.arange(samples.shape[0])
    best = likelihood.argmax(axis=0)
    inner = np.clip(best, 1, grid.size - 2)
    around = (inner - 1, inner, inner + 1)
    # In the root of gamma the likelihood is closest to the parabola through the three points
    # around the maximum; its vertex is the estimate.
    x0, x1, x2 = (np.sqrt(grid[at]) for at in around)
    f0, f1, f2 = (likelihood[at, rows] for at in around)
    above = (x1 - x0) ** 2 * (f1 - f2) - (x1 - x2) ** 2 * (f1 - f0)
    below = (x1 - x0) * (f1 - f2) - (x1 - x2) * (f1 - f0)
    safe = np.where(np.abs(below) > 1e-12, below, 1.0)
    vertex = np.where(np.abs(below) > 1e-12, x1 - 0.5 * above / safe, x1)
    gamma = np.clip(vertex, x0, x2) ** 2
    gamma = np.where(best == 0, grid[0], np.where(best == grid.size - 1, grid[-1], gamma))
    top, square_scale = reweighted(samples**2, 1 / gamma, scale[best, rows] ** 2, VERTEX_STEPS)
    return gamma, np.sqrt(square_scale), top
