"""The tail index that a volatility recurrence implies: the Kesten equation."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray
from scantling.errors import InputError

LARGEST_INDEX = 1000.0
"""An index above this is returned as infinity."""

STEP = 0.01
"""Step of the trapezoid rule in ln z; the integrands are analytic, so that its
error falls like exp(-constant / STEP) and is below rounding here."""

SMALL = -45.0
LARGE_THIN, LARGE_HEAVY = 12.0, 45.0
"""Ends of the rule in ln|z|, of laws whose moments all exist and of others."""

LogMoment = Callable[[float], float]


@dataclass(frozen=True, slots=True, kw_only=True)
class ShockDensity:
    """A law of the innovations by its density."""

    log_density: Callable[[FloatArray], FloatArray]
    """Of the innovation, either sign, in units of its sd."""
    tail_index: float
    """Moments below it exist; inf if all do."""


def kesten_index(
    alpha: float,
    beta: float,
    *,
    gamma: float = 0.0,
    moment_of: Literal["normal"] | float | FloatArray | ShockDensity = "normal",
) -> float:
    """Return the tail index kappa of e_t = sigma_t z_t under GARCH(1,1) or GJR.

    The positive root of E[(alpha z^2 + gamma z^2 1(z < 0) + beta)^(kappa/2)] = 1
    with E z^2 = 1. It exists if E ln(.) < 0 and the moments reach 1.

    Parameters
    ----------
    alpha, beta : float
        Weights of the last squared error and of the last variance, at least 0.
    gamma : float
        Extra weight of a negative error; alpha + gamma at least 0.
    moment_of : 'normal', a number above 2, a ShockDensity, or an array
        Law of z: standard normal; Student t with that many degrees of freedom
        at unit variance (the index then stays below it); a law of unit
        variance by its density; or the empirical law of an array, which is
        rescaled to mean square 1.

    Returns
    -------
    float
        The index; infinity above 1000 or where it does not exist because the
        recurrence never expands; 0 where no stationary solution exists.

    Raises
    ------
    InputError
        If a weight is negative or not finite, or moment_of is none of these.

    Sources: Kesten (1973), Acta Mathematica 131, 207-248; Goldie (1991),
    Annals of Applied Probability 1, 126-166; Mikosch et al. (2000), Annals of
    Statistics 28, 1427-1451.
    """
    alpha = between(alpha, "alpha", 0.0, 1e6, closed=True)
    beta = between(beta, "beta", 0.0, 1e6, closed=True)
    gamma = between(gamma, "gamma", -alpha, 1e6, closed=True)
    density = _density(moment_of)
    if density is None:
        log_moment, own = _log_moment_of_sample(alpha, gamma, beta, moment_of), math.inf
    else:
        own = density.tail_index
        if math.isfinite(own) and max(alpha, alpha + gamma) <= 0:
            return own if beta < 1 else 0.0
        log_moment = _log_moment_of_law(alpha, gamma, beta, density)
    ceiling = min(LARGEST_INDEX, own * (1 - 1e-12))
    root = _positive_root(log_moment, ceiling)
    return root if root < LARGEST_INDEX else math.inf


def _density(moment_of: Any) -> ShockDensity | None:
    """The density asked for; None for an array."""
    if isinstance(moment_of, ShockDensity):
        return moment_of
    if isinstance(moment_of, str):
        if moment_of != "normal":
            raise InputError(
                "moment_of: 'normal', degrees of freedom above 2 or an array is needed;"
                f" found {moment_of!r}"
            )
        return normal_density()
    if np.ndim(moment_of) == 0:
        return student_density(between(moment_of, "moment_of", 2.0, math.inf))
    return None


def _positive_root(log_moment: LogMoment, ceiling: float) -> float:
    """Return the positive root of a convex function that is 0 at 0; ceiling if beyond it.

    It is 0 if the function is not negative to the right of 0.
    """
    from scipy.optimize import brentq

    high = min(2.0, ceiling)
    while log_moment(high) <= 0:
        if high >= ceiling:
            return ceiling
        high = min(2 * high, ceiling)
    low = high / 2
    while log_moment(low) >= 0:
        low /= 2
        if low < 1e-7:
            return 0.0
    return float(brentq(log_moment, low, high, xtol=1e-12, rtol=1e-14))


def normal_density() -> ShockDensity:
    """The standard normal."""
    return ShockDensity(
        log_density=lambda z: -(z**2) / 2 - math.log(2 * math.pi) / 2, tail_index=math.inf
    )


def student_density(nu: float) -> ShockDensity:
    """Student t at unit variance; nu above 2."""
    constant = math.lgamma((nu + 1) / 2) - math.lgamma(nu / 2) - math.log(math.pi * (nu - 2)) / 2
    return ShockDensity(
        log_density=lambda z: constant - (nu + 1) / 2 * np.log1p(z**2 / (nu - 2)), tail_index=nu
    )


def log_expectation(
    density: ShockDensity, right: Callable[[FloatArray], FloatArray],
    left: Callable[[FloatArray], FloatArray] | None = None,
) -> float:  # fmt: skip
    """ln E exp g(ln|z|), g being `right` for positive and `left` for negative z.

    Trapezoid rule in s = ln|z| for each sign of z. Past the last node of a law with power tails
    the integrand is exp(rate s) times a constant, so its nodes to infinity add up to a
    geometric series.
    """
    nodes = _nodes(density)
    return _sum(
        density, [w + g(nodes[0]) for w, g in zip(nodes[1:], (right, left or right), strict=True)]
    )


def _nodes(density: ShockDensity) -> tuple[FloatArray, FloatArray, FloatArray]:
    """ln|z|, and the log weight of each positive and each negative node."""
    heavy = math.isfinite(density.tail_index)
    s = np.arange(SMALL, LARGE_HEAVY if heavy else LARGE_THIN, STEP)
    z = np.exp(s)
    right, left = (density.log_density(sign * z) + s + math.log(STEP) for sign in (1.0, -1.0))
    return s, right, left


def _sum(density: ShockDensity, exponents: list[FloatArray]) -> float:
    """Log of the sum of exp over both signs, the nodes beyond the last included."""
    from scipy.special import logsumexp

    if math.isfinite(density.tail_index):
        for exponent in exponents:
            # The rate at the last node is kappa - nu where A grows, -nu where it does not.
            rate = exponent[-1] - exponent[-2]
            exponent[-1] -= math.log(-math.expm1(min(rate, -1e-15)))
    return float(logsumexp(np.concatenate(exponents)))


def _log_moment_of_law(alpha: float, gamma: float, beta: float, density: ShockDensity) -> LogMoment:
    """Return kappa -> ln E A^(kappa/2) for z of this density, of variance 1."""
    s, right, left = _nodes(density)
    square = np.exp(2 * s)
    with np.errstate(divide="ignore"):
        growth = [np.log(weight * square + beta) for weight in (alpha, alpha + gamma)]

    def log_moment(kappa: float) -> float:
        return _sum(density, [right + kappa / 2 * growth[0], left + kappa / 2 * growth[1]])

    return log_moment


def _log_moment_of_sample(alpha: float, gamma: float, beta: float, sample: Any) -> LogMoment:
    """Return kappa -> ln mean A^(kappa/2) over a sample, rescaled to mean square 1."""
    from scipy.special import logsumexp

    z = finite_vector(sample, "moment_of", minimum=2)
    top = float(np.abs(z).max())
    if not top:
        raise InputError("moment_of: values that vary are needed; all are 0")
    z = z / top
    z = z / math.sqrt(float(np.mean(z**2)))
    with np.errstate(divide="ignore"):
        log_factor = np.log((alpha + gamma * (z < 0)) * z**2 + beta)

    def log_moment(kappa: float) -> float:
        return float(logsumexp(kappa / 2 * log_factor)) - math.log(z.size)

    return log_moment
