"""Does volatility cluster, and if so, which path does it follow?"""

from __future__ import annotations

from dataclasses import dataclass

from scantling.core.record import FloatArray
from scantling.diagnostics.autoregression import Levels, find_autoregression
from scantling.diagnostics.dependence import LEVEL, TestResult, absolute_ljung_box_permutation
from scantling.diagnostics.volatility import Volatility, choose_volatility

NEAR_INTEGRATION = 0.97
"""Persistence above which tail intervals from the data are too short (simulated)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Clustering:
    """The test for clustering, and the volatility fitted where it rejects."""

    test: TestResult
    """Autocorrelation of absolute values, by permutation."""
    volatility: Volatility | None
    """GARCH(1,1) or GJR(1,1), or None: constant."""
    reason: str
    """Why no volatility was fitted; empty if it was."""


def find_clustering(values: FloatArray, *, seed: int) -> Clustering:
    """Test absolute values for autocorrelation at 5 % and fit GARCH or GJR(1,1) if it is found.

    Parameters
    ----------
    values : array, shape (n,)
        Errors in time order.
    seed : int
        Of the permutations.
    """
    test = absolute_ljung_box_permutation(values, seed=seed)
    if test.p_value > LEVEL:
        return Clustering(test=test, volatility=None, reason="no clustering found")
    fitted = choose_volatility(values, seed=seed)
    if isinstance(fitted, Volatility):
        return Clustering(test=test, volatility=fitted, reason="")
    return Clustering(test=test, volatility=None, reason=fitted)


def find_dependence(values: FloatArray, *, seed: int) -> tuple[Levels, Clustering]:
    """Whether the level persists, and whether the size of its shocks clusters.

    Parameters
    ----------
    values : array, shape (n,)
        Errors in time order, centred.
    seed : int
        Of the permutations.
    """
    levels = find_autoregression(values, seed=seed)
    return levels, find_clustering(levels.shocks(values), seed=seed)
