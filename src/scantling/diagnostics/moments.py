"""Which moments exist: exists, missing or unclear.

The answer rests on the two intervals of the tail index; a randomised test of an infinite
moment can veto 'exists', never establish it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import gammaln, ndtr

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.tail_index import TailIndex, moderate, tail_index

Z90 = 1.6448536269514722
ORDERS = (1, 2, 3, 4)
HILL_UP_TO = 2.5
"""Order up to which Hill's index of the largest 5 % of values decides."""
MINIMUM_ROWS = 100
"""Below it every answer is 'unclear': no sample that small can tell."""
VETO_DRAWS = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class MomentAnswer:
    """Whether the absolute moment of one order exists."""

    order: float
    """Order of the absolute moment."""
    answer: str
    """exists | missing | unclear."""
    reason: str
    """One sentence."""


def interval_answers(
    order: float,
    gamma: FloatArray,
    error: FloatArray,
    hill_gamma: FloatArray,
    hill_error: FloatArray,
    p_value: FloatArray,
) -> np.ndarray:
    """Three-outcome rule on many series: +1 exists, -1 missing, 0 unclear.

    Up to order 2.5 the interval of Hill on the largest 5 % decides; above it that of the
    weighted Hill, with margins that keep wrong answers rare at the boundary (simulated). From
    order 6 'missing' also needs the thin-tail test to find a finite index.
    """
    bar = 1 / order
    if order <= HILL_UP_TO:
        exists = hill_gamma + Z90 * hill_error < bar
        missing = hill_gamma - Z90 * hill_error > bar
    else:
        margin = 0.02 if order < 3.5 else 0.0
        exists = gamma + Z90 * error + margin < bar
        missing = gamma - Z90 * error - 0.03 > bar
        if order >= 6:
            missing &= p_value <= 0.05
    return np.asarray(exists.astype(int) - missing.astype(int))


def normal_moment(order: float) -> float:
    """E|N|^order of a standard normal."""
    return math.exp(order / 2 * math.log(2) + gammaln((order + 1) / 2) - 0.5 * math.log(math.pi))


def scaled_moment(values: FloatArray, order: float) -> float:
    """Scale-free absolute moment of the given order: 1 for normal data, diverging if infinite."""
    low = order / 2 if order <= 1 else 1.0 if order <= 2 else 2.0
    values = moderate(values)
    magnitude = np.abs(values - values.mean())
    magnitude = magnitude / magnitude.max()
    raw = float((magnitude**order).mean() / (magnitude**low).mean() ** (order / low))
    return raw * normal_moment(low) ** (order / low) / normal_moment(order)


def coin_share(moment: float) -> float:
    """P(zeta = 1) at u = 1 of the randomised test: Phi(exp(-moment/2)), 1/2 if it diverges."""
    return float(ndtr(math.exp(-min(moment, 1400.0) / 2)))


def infinite_moment_share(values: FloatArray, order: float, *, seed: int) -> float:
    """Share of randomised draws that keep 'the moment is infinite' at 5 %.

    Trapani (2016), Journal of Econometrics 191, averaged as in Horvath et al. (2019), Journal
    of Econometrics 209 (both from memory). r = floor(n^0.8) artificial normals a draw.
    """
    artificial = int(values.size**0.8)
    above = coin_share(scaled_moment(values, order))
    rng = stream(seed, "randomised moment test")
    # Of the artificial normals, those below -1, between, and above 1 after scaling.
    counts = rng.multinomial(artificial, [1 - above, 2 * above - 1, 1 - above], VETO_DRAWS)
    theta = np.stack([counts[:, 0], counts[:, 0] + counts[:, 1]]) - artificial / 2
    statistic = (4 / artificial * theta**2).mean(axis=0)
    return float((statistic <= 3.841458820694124).mean())


def veto_bar() -> float:
    """Share from which 'infinite' is kept: 0.95 less the law of the iterated logarithm's band."""
    band = math.sqrt(0.95 * 0.05) * math.sqrt(2 * math.log(math.log(VETO_DRAWS)) / VETO_DRAWS)
    return 0.95 - band


def moment_answer(
    values: FloatArray,
    tail: TailIndex,
    order: float,
    *,
    seed: int,
    volatility_index: float | None = None,
) -> MomentAnswer:
    """Answer for one series whose tail is already estimated.

    Parameters
    ----------
    values : array, shape (n,)
    tail : TailIndex
        Of the same values, both sides.
    order : float
    seed : int
    volatility_index : float, optional
        Tail index that the fitted volatility implies, where there is clustering. For orders of
        4 and more 'exists' is then granted only if it exceeds the order.
    """
    if values.size < MINIMUM_ROWS:
        reason = f"{values.size} rows cannot tell ({MINIMUM_ROWS} are needed)"
        return MomentAnswer(order=order, answer="unclear", reason=reason)
    columns = [
        np.array([v])
        for v in (tail.gamma, tail.gamma_error, tail.hill_gamma, tail.hill_error, tail.p_value)
    ]
    code = int(interval_answers(order, *columns)[0])
    shown = "largest 5 %" if order <= HILL_UP_TO else "upper half"
    if code > 0 and order >= 4 and volatility_index is not None and volatility_index <= order:
        reason = f"the fitted volatility implies tail index {volatility_index:.1f}"
        return MomentAnswer(order=order, answer="unclear", reason=reason)
    if code > 0 and infinite_moment_share(values, order, seed=seed) >= veto_bar():
        reason = "the interval says it exists, the randomised test that it is infinite"
        return MomentAnswer(order=order, answer="unclear", reason=reason)
    if code > 0 and order > HILL_UP_TO and tail.low <= order:
        reason = (
            f"its interval lies above {order:g} only before bias is allowed for; the tail index may"
            f" be as low as {tail.low:.1f}"
        )
        return MomentAnswer(order=order, answer="unclear", reason=reason)
    answer = {1: "exists", -1: "missing", 0: "unclear"}[code]
    word = {1: "above", -1: "below", 0: "on both sides of"}[code]
    where = "" if tail.side == "both" else f" on the {tail.side}, the heavier side,"
    reason = (
        f"the interval of the tail index from the {shown} of values{where} lies {word} {order:g}"
    )
    return MomentAnswer(order=order, answer=answer, reason=reason)


def moment_exists(values: Any, order: float, *, seed: int = 0) -> MomentAnswer:
    """Say whether E|X|^order exists for the law behind a series.

    Up to order 2.5 the 90 % interval of Hill's index from the largest 5 % of values answers,
    above it that of the default estimator, both allowing for serial dependence: 'exists' where
    the order lies below it, 'missing' where above, 'unclear' where inside or with fewer than 100
    values. The randomised test can turn 'exists' into 'unclear', nothing else. Both sides are
    pooled and no volatility is fitted: `diagnose` also takes the heavier side where the two
    differ, and the index that a fitted volatility implies.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        In time order where there is one.
    order : float
        Between 0 and 20.
    seed : int
        Of the randomised test and of the noise that breaks ties.

    Raises
    ------
    InputError
        If `values` are not finite numbers, too few, constant or discrete, or the order is
        out of range.
    """
    between(order, "order", 0, 20, closed=False)
    array = finite_vector(values, "values", minimum=30)
    return moment_answer(array, tail_index(array, seed=seed), float(order), seed=seed)
