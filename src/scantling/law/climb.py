"""Many small likelihoods maximised at once: damped Newton steps by finite differences."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from scantling.core.record import FloatArray

STEP = 1e-3
"""Width of the differences; parameters are of order 1."""
ENOUGH = 1e-3
"""Gain in log-likelihood below which a row is taken to have arrived."""
STUCK = 1e3
"""Damping above which steps are too short to matter."""


def climb(
    objective: Callable[[FloatArray], FloatArray],
    start: FloatArray,
    low: FloatArray,
    high: FloatArray,
    *,
    steps: int = 12,
) -> tuple[FloatArray, FloatArray]:
    """Maximise a function of k parameters for each of B rows.

    Parameters
    ----------
    objective : function of an array (B, k)
        Returns (B,); rows do not depend on one another.
    start : array, shape (B, k)
    low, high : arrays, shape (k,)
        Ends of each parameter, both reachable.
    steps : int
        Most steps.

    Returns
    -------
    parameters (B, k), value (B,)

    Source: Levenberg (1944), Quarterly of Applied Mathematics 2, for the damping.
    """
    place = np.clip(start, low, high)
    value = objective(place)
    damping = np.full(place.shape[0], 1e-3)
    for _ in range(steps):
        slope, curve = _derivatives(objective, place, low, high)
        size = np.maximum(np.abs(np.einsum("bii->bi", curve)), 1e-8)
        damped = -curve + damping[:, None, None] * np.einsum("bi,ij->bij", size, np.eye(len(low)))
        # A curvature that is no maximum's is replaced by its own size on the diagonal.
        bad = np.linalg.eigvalsh(damped)[:, 0] <= 0
        heavier = (1 + damping)[:, None] * size
        damped[bad] = np.einsum("bi,ij->bij", heavier[bad], np.eye(len(low)))
        move = np.linalg.solve(damped, slope[..., None])[..., 0]
        tried = np.clip(place + np.clip(move, -1, 1), low, high)
        there = objective(tried)
        better = there > value
        arrived = better & (there - value < ENOUGH)
        place = np.where(better[:, None], tried, place)
        value = np.where(better, there, value)
        damping = np.where(better, damping / 10, damping * 10)
        # A step that finds nothing better in spite of heavy damping is at the top too.
        if bool((arrived | (damping > STUCK)).all()):
            break
    return place, value


def _derivatives(
    objective: Callable[[FloatArray], FloatArray],
    place: FloatArray,
    low: FloatArray,
    high: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Gradient (B, k) and Hessian (B, k, k), the centre moved inside by one step."""
    count = place.shape[1]
    centre = np.clip(place, low + STEP, high - STEP)
    middle = objective(centre)
    slope = np.empty_like(place)
    curve = np.empty((place.shape[0], count, count))
    up = []
    for j in range(count):
        step = np.zeros(count)
        step[j] = STEP
        above, below = objective(centre + step), objective(centre - step)
        up.append(above)
        slope[:, j] = (above - below) / (2 * STEP)
        curve[:, j, j] = (above - 2 * middle + below) / STEP**2
    for j in range(count):
        for k in range(j):
            step = np.zeros(count)
            step[j] = step[k] = STEP
            both = (objective(centre + step) - up[j] - up[k] + middle) / STEP**2
            curve[:, j, k] = curve[:, k, j] = both
    # The slope at the place itself, not at the moved centre.
    return slope + np.einsum("bjk,bk->bj", curve, place - centre), curve
