"""From residuals to the error law: which family, what volatility, how well it fits."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from scantling.core.checks import finite_vector
from scantling.core.record import FloatArray
from scantling.diagnostics.autoregression import Autoregression
from scantling.diagnostics.clustering import find_dependence
from scantling.diagnostics.tail_index import (
    LARGEST,
    MINIMUM,
    SMALLEST,
    TailIndex,
    tail_index,
)
from scantling.diagnostics.volatility import Volatility
from scantling.errors import InputError
from scantling.law.averaging import open_spread
from scantling.law.catalogue import CATALOGUE, FAMILIES
from scantling.law.choice import choose
from scantling.law.families import ErrorLaw, Fit
from scantling.law.goodness import bootstrap_fit_test
from scantling.law.splice import enough_for_splice, fit_splice
from scantling.law.spliced import Spliced, spliced_spread

REJECT_LEVEL = 0.05


def fit_innovations(
    values: FloatArray, *, family: str | None, seed: int, tail: TailIndex | None = None,
    time_ordered: bool = False,
) -> ErrorLaw:  # fmt: skip
    """Fit a family to independent innovations (centred, shape (n,)).

    Without a family: the one `choose` finds, and, if the bootstrap test rejects it and each tail
    holds 25 values, the spliced law. The work is done in units of the root mean square.
    """
    unit = float(np.sqrt((values**2).mean()))
    z = values / unit
    if family == "spliced":
        law = _spliced(z, tail or tail_index(z, seed=seed), seed)
    elif family:
        innovation = CATALOGUE[family].fit(z)
        distance, p_value = bootstrap_fit_test(z, innovation, seed=seed)
        law = ErrorLaw(
            innovation=innovation,
            spread=innovation.spread(z, seed=seed),
            fit=Fit(distance=distance, p_value=p_value),
        )
    else:
        law = _chosen(z, tail, seed, time_ordered)
    return law.scaled(unit)


def _chosen(z: FloatArray, tail: TailIndex | None, seed: int, time_ordered: bool) -> ErrorLaw:
    """The family chosen, or spliced tails where it is rejected and there are enough of them."""
    choice = choose(z, time_ordered=time_ordered, seed=seed)
    innovation = choice.laws[choice.family]
    distance, p_value = bootstrap_fit_test(z, innovation, seed=seed)
    other, margin, error = choice.margin(choice.family)
    fit = Fit(
        distance=distance, p_value=p_value, candidates=choice.candidates,
        runner_up=other, margin=margin, margin_error=error,
    )  # fmt: skip
    if p_value <= REJECT_LEVEL:
        found, why = _tail_or_reason(z, tail, seed)
        if found is not None:
            spliced = _spliced(z, found, seed)
            note = f"the {choice.family} law is rejected (p = {p_value:.3f}), so tails are spliced"
            return replace(
                spliced,
                fit=replace(
                    spliced.fit, candidates=fit.candidates, runner_up=choice.family, note=note
                ),
            )
        fit = replace(fit, note=f"the {choice.family} law is rejected and {why}")
    return ErrorLaw(innovation=innovation, spread=open_spread(z, choice, seed=seed), fit=fit)


def _spliced(z: FloatArray, tail: TailIndex, seed: int) -> ErrorLaw:
    """The sample's body, with tails of the reported index."""
    innovation = Spliced(splice=fit_splice(z, tail.gamma))
    distance, p_value = bootstrap_fit_test(z, innovation, seed=seed)
    return ErrorLaw(
        innovation=innovation,
        spread=spliced_spread(innovation, tail, z.size),
        fit=Fit(distance=distance, p_value=p_value),
    )


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
    tail: TailIndex | None = None, time_ordered: bool = False,
    autoregression: Autoregression | None = None,
) -> ErrorLaw:  # fmt: skip
    """Law of errors whose volatility and autoregression, if any, are already fitted.

    Under volatility the innovations are rescaled to unit variance, so that the fitted path
    keeps its meaning.
    """
    if autoregression is not None:
        shocks = autoregression.shocks(values - values.mean())
        law = error_law(
            shocks, volatility=volatility, seed=seed, family=family, tail=tail,
            time_ordered=time_ordered,
        )  # fmt: skip
        return replace(law, autoregression=autoregression)
    if volatility is None:
        return fit_innovations(
            values - values.mean(), family=family, seed=seed, tail=tail, time_ordered=time_ordered
        )
    z = values / volatility.path
    z = (z - z.mean()) / z.std()
    law = fit_innovations(z, family=family, seed=seed, time_ordered=True)
    return replace(law, volatility=volatility)


def fit_law(
    values: Any, *, family: str | None = None, time_ordered: bool = False, seed: int = 0
) -> ErrorLaw:
    """Fit an error law to residuals.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        Residuals, in time order if `time_ordered`.
    family : str, optional
        One of normal, laplace, ged, student-t, skewed-t, stable, spliced; default: chosen by
        likelihood and tails out of sample (`law.choice.choose`), then by goodness of fit.
    time_ordered : bool
        Whether serial dependence is looked for: an autoregression is fitted where the
        permutation test on signs rejects at 5 %, GARCH(1,1) or GJR(1,1) where that on absolute
        values does.
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
    volatility, levels = None, None
    if time_ordered:
        found, clustering = find_dependence(array - array.mean(), seed=seed)
        levels, volatility = found.autoregression, clustering.volatility
    return error_law(
        array, volatility=volatility, autoregression=levels, seed=seed, family=family,
        time_ordered=time_ordered,
    )  # fmt: skip
