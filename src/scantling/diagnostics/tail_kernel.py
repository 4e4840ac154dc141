"""Every tail estimate of many series at once, from their magnitudes in time order."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.greenwood import greenwood_p_value, greenwood_statistic
from scantling.diagnostics.tail_estimators import (
    block_standard_error,
    hill,
    hill_influence,
    influence,
    weighted_hill,
    weighted_hill_coefficients,
)
from scantling.diagnostics.tail_interval import dependent_error, gamma_interval


@dataclass(frozen=True, slots=True, kw_only=True)
class TailEstimates:
    """Estimates of P series, each field of shape (P,)."""

    gamma: FloatArray
    """1/index by the weighted Hill regression."""
    error: FloatArray
    """Its standard error: the block bootstrap's, in closed form."""
    gamma_low: FloatArray
    """Lower end of gamma's interval; may be negative."""
    gamma_high: FloatArray
    """Upper end."""
    hill_gamma: FloatArray
    """Hill on the largest 5 %."""
    hill_error: FloatArray
    """The larger of gamma/sqrt(k) and the block form."""
    p_value: FloatArray
    """Of the thin-tail test."""


def tail_estimates(
    magnitude: FloatArray,
    counts: tuple[int, int, int],
    *,
    block: int,
    level: float = 0.90,
    skew_bias: FloatArray | float = 0.0,
) -> TailEstimates:
    """Estimate the tail of every column of `magnitude`.

    Parameters
    ----------
    magnitude : array, shape (n, P)
        Distances from the median, in time order; of a one-sided tail, signed ones.
    counts : (kappa, hill, thin)
        Upper order statistics for the weighted Hill, for Hill, and for the thin-tail test.
    block : int
        Rows that may depend on each other; 1: none do.
    level : float
        Nominal coverage of the interval.
    skew_bias : float or array, shape (P,)
        Upward bias from pooling unequal halves.
    """
    n = magnitude.shape[0]
    kappa, k_hill, k_thin = counts
    order = np.argsort(-magnitude, axis=0, kind="stable")
    ordered = np.take_along_axis(magnitude, order, axis=0)
    logs = np.log(np.maximum(ordered, np.finfo(float).tiny))
    errors = []
    for by_rank in (
        influence(logs, weighted_hill_coefficients(kappa)),
        hill_influence(logs, k_hill),
    ):
        in_time = np.empty_like(logs)
        np.put_along_axis(in_time, order, by_rank, axis=0)
        errors.append(block_standard_error(in_time, block))
        if len(errors) == 1:
            independent = block_standard_error(in_time, 1)
    gamma = weighted_hill(ordered, kappa)
    second = hill(ordered, k_hill)
    robust = dependent_error(errors[0], independent, n, block)
    low, high = gamma_interval(gamma, robust, 2 * kappa, level, skew_bias=skew_bias)
    return TailEstimates(
        gamma=gamma,
        error=errors[0],
        gamma_low=low,
        gamma_high=high,
        hill_gamma=second,
        hill_error=np.maximum(errors[1], second / np.sqrt(k_hill)),
        p_value=greenwood_p_value(greenwood_statistic(ordered, k_thin), k_thin),
    )
