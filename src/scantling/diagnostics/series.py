"""All diagnostics of one bare series, such as the residuals of a submitted model."""

from __future__ import annotations

from dataclasses import dataclass

from scantling.core.record import FloatArray
from scantling.diagnostics.autoregression import Autoregression, Levels
from scantling.diagnostics.battery import sample_warnings
from scantling.diagnostics.clustering import Clustering
from scantling.diagnostics.error_findings import Finding, Worth, error_findings, heavier_word
from scantling.diagnostics.moments import MomentAnswer
from scantling.diagnostics.second_opinion import Opinion
from scantling.diagnostics.tail_index import TailIndex
from scantling.diagnostics.threshold_path import ThresholdPath, threshold_path


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesDiagnosis:
    """What one series says about its tails, moments and dependence."""

    rows: int
    """Values."""
    tail: TailIndex | None
    """Both sides; None if it could not be assessed."""
    note: str
    """Why it could not be, or what was done to the series first."""
    sides: tuple[TailIndex, ...]
    """Left and right; empty below 500 values."""
    opinions: tuple[Opinion, ...]
    """Two estimators of other kinds; empty where there is no index."""
    path: ThresholdPath | None
    """Hill's index over thresholds."""
    moments: tuple[MomentAnswer, ...]
    """Orders 1, 2, 3, 4."""
    dependence: tuple[Finding, ...]
    """Tests of dependence; empty where values have no order."""
    levels: Levels | None
    """Whether the level persists from value to value; None where values have no order."""
    clustering: Clustering | None
    """Of the size, of the shocks' where the level persists; None where values have no order."""
    worth: Worth | None
    """Clustering of extremes and effective rows; None where values have no order or no index."""
    warnings: tuple[str, ...]
    """Where the sample looks like a law that defeats the estimators."""

    @property
    def autoregression(self) -> Autoregression | None:
        """Of the levels, where they persist."""
        return None if self.levels is None else self.levels.autoregression

    @property
    def heavier(self) -> str:
        """The clearly heavier side, left or right; empty if neither."""
        return heavier_word(self.tail, self.sides)


def diagnose_series(values: FloatArray, *, time_ordered: bool, seed: int) -> SeriesDiagnosis:
    """Run every diagnostic that one series allows.

    Parameters
    ----------
    values : array, shape (n,), n >= 30
        Trusted: finite, not constant.
    time_ordered : bool
        Whether they follow one another in time.
    seed : int
        Of permutations and tie-breaking noise.
    """
    own = error_findings(values, time_ordered=time_ordered, seed=seed)
    tail, clustering = own.tail, own.clustering
    volatility = None if clustering is None else clustering.volatility
    return SeriesDiagnosis(
        rows=values.size,
        tail=tail,
        note=own.note,
        sides=own.sides,
        opinions=own.opinions,
        path=None if tail is None else threshold_path(values),
        moments=own.moments,
        dependence=own.dependence,
        levels=own.levels,
        clustering=clustering,
        worth=own.worth,
        warnings=sample_warnings(values, tail, volatility),
    )
