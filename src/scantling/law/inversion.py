"""Quantiles of a law at normal scores, by a table of its distribution function."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr, ndtri

from scantling.core.even_table import EvenTable
from scantling.core.record import FloatArray

if TYPE_CHECKING:
    from scantling.law.innovation import Innovation

REACH = 7.0
"""Normal scores tabulated, to either side; one draw in 10^12 lies beyond."""
CELLS = 4096
POINTS = 4000
"""Points to either side at which the distribution function is computed."""


@lru_cache(maxsize=256)
def quantile_table(law: Innovation) -> EvenTable:
    """Quantile of the law at the probability Phi(z) of a normal score z, within 1e-5 of itself."""
    return EvenTable.of(inverse(law.cdf, law.unit), REACH, CELLS)


def inverse(
    cdf: Callable[[FloatArray], FloatArray], unit: float
) -> Callable[[FloatArray], FloatArray]:
    """Quantiles at normal scores z within `REACH`, of a law with sizes of the order of `unit`."""
    least = float(ndtr(-REACH))
    reach = unit
    while float(cdf(np.array([-reach]))[0]) > least or float(cdf(np.array([reach]))[0]) < 1 - least:
        reach *= 2
    x = unit * np.sinh(np.linspace(-1, 1, 2 * POINTS + 1) * np.arcsinh(reach / unit))
    scores = np.clip(ndtri(np.clip(cdf(x), 0.0, 1.0)), -9.0, 9.0)
    return lambda z: np.interp(z, scores, x)
