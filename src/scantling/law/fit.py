"""From residuals to the error law: which family, what volatility, how well it fits."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np

from scantling.core.checks import finite_vector
from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.clustering import find_clustering
from scantling.diagnostics.moments import Z90
from scantling.diagnostics.tail_index import (
    LARGEST,
    MINIMUM,
    SMALLEST,
    TailIndex,
    tail_index,
)
from scantling.diagnostics.volatility import Volatility
from scantling.errors import InputError
from scantling.law.families import FAMILIES, ErrorLaw, Fit, ShapeSpread
from scantling.law.goodness import bootstrap_fit_test, bootstrap_splice_test
from scantling.law.splice import enough_for_splice, fit_splice
from scantling.law.student import fit_student, profile

REJECT_LEVEL = 0.05
TIE_UNITS = 2.0
"""Criteria this close are a tie, and the heavier law is taken."""
FINE_SCAN = np.concatenate([[0.002], np.arange(0.01, 0.951, 0.01)])


def _normal_likelihood(values: FloatArray) -> float:
    n = values.size
    return -0.5 * n * (math.log(2 * math.pi * float((values**2).mean())) + 1)


def student_spread(values: FloatArray) -> ShapeSpread:
    """Weights over 1/df given the sample: its profile likelihood, flat prior on (0, 0.95].

    The normal is the lower end. The scale's error is the one at known df,
    sqrt((df + 3)/(2 df n)).
    """
    likelihood, scale = profile(values[None], FINE_SCAN)
    weight = np.exp(likelihood[:, 0] - likelihood[:, 0].max())
    weight /= weight.sum()
    df = 1 / float(FINE_SCAN @ weight)
    return ShapeSpread(
        gammas=read_only(FINE_SCAN),
        weights=read_only(weight),
        scales=read_only(scale[:, 0]),
        log_scale_error=math.sqrt((df + 3) / (2 * df * values.size)),
    )


def spliced_spread(tail: TailIndex, n: int) -> ShapeSpread:
    """Weights over the shape of spliced tails: normal, with the tail index's interval as theirs."""
    top, bottom = 1 / tail.low, 1 / tail.high
    centre, error = (top + bottom) / 2, max((top - bottom) / 2 / Z90, 1e-3)
    gammas = np.linspace(max(0.0, centre - 3 * error), max(0.02, centre + 3 * error), 61)
    weight = np.exp(-0.5 * ((gammas - centre) / error) ** 2)
    return ShapeSpread(
        gammas=read_only(gammas),
        weights=read_only(weight / weight.sum()),
        scales=read_only(np.ones(gammas.size)),
        log_scale_error=math.sqrt(2 * (1 + max(tail.gamma, 0)) / (0.1 * n)),
    )


def fit_innovations(
    values: FloatArray, *, family: str | None, seed: int, tail: TailIndex | None = None
) -> ErrorLaw:
    """Fit a family to independent innovations (centred, shape (n,)).

    Without a family: the better of normal and Student t by the Bayes criterion (a tie goes to
    the heavier), and, if the bootstrap test rejects it and each tail holds 25 values, the
    spliced law.
    """
    n = values.size
    gammas, scales, likelihoods = fit_student(values[None])
    gamma = float(gammas[0])
    criteria = {
        "normal": -2 * _normal_likelihood(values) + math.log(n),
        "student-t": -2 * float(likelihoods[0]) + 2 * math.log(n),
    }
    ranked = tuple(sorted(criteria.items(), key=lambda pair: pair[1]))
    chosen = family or ranked[0][0]
    if not family and abs(ranked[0][1] - ranked[1][1]) <= TIE_UNITS:
        chosen = "student-t"
    spread = student_spread(values)
    fit = Fit(distance=None, p_value=None, candidates=ranked)
    if chosen != "spliced":
        distance, p_value = bootstrap_fit_test(values, chosen, gamma, seed=seed)
        fit = replace(fit, distance=distance, p_value=p_value)
        rejected = p_value <= REJECT_LEVEL
        tail, why = _tail_or_reason(values, tail, seed)
        if family or not (rejected and tail):
            note = f"the {chosen} law is rejected and {why}"
            if chosen == "normal":
                scale, df = float(np.sqrt((values**2).mean())), math.inf
            else:
                scale, df = float(scales[0]), 1 / gamma
            return ErrorLaw(
                family=chosen, scale=scale, df=df, spread=spread,
                fit=replace(fit, note=note if rejected and not family else ""),
            )  # fmt: skip
        fit = replace(
            fit, note=f"the {chosen} law is rejected (p = {p_value:.3f}), so tails are spliced"
        )
    if tail is None:
        tail = tail_index(values, seed=seed)
    splice = fit_splice(values, tail.gamma)
    distance, p_value = bootstrap_splice_test(values, splice, seed=seed)
    return ErrorLaw(
        family="spliced", scale=1.0, splice=splice, spread=spliced_spread(tail, n),
        fit=replace(fit, distance=distance, p_value=p_value),
    )  # fmt: skip


def _tail_or_reason(
    values: FloatArray, tail: TailIndex | None, seed: int
) -> tuple[TailIndex | None, str]:
    """The tail index a spliced law needs, or why there can be no such law."""
    if not enough_for_splice(values.size):
        return None, f"{values.size} rows are too few to splice tails"
    if tail is not None:
        return tail, ""
    try:
        return tail_index(values, seed=seed), ""
    except InputError as reason:
        return None, f"tails cannot be spliced: {str(reason).removeprefix('values: ')}"


def error_law(
    values: FloatArray, *, volatility: Volatility | None, seed: int, family: str | None = None,
    tail: TailIndex | None = None,
) -> ErrorLaw:  # fmt: skip
    """Law of errors whose volatility, if any, is already fitted.

    Under volatility the innovations are rescaled to unit variance, so that the fitted path
    keeps its meaning.
    """
    if volatility is None:
        return fit_innovations(values - values.mean(), family=family, seed=seed, tail=tail)
    z = values / volatility.path
    z = (z - z.mean()) / z.std()
    law = fit_innovations(z, family=family, seed=seed)
    return replace(law, volatility=volatility)


def fit_law(
    values: Any, *, family: str | None = None, time_ordered: bool = False, seed: int = 0
) -> ErrorLaw:
    """Fit an error law to residuals.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        Residuals, in time order if `time_ordered`.
    family : {'normal', 'student-t', 'spliced'}, optional
        Default: chosen by fit.
    time_ordered : bool
        Whether volatility clustering is looked for; GARCH(1,1) is fitted where the
        permutation test on absolute values rejects at 5 %.
    seed : int
        Of the permutation and bootstrap tests.

    Raises
    ------
    InputError
        If `values` are not finite numbers or too few, are constant or of a size whose squares
        overflow, the family is unknown, or
        each tail would hold fewer than 25 values under 'spliced'.
    """
    array = finite_vector(values, "values", minimum=MINIMUM)
    if np.ptp(array / 2) == 0:
        raise InputError("values: constant, so there is no law to fit")
    top = float(np.abs(array).max())
    if not SMALLEST <= top <= LARGEST:
        raise InputError(
            f"values: a largest size between {SMALLEST:g} and {LARGEST:g} is needed; found {top:g}"
        )
    if family is not None and family not in FAMILIES:
        raise InputError(f"family: one of {', '.join(FAMILIES)} is needed; found {family!r}")
    if family == "spliced" and not enough_for_splice(array.size):
        raise InputError(f"family: spliced tails need 250 values; found {array.size}")
    volatility = find_clustering(array, seed=seed).volatility if time_ordered else None
    return error_law(array, volatility=volatility, seed=seed, family=family)
