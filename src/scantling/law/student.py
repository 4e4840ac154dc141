"""Student t by maximum likelihood, for one sample or for many at once.

The law is scanned over gamma = 1/df, so that the normal (gamma = 0) is an end of the scan
and not at infinity; for each gamma the scale solves its likelihood equation by a few steps
of iteratively reweighted least squares.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import gammaln

from scantling.core.record import FloatArray

SCAN = (
    0.002, 0.02, 0.05, 0.08, 0.11, 0.14, 0.17, 0.2, 0.235, 0.27, 0.31, 0.36, 0.42, 0.5,
    0.6, 0.72, 0.86, 1.0,
)  # fmt: skip
"""Values of 1/df scanned; between them the likelihood is interpolated by a parabola."""


def log_constant(df: float) -> float:
    """Log of the density's constant at scale 1."""
    return float(gammaln((df + 1) / 2) - gammaln(df / 2) - 0.5 * math.log(math.pi * df))


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
    n = samples.shape[1]
    square_scale = squares.mean(axis=1)
    likelihoods, scales = [], []
    for position, gamma in enumerate(gammas):
        df = 1 / float(gamma)
        for _ in range(steps if position else 3 * steps):
            weighted = (df + 1) * squares / (df + squares / square_scale[:, None])
            square_scale = weighted.mean(axis=1)
        logs = np.log1p(squares / (df * square_scale[:, None])).sum(axis=1)
        likelihoods.append(
            n * (log_constant(df) - 0.5 * np.log(square_scale)) - (df + 1) / 2 * logs
        )
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
    x0, x1, x2 = grid[inner - 1], grid[inner], grid[inner + 1]
    f0, f1, f2 = (likelihood[inner + shift, rows] for shift in (-1, 0, 1))
    # Vertex of the parabola through the three points around the maximum.
    above = (x1 - x0) ** 2 * (f1 - f2) - (x1 - x2) ** 2 * (f1 - f0)
    below = (x1 - x0) * (f1 - f2) - (x1 - x2) * (f1 - f0)
    safe = np.where(np.abs(below) > 1e-12, below, 1.0)
    vertex = np.where(np.abs(below) > 1e-12, x1 - 0.5 * above / safe, x1)
    gamma = np.clip(vertex, x0, x2)
    gamma = np.where(best == 0, grid[0], np.where(best == grid.size - 1, grid[-1], gamma))
    out_scale = np.array(
        [np.interp(g, grid, scale[:, b]) for b, g in zip(rows, gamma, strict=True)]
    )
    return gamma, out_scale, likelihood.max(axis=0)
