"""Which columns are large where the errors are large, and what that asks of the penalty.

Under equal loadings the score of column j has variance mean x^2 e^2, where the penalty counts
on mean x^2 mean e^2: the root of their ratio is the factor by which the penalty falls short.
One row can decide it, so sizes are capped here before they are multiplied.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.special import stdtrit

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.diagnostics.dependence import TIE, permuted
from scantling.diagnostics.structure import column_blocks
from scantling.diagnostics.variance import co_movement

CAPPED_SHARE = 0.01
"""Share of the largest sizes that are set to the size they exceed, in column and errors alike:
common practice, no source."""
LEVEL = 0.05
"""Chance, over all columns together, that one is called clear where none is."""
INTERVAL = 0.90
"""Nominal coverage of a column's interval."""
DRAWS = 199
GROUPS = 20
"""Stretches of rows that the jackknife leaves out in turn."""
WIDEST = math.log(1000)
"""Largest step of the interval in ln ratio: a column whose active rows all lie in one stretch
says nothing of how sure its ratio is."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CoMovement:
    """By how much each column's score is more spread than if its size knew nothing of e's."""

    ratio: FloatArray
    """sqrt(mean x^2 e^2 / (mean x^2 mean e^2)) of capped sizes, shape (P,); 1: no connection."""
    low: FloatArray
    """Lower end of its 90 % interval, shape (P,)."""
    high: FloatArray
    """Upper end."""
    measured: FloatArray
    """The same ratio without caps, shape (P,): what this sample's penalty would need."""
    p_value: FloatArray
    """Of each column by itself, one-sided, by permutation, shape (P,)."""
    family_p_value: FloatArray
    """The same over all columns together, shape (P,)."""

    @property
    def ranked(self) -> np.ndarray:
        """Columns by ratio, largest first."""
        return np.argsort(-self.ratio, kind="stable")

    @property
    def clear_first(self) -> np.ndarray:
        """The same, those that are clear before all others."""
        return np.lexsort((-self.ratio, ~self.clear))

    @property
    def clear(self) -> np.ndarray:
        """Which columns move with the errors beyond chance, all taken together; (P,), bool."""
        return np.asarray(self.family_p_value <= LEVEL)


def column_co_movement(
    X: FloatArray, e: FloatArray, uncapped: np.ndarray, *, seed: int, block: int | None = None
) -> CoMovement:
    """Rank columns by how much larger a penalty their co-movement with the errors asks for.

    Parameters
    ----------
    X : array, shape (n, P)
        Standardised columns, in time order if `block` is given.
    e : array, shape (n,)
        Residuals, mean zero.
    uncapped : array of bool, shape (P,)
        Columns whose sizes are left as they are: sparse ones, whose few active rows a cap would
        wipe out, and those bounded anyway.
    seed : int
        Of the permutations.
    block : int or None
        Rows that may depend on each other, as for `glejser_permutation`.

    Notes
    -----
    The interval is that of ln ratio by the jackknife over 20 stretches of rows, caps found anew
    without each; it keeps the dependence within a stretch. The p-value by column permutes the
    errors' sizes; the one over all columns compares the ratio, less its mean and over its sd
    under permutation, with the largest such value over columns: single-step adjustment of
    Westfall et al. (1993), Resampling-Based Multiple Testing. Both are exact for exchangeable
    errors.
    """
    width = X.shape[1]
    size = capped_squares(e[:, None], np.zeros(1, dtype=bool))[:, 0]
    out = {name: np.empty(width) for name in ("ratio", "low", "high", "p_value")}
    excess = np.empty(width)
    largest = np.full(DRAWS, -np.inf)
    edges = np.arange(GROUPS + 1) * e.size // GROUPS
    step = float(stdtrit(GROUPS - 1, (1 + INTERVAL) / 2))
    shuffled = np.concatenate(
        list(permuted(size, DRAWS, stream(seed, "co-movement by column"), block))
    )
    for start, stop in column_blocks(X):
        here = slice(start, stop)
        squares = capped_squares(X[:, here], uncapped[here])
        mean = size @ squares / e.size
        ratio = np.sqrt(mean)
        spread = step * _jackknife_error(X[:, here], e, uncapped[here], edges)
        spread = np.minimum(spread, WIDEST)
        out["ratio"][here] = ratio
        out["low"][here], out["high"][here] = ratio * np.exp(-spread), ratio * np.exp(spread)
        drawn = shuffled @ squares / e.size
        reached = (drawn >= mean * (1 - TIE)).sum(axis=0)
        out["p_value"][here] = (1 + reached) / (DRAWS + 1)
        every = np.concatenate([drawn, mean[None]])
        centre, scale = every.mean(axis=0), np.maximum(every.std(axis=0), 1e-12)
        excess[here] = (mean - centre) / scale
        largest = np.maximum(largest, ((drawn - centre) / scale).max(axis=1))
    beyond = (largest[:, None] >= excess[None, :] - TIE).sum(axis=0)
    return CoMovement(
        **{name: read_only(values) for name, values in out.items()},
        measured=read_only(co_movement(X, e)),
        family_p_value=read_only((1 + beyond) / (DRAWS + 1)),
    )


def _jackknife_error(
    columns: FloatArray, e: FloatArray, uncapped: np.ndarray, edges: np.ndarray
) -> FloatArray:
    """Standard error of ln ratio, each stretch of rows left out in turn; shape (columns,)."""
    logs = np.empty((edges.size - 1, columns.shape[1]))
    for group, (first, last) in enumerate(pairwise(edges)):
        rest = np.r_[0:first, last : e.size]
        size = capped_squares(e[rest, None], np.zeros(1, dtype=bool))[:, 0]
        mean = size @ capped_squares(columns[rest], uncapped) / rest.size
        logs[group] = np.log(np.maximum(mean, np.finfo(float).tiny)) / 2
    return np.asarray(np.sqrt((len(logs) - 1) * logs.var(axis=0)))


def capped_squares(columns: FloatArray, uncapped: np.ndarray) -> FloatArray:
    """Squares of mean 1 of columns (n, P), the largest 1 % of sizes capped."""
    size = np.abs(columns)
    rank = max(1, math.ceil(CAPPED_SHARE * len(size)))
    cap = np.partition(size, len(size) - 1 - rank, axis=0)[len(size) - 1 - rank]
    free = uncapped | (cap <= 0)
    squares = np.minimum(size, np.where(free, np.inf, cap)) ** 2
    mean = squares.mean(axis=0)
    return np.asarray(squares / np.where(mean > 0, mean, 1.0))
