"""Goodness of fit: Anderson-Darling distance, judged by parametric bootstrap with refitting.

Tabulated p-values do not apply once parameters are fitted: they reject almost never.
Stute et al. (1993), Metrika 40; the distance rather than Kolmogorov's because it weighs tails.
"""

from __future__ import annotations

import numpy as np
from scipy.special import ndtr, stdtr

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.tail_estimators import weighted_hill
from scantling.diagnostics.tail_index import one_side
from scantling.law.splice import Splice, fit_splice
from scantling.law.student import fit_student

BOOTSTRAP_DRAWS = 199
SPLICE_DRAWS = 99


def anderson_darling(uniforms: FloatArray) -> FloatArray:
    """A^2 = -n - (1/n) sum (2i-1)[ln U_(i) + ln(1 - U_(n+1-i))] of each row of (B, n)."""
    ordered = np.clip(np.sort(uniforms, axis=-1), 1e-300, 1 - 1e-16)
    n = ordered.shape[-1]
    odd = 2 * np.arange(1, n + 1) - 1
    logs = np.log(ordered) + np.log1p(-ordered[..., ::-1])
    return np.asarray(-n - (odd * logs).sum(axis=-1) / n)


def fitted_distance(samples: FloatArray, family: str) -> FloatArray:
    """Distance of each row of (B, n) from the law fitted to that row, location 0."""
    if family == "normal":
        scale = np.sqrt((samples**2).mean(axis=1))
        return anderson_darling(ndtr(samples / scale[:, None]))
    gamma, scale, _ = fit_student(samples)
    return anderson_darling(stdtr((1 / gamma)[:, None], samples / scale[:, None]))


def bootstrap_fit_test(
    sample: FloatArray, family: str, gamma: float, *, seed: int, draws: int = BOOTSTRAP_DRAWS
) -> tuple[float, float]:
    """Distance of the sample from its fitted law, and its bootstrap p-value.

    Parameters
    ----------
    sample : array, shape (n,)
        Centred innovations.
    family : {'normal', 'student-t'}
    gamma : float
        Fitted 1/df; ignored for the normal.
    seed : int
    draws : int
        Samples drawn from the fitted law, centred and refitted as the sample was.

    Returns
    -------
    distance, p_value : float
    """
    rng = stream(seed, "fit test")
    distance = float(fitted_distance(sample[None], family)[0])
    exceed = 0
    per_pass = max(1, 2_000_000 // sample.size)
    for start in range(0, draws, per_pass):
        size = (min(per_pass, draws - start), sample.size)
        drawn = rng.standard_normal(size) if family == "normal" else rng.standard_t(1 / gamma, size)
        drawn -= drawn.mean(axis=1, keepdims=True)
        exceed += int((fitted_distance(drawn, family) >= distance).sum())
    return distance, (1 + exceed) / (draws + 1)


def bootstrap_splice_test(
    sample: FloatArray, splice: Splice, *, seed: int, draws: int = SPLICE_DRAWS
) -> tuple[float, float]:
    """Distance of the sample from its spliced law, and its bootstrap p-value.

    Each drawn sample gets its own tail index, body and scales, as the sample did. The body being
    empirical, what is tested is the tails.

    Parameters
    ----------
    sample : array, shape (n,)
    splice : Splice
        Fitted to the sample.
    seed : int
    draws : int

    Returns
    -------
    distance, p_value : float
    """
    rng = stream(seed, "spliced fit test")
    distance = float(anderson_darling(splice.cdf(sample)))
    exceed = 0
    for _ in range(draws):
        drawn = splice.quantile(rng.random(sample.size))
        ordered = one_side(drawn, "both")
        again = fit_splice(drawn, float(weighted_hill(ordered, drawn.size // 2)))
        exceed += float(anderson_darling(again.cdf(drawn))) >= distance
    return distance, (1 + exceed) / (draws + 1)
