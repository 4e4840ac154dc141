"""Goodness of fit: Anderson-Darling distance, judged by parametric bootstrap with refitting.

Tabulated p-values do not apply once parameters are fitted: they reject almost never.
Stute et al. (1993), Metrika 40; the distance rather than Kolmogorov's because it weighs tails.
"""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.law.innovation import Innovation

CELLS = 50_000
"""Values drawn at once, few enough to stay in a processor's cache."""
MOST_CELLS = 400_000
"""Values drawn in all, beyond which long samples get fewer draws, but not under 99."""


def anderson_darling(uniforms: FloatArray) -> FloatArray:
    """A^2 = -n - (1/n) sum (2i-1)[ln U_(i) + ln(1 - U_(n+1-i))] of each row of (B, n)."""
    ordered = np.clip(np.sort(uniforms, axis=-1), 1e-300, 1 - 1e-16)
    n = ordered.shape[-1]
    odd = 2 * np.arange(1, n + 1) - 1
    logs = np.log(ordered) + np.log1p(-ordered[..., ::-1])
    return np.asarray(-n - (odd * logs).sum(axis=-1) / n)


def distance_from(law: Innovation, sample: FloatArray) -> float:
    """Anderson-Darling distance of a sample (n,) from the law fitted to it."""
    return float(anderson_darling(law.uniforms(sample)))


def bootstrap_fit_test(
    sample: FloatArray, law: Innovation, *, seed: int, draws: int | None = None
) -> tuple[float, float]:
    """Distance of the sample from its fitted law, and its bootstrap p-value.

    Parameters
    ----------
    sample : array, shape (n,)
        Centred innovations.
    law : Innovation
        Fitted to the sample.
    seed : int
    draws : int, optional
        Samples drawn from the fitted law, centred and refitted as the sample was; default: the
        family's own number.

    Returns
    -------
    distance, p_value : float
    """
    rng = stream(seed, "fit test")
    draws = draws or min(law.bootstraps, max(99, MOST_CELLS // sample.size))
    distance = distance_from(law, sample)
    exceed = 0
    per_pass = max(1, CELLS // sample.size)
    for start in range(0, draws, per_pass):
        drawn = law.draw((min(per_pass, draws - start), sample.size), rng)
        drawn -= drawn.mean(axis=1, keepdims=True)
        for row, again in zip(drawn, law.refits(drawn), strict=True):
            exceed += distance_from(again, row) >= distance
    return distance, (1 + exceed) / (draws + 1)
