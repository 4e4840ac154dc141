"""Tail index of a score as its parents imply it, to hold against the estimate from the score.

A score is a product: of the error, and of one raw column, of its powers or of two of them. At
usual n the largest products are far from their limit: a product of independent t(4) variables
looks like index 2.6 or 2.0, the square of a t(6) column like 1.9. Estimated from the score
alone, a variance would then be found missing that exists; estimated from the parents alone, a
connection between them would go unseen. So both are kept.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.stats import rankdata

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.column_tails import ColumnTails
from scantling.diagnostics.tail_index import TailIndex

Parents = Sequence[tuple[int, ...]]
"""For each column, those of the design whose product it is: (j,) for a raw one, (j, j) for the
square of j, (j, k) for a product; a number of times each."""
TOGETHER = 3.0
"""Standard errors of the rank correlation of sizes beyond which two factors of a product count
as large together: rows may depend, so more than for independent ones."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ImpliedTails:
    """Index of each score by the rule for products; nan where it cannot be told."""

    gamma: FloatArray
    """1/index, shape (P,)."""
    low: FloatArray
    """Lower end, from the parents' own intervals, shape (P,)."""
    high: FloatArray
    """Upper end, shape (P,)."""
    together: np.ndarray
    """Whether column and error were taken to be large together, shape (P,), bool."""


def implied_score_tails(
    X: FloatArray,
    columns: ColumnTails,
    errors: TailIndex,
    together: np.ndarray,
    parents: Parents | None = None,
) -> ImpliedTails:
    """Index of each score from those of its parents.

    Powers divide the index (exact). Factors that do not move together: the smaller index
    counts, Breiman (1965), Theory of Probability and its Applications 10, and Cline (1986),
    Probability Theory and Related Fields 72. Factors that do: reciprocals add, at worst; Jessen
    et al. (2006), Publications de l'Institut Mathematique 80.

    Parameters
    ----------
    X : array, shape (n, P)
        Columns of the design.
    columns : ColumnTails
        Their tails.
    errors : TailIndex
        Of the residuals, both sides.
    together : array of bool, shape (P,)
        Which columns move with the errors.
    parents : sequence of tuples of int, optional
        Default: every column is a raw one.
    """
    width = X.shape[1]
    parents = [(j,) for j in range(width)] if parents is None else parents
    # Bounded and sparse columns add nothing to the tail of what they multiply.
    bounded = ~columns.assessed | columns.sparse
    own = np.stack([columns.gamma, columns.gamma_low, columns.gamma_high])
    own = np.where(bounded, 0.0, own)
    error = _ends(errors)
    moving = _moving_pairs(X, parents)
    ends = np.empty((3, width))
    for j, factors in enumerate(parents):
        column = own[:, factors[0]]
        if len(set(factors)) == 1:
            column = column * len(factors)
        else:
            for k in factors[1:]:
                column = _product(column, own[:, k], (factors[0], k) in moving)
        ends[:, j] = _product(column, error, bool(together[j]))
    gamma, low, high = ends
    return ImpliedTails(
        gamma=read_only(gamma), low=read_only(low), high=read_only(high), together=together
    )


def _ends(tail: TailIndex) -> FloatArray:
    """Estimate and ends of a series' gamma."""
    return np.array([tail.gamma, 0.0 if np.isinf(tail.high) else 1 / tail.high, 1 / tail.low])


def _product(one: FloatArray, two: FloatArray, together: bool) -> FloatArray:
    """Gamma of a product with its ends; errors of the two estimates are independent."""
    if not together:
        return np.asarray(np.maximum(one, two))
    total = one[0] + two[0]
    below = np.hypot(one[0] - one[1], two[0] - two[1])
    above = np.hypot(one[2] - one[0], two[2] - two[0])
    return np.array([total, total - below, total + above])


def _moving_pairs(X: FloatArray, parents: Parents) -> set[tuple[int, int]]:
    """Pairs of distinct factors whose sizes are rank-correlated beyond chance."""
    pairs = {(f[0], k) for f in parents for k in f[1:] if k != f[0]}
    ranks: dict[int, FloatArray] = {}
    for j in sorted({j for pair in pairs for j in pair}):
        size = rankdata(np.round(np.abs(X[:, j] - np.median(X[:, j])), 12))
        size -= size.mean()
        ranks[j] = size / (np.sqrt(size @ size) or 1.0)
    bar = TOGETHER / len(X) ** 0.5
    return {(j, k) for j, k in pairs if float(ranks[j] @ ranks[k]) > bar}


def widened(tails: ColumnTails, implied: ImpliedTails, which: np.ndarray) -> ColumnTails:
    """Intervals of the scores `which` reaching over what their parents imply."""
    low = np.where(which, np.fmin(tails.gamma_low, implied.low), tails.gamma_low)
    high = np.where(which, np.fmax(tails.gamma_high, implied.high), tails.gamma_high)
    return replace(tails, gamma_low=read_only(low), gamma_high=read_only(high))


def reconciled(
    moments: dict[int, np.ndarray], implied: ImpliedTails, which: np.ndarray
) -> dict[int, np.ndarray]:
    """Moment answers of the scores; unclear where the parents disagree about the order.

    'Missing' stands only where the parents' interval lies beyond the order too. 'Exists' falls
    where column and errors move together and the parents' interval excludes it.
    """
    out = {}
    for order, answers in moments.items():
        bar = 1 / order
        doubt = (answers == -1) & (implied.low < bar)
        doubt |= (answers == 1) & implied.together & (implied.low > bar)
        out[order] = np.where(which & doubt, 0, answers)
    return out
