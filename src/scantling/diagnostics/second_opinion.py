"""Two further estimators of the tail index, of other kinds, and whether they agree.

Hill looks at log excesses over a high threshold and is right for low orders; the generalised
Pareto fit looks at plain excesses, is free of location and allows any sign of gamma, at the
price of a far wider interval.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.moments import Z90
from scantling.diagnostics.tail_index import TailIndex, index_ends, index_from_gamma, one_side

EXCESS_SHARE = 0.10
"""Share of the largest values whose excesses the generalised Pareto law is fitted to."""
LOWEST_SHAPE = -0.5
"""Below it maximum likelihood has no ordinary law; Smith (1987), Annals of Statistics 15."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Opinion:
    """The tail index by another estimator."""

    estimator: str
    """Its name, and the values it looks at."""
    count: int
    """Upper order statistics used."""
    index: float
    """Point estimate; inf where gamma <= 0.02."""
    low: float
    """Lower end of its own 90 % interval, bias not included."""
    high: float
    """Upper end; may be inf."""
    agrees: bool
    """Whether its interval and the default estimator's overlap."""


def pareto_excess_gamma(ordered: FloatArray, count: int) -> float:
    """Shape of a generalised Pareto law fitted by scipy to the excesses over X_(count+1).

    Smith (1987), Annals of Statistics 15; kept at -0.5 or above.
    """
    from scipy.stats import genpareto

    excess = ordered[:count] - ordered[count]
    scale = float(excess.mean())
    if scale <= 0:
        return 0.0
    shape = float(genpareto.fit(excess / scale, 0.1, floc=0, scale=1.0)[0])
    return max(shape, LOWEST_SHAPE)


def second_opinions(values: FloatArray, default: TailIndex) -> tuple[Opinion, Opinion]:
    """Hill on the largest 5 % and a generalised Pareto fit on the largest 10 %.

    Parameters
    ----------
    values : array, shape (n,)
        As `default` was estimated from.
    default : TailIndex
        Of the same values, both sides.
    """
    ordered = one_side(np.asarray(values, dtype=np.float64), "both")
    count = max(10, int(EXCESS_SHARE * ordered.size))
    shape = pareto_excess_gamma(ordered, count)
    fits = (
        ("Hill, largest 5 %", default.hill_count, default.hill_gamma, default.hill_error),
        ("generalised Pareto, largest 10 %", count, shape, (1 + shape) / math.sqrt(count)),
    )
    out = []
    for name, used, gamma, error in fits:
        low, high = index_ends(gamma - Z90 * error, gamma + Z90 * error)
        out.append(
            Opinion(
                estimator=name,
                count=used,
                index=index_from_gamma(gamma),
                low=low,
                high=high,
                agrees=low <= default.high and default.low <= high,
            )
        )
    return out[0], out[1]
