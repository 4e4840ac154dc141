"""The sample's largest values against what the fitted law would give."""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.law.families import ErrorLaw

RANKS = (1, 2, 3, 5, 10)
DRAWS = 400


def extremes_against_law(
    values: FloatArray, law: ErrorLaw, *, seed: int
) -> tuple[tuple[int, float, float, float], ...]:
    """Observed size at a few ranks, with the law's median and 95 % point there.

    Samples of the same length are drawn on the fitted volatility path; a rank whose observed
    size lies above the 95 % point is heavier than the law.

    Parameters
    ----------
    values : array, shape (n,)
    law : ErrorLaw
        Fitted to the values.
    seed : int

    Returns
    -------
    tuple of (rank, observed, median, 95 % point)
    """
    n = values.size
    ranks = [rank for rank in RANKS if rank <= n // 3]
    drawn = law.draw_given_path(n, DRAWS, stream(seed, "extremes against the law"))
    largest = -np.sort(-np.abs(drawn - drawn.mean(axis=0)), axis=0)[: max(ranks)]
    seen = -np.sort(-np.abs(values - values.mean()))
    return tuple(
        (
            rank,
            float(seen[rank - 1]),
            float(np.median(largest[rank - 1])),
            float(np.quantile(largest[rank - 1], 0.95)),
        )
        for rank in ranks
    )
