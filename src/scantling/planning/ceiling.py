"""The ceiling: how fast p may grow by the theory that covers the design, constant 1."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.tail_index import index_from_gamma

MOST = 10**12
"""Rates above it are reported as this number, 'at least'."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Ceiling:
    """A rate, not a count proved for this sample."""

    columns: int | None
    low: int | None
    high: int | None
    """None where the rate has no upper end in reach."""
    regime: str
    """Which theory: its loadings, its columns, and the moment that enters."""
    capped: bool
    """Whether `columns` stands for 'at least'."""


def _whole(rate: float) -> int:
    return MOST if rate >= math.log(MOST) else int(math.exp(rate))


def heavy_rate(rows: int, index: float) -> float:
    """Log of n^(q/2 - 1), q moments of the score; -inf below one column."""
    return (index / 2 - 1) * math.log(rows) if math.isfinite(index) else math.inf


def light_rate(rows: int, index: float) -> float:
    """Log of exp(n^(1 - 2/q)), q moments of the error."""
    return float(rows ** (1 - 2 / index)) if math.isfinite(index) else float(rows)


def ceiling(diagnosis: Diagnosis, rows: int, rule: str) -> Ceiling:
    """Rate by the regime that applies; the sources stand beside each formula.

    Self-normalised loadings: exp(n^(1/3)), Belloni et al. (2012), Econometrica 80. Equal
    loadings: a share h of heavy columns may number n^(q/2-1) (Fuk et al. (1971), Theory of
    Probability and its Applications 16), q the score tail index of the median heavy column,
    so p is at most that over h; the light ones exp(n^(1-2/q)), q of the errors.
    """
    if rule == "self-normalised":
        columns = _whole(rows ** (1 / 3))
        return Ceiling(
            columns=columns, low=columns, high=columns, capped=columns >= MOST,
            regime="squared loss, self-normalised loadings: exp(n^(1/3))",
        )  # fmt: skip
    heavy = np.array([w != "light" for w in diagnosis.weight])
    errors = diagnosis.errors
    ends: list[float] = []
    names = []
    if not heavy.all():
        if errors is None:
            return Ceiling(columns=None, low=None, high=None, capped=False,
                           regime="light columns; the errors' tail index is unknown")  # fmt: skip
        ends_light = [light_rate(rows, q) for q in (errors.index, errors.low, errors.high)]
        names.append("light columns exp(n^(1-2/q)), q of the errors")
        ends = ends_light
    if heavy.any():
        tails = diagnosis.scores.tails
        gamma_low, gamma_high = tails.intervals()
        known = heavy & tails.assessed
        if not known.any():
            return Ceiling(columns=None, low=None, high=None, capped=False,
                           regime="heavy columns; their scores' tail index is unknown")  # fmt: skip
        pick = np.flatnonzero(known)[np.argsort(tails.gamma[known], kind="stable")]
        j = int(pick[(pick.size - 1) // 2])
        indices = [
            index_from_gamma(float(tails.gamma[j])),
            1 / float(gamma_high[j]) if gamma_high[j] > 0 else math.inf,
            1 / float(gamma_low[j]) if gamma_low[j] > 0 else math.inf,
        ]
        share = float(heavy.mean())
        ends_heavy = [heavy_rate(rows, q) - math.log(share) for q in indices]
        names.insert(0, f"heavy columns ({share:.0%}) n^(q/2-1), q of the scores")
        ends = [min(a, b) for a, b in zip(ends, ends_heavy, strict=True)] if ends else ends_heavy
    point, low, high = (_whole(rate) for rate in ends)
    return Ceiling(
        columns=point,
        low=low,
        high=None if high >= MOST else high,
        regime="squared loss, equal loadings: " + "; ".join(names),
        capped=point >= MOST,
    )
