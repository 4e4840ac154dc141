"""The ceiling: how fast p may grow by the theory that covers the design, constant 1."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.tail_index import index_from_gamma
from scantling.simulation.loss_scores import ROBUST

Ends = tuple[float, float, float]
"""A tail index: point, low, high."""
MOST = 10**12
"""Rates above it are reported as this number, 'at least'."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Ceiling:
    """A rate, not a count proved for this sample."""

    columns: int | None
    """Point value; None where an index it needs is unknown."""
    low: int | None
    """At the lower end of the index's interval."""
    high: int | None
    """None where the rate has no upper end in reach."""
    regime: str
    """Which theory: its loadings, its columns, and the moment that enters."""
    capped: bool
    """Whether `columns` stands for 'at least'."""


def _whole(rate: float) -> int:
    """floor(exp(rate)), at most MOST; a whole number reached but for rounding counts as reached."""
    if rate >= math.log(MOST):
        return MOST
    value = math.exp(rate)
    return round(value) if math.isclose(value, round(value), rel_tol=1e-12) else int(value)


def heavy_rate(rows: int, index: float) -> float:
    """Log of n^(q/2 - 1), q moments of the score; -inf below one column."""
    return (index / 2 - 1) * math.log(rows) if math.isfinite(index) else math.inf


def light_rate(rows: int, index: float) -> float:
    """Log of exp(n^(1 - 2/q)), q moments of the error."""
    return float(rows ** (1 - 2 / index)) if math.isfinite(index) else float(rows)


def ceiling(diagnosis: Diagnosis, rows: int, rule: str, loss: str = "squared") -> Ceiling:
    """The rate for a diagnosed design: q of the scores is the median heavy column's."""
    heavy = np.array([w != "light" for w in diagnosis.weight])
    errors = diagnosis.errors
    tails = diagnosis.scores.tails
    known = np.flatnonzero(heavy & tails.assessed)
    scores: Ends | None = None
    if known.size:
        pick = known[np.argsort(tails.gamma[known], kind="stable")]
        j = int(pick[(pick.size - 1) // 2])
        scores = (index_from_gamma(float(tails.gamma[j])), *tails.interval(j))
    return rate_by_regime(
        rows=rows,
        rule=rule,
        loss=loss,
        heavy_share=float(heavy.mean()),
        errors=None if errors is None else (errors.index, errors.low, errors.high),
        scores=scores,
    )


def rate_by_regime(
    *, rows: int, rule: str, heavy_share: float, errors: Ends | None, scores: Ends | None,
    loss: str = "squared",
) -> Ceiling:  # fmt: skip
    """Rate by the regime that applies.

    Self-normalised loadings: exp(n^(1/3)), Belloni et al. (2012), Econometrica 80. Equal
    loadings, any column heavy or sparse: n^(q/2-1), q of the scores (Fuk et al. (1971), Theory
    of Probability and its Applications 16); all light: exp(n^(1-2/q)), q of the errors
    (truncation and Bennett (1962), Journal of the American Statistical Association 57).

    Parameters
    ----------
    rows : int
    rule : {'plug-in', 'self-normalised'}
    heavy_share : float
        Share of columns that are not light.
    errors, scores : (index, low, high) or None
        Tail index with its interval; None if unknown.
    loss : {'squared', 'huber', 'absolute', 'square-root'}
        Robust losses have no rate here.
    """
    if loss in ROBUST:
        return _unknown(f"{loss} loss: no rate with a known constant is used")
    if rule == "self-normalised":
        columns = _whole(rows ** (1 / 3))
        return Ceiling(
            columns=columns,
            low=columns,
            high=columns,
            capped=columns >= MOST,
            regime=f"{loss} loss, self-normalised loadings: exp(n^(1/3))",
        )
    if heavy_share > 0:
        if scores is None:
            return _unknown("heavy or sparse columns, whose scores' tail index is unknown")
        rates = [heavy_rate(rows, q) for q in scores]
        regime = (
            f"heavy or sparse columns ({100 * heavy_share:.0f} %): n^(q/2-1), q of the median of"
            " their scores"
        )
    else:
        if errors is None:
            return _unknown("light columns; the errors' tail index is unknown")
        rates = [light_rate(rows, q) for q in errors]
        regime = "light columns: exp(n^(1-2/q)), q of the errors"
    point, low, high = (_whole(rate) for rate in rates)
    return Ceiling(
        columns=point,
        low=low,
        high=None if high >= MOST else high,
        regime=f"{loss} loss, equal loadings, {regime}",
        capped=point >= MOST,
    )


def _unknown(reason: str) -> Ceiling:
    return Ceiling(columns=None, low=None, high=None, capped=False, regime=reason)
