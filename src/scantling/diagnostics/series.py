"""All diagnostics of one bare series, such as the residuals of a submitted model."""

from __future__ import annotations

from dataclasses import dataclass

from scantling.core.record import FloatArray
from scantling.diagnostics.battery import sample_warnings
from scantling.diagnostics.clustering import Clustering
from scantling.diagnostics.error_findings import Finding, error_findings
from scantling.diagnostics.extremes import (
    ExtremeClustering,
    effective_rows,
    extreme_clustering,
    tail_effective_rows,
)
from scantling.diagnostics.moments import MomentAnswer
from scantling.diagnostics.second_opinion import Opinion, second_opinions
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
    clustering: Clustering | None
    """None where values have no order."""
    extremes: ExtremeClustering | None
    """Clustering of the largest values; None where they have no order."""
    effective_rows: float | None
    """Independent values whose mean would be as exact; None where they have no order."""
    tail_effective_rows: float | None
    """Independent values whose tail index would be as exact; None likewise."""
    warnings: tuple[str, ...]
    """Where the sample looks like a law that defeats the estimators."""


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
    ordered = time_ordered and tail is not None
    return SeriesDiagnosis(
        rows=values.size,
        tail=tail,
        note=own.note,
        sides=own.sides,
        opinions=() if tail is None else second_opinions(values, tail),
        path=None if tail is None else threshold_path(values),
        moments=own.moments,
        dependence=own.dependence,
        clustering=clustering,
        extremes=extreme_clustering(values) if ordered else None,
        effective_rows=effective_rows(values) if ordered else None,
        tail_effective_rows=tail_effective_rows(values, seed=seed) if ordered else None,
        warnings=sample_warnings(values, tail, volatility),
    )
