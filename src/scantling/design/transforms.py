"""Transforms of raw columns that bound their tails: normal scores, clipping."""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray

CLIP_AT = 5.0
"""Clipping point in robust standard deviations; METHODS 7: at 5 MADs or more."""
MAD_TO_SD = 1.4826
"""1 / Phi^-1(3/4): a normal column's standard deviation over its MAD."""


def normal_scores(values: FloatArray) -> FloatArray:
    """Return Phi^-1((rank - 1/2)/n) of each column of `values` (n, k), ties at average ranks."""
    from scipy.special import ndtri
    from scipy.stats import rankdata

    scores: FloatArray = ndtri((rankdata(values, axis=0) - 0.5) / len(values))
    return scores


def clipped(values: FloatArray) -> FloatArray:
    """Return each column of `values` (n, k) clipped at its median +- 5 * 1.4826 MAD.

    A column whose MAD is 0 is clipped at its mean +- 5 sd instead: around a
    median that half of the values share, every other value would be an outlier.
    """
    scale = np.abs(values).max(axis=0)
    scale = np.where(scale > 0, scale, 1.0)
    unit = values / scale
    centre = np.median(unit, axis=0)
    spread = MAD_TO_SD * np.median(np.abs(unit - centre), axis=0)
    sparse = spread == 0
    centre = np.where(sparse, unit.mean(axis=0), centre)
    spread = np.where(sparse, unit.std(axis=0), spread)
    return np.clip(unit, centre - CLIP_AT * spread, centre + CLIP_AT * spread) * scale
