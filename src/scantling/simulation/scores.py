"""Kernels for the largest score: arrays in, arrays out.

Notation: X is (n, P), columns of mean 0 and mean square 1; E is (n, R), one draw of errors a
column; S_jr = n^(-1/2) sum_i x_ij e_ir; v the loading; ratio = |S|/v.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln
from scipy.stats import norm

from scantling.core.record import FloatArray

RULES = ("plug-in", "self-normalised")


@dataclass(frozen=True, slots=True, kw_only=True)
class Passers:
    """The ratios above a floor, of R draws over P columns."""

    columns: int
    """P, how many columns were looked at."""
    draws: int
    """R."""
    draw: np.ndarray
    """Which draw each ratio belongs to, shape (m,)."""
    column: np.ndarray
    """Which column, shape (m,)."""
    ratio: FloatArray
    """The ratios, shape (m,)."""


def penalty_level(p: FloatArray | float, risk: float, constant: float = 1.1) -> FloatArray:
    """L(p) = c Phi^-1(1 - risk/(2p)); Belloni et al. (2012), Econometrica 80."""
    return np.asarray(constant * -norm.ppf(risk / (2 * np.asarray(p, dtype=np.float64))))


def centre(errors: FloatArray) -> FloatArray:
    """Each draw less its mean over rows."""
    return np.asarray(errors - errors.mean(axis=0))


def score_ratios(
    X: FloatArray, errors: FloatArray, rule: str, squares: FloatArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """|S_jr| / v and the loadings v, both from the draw itself.

    Parameters
    ----------
    X : array, shape (n, P)
    errors : array, shape (n, R)
        Centred draws.
    rule : {'plug-in', 'self-normalised'}
        Equal loadings (mean_i e_i^2)^(1/2), or (mean_i x_ij^2 e_i^2)^(1/2).
    squares : array, shape (n, P), optional
        X**2, to save its being formed again.

    Returns
    -------
    ratios : array, shape (P, R)
    loadings : array, shape (1, R) for equal loadings, else (P, R)
    """
    n = X.shape[0]
    scores = np.abs(X.T @ errors)
    if rule == "plug-in":
        loadings = np.sqrt((errors**2).mean(axis=0))[None]
    else:
        loadings = np.sqrt(((X**2 if squares is None else squares).T @ errors**2) / n)
    # A draw whose errors all vanish where the column is active scores 0: its ratio is 0.
    scores /= np.maximum(loadings, np.finfo(float).tiny)
    scores /= np.sqrt(n)
    return scores, loadings


def passers(ratios: FloatArray, floor: float) -> Passers:
    """The entries of (P, R) ratios above the floor."""
    column, draw = np.nonzero(ratios > floor)
    return Passers(
        columns=ratios.shape[0], draws=ratios.shape[1], draw=draw, column=column,
        ratio=ratios[column, draw],
    )  # fmt: skip


def join(parts: list[Passers]) -> Passers:
    """Passers of several blocks of draws over the same columns, draws numbered on."""
    offsets = np.cumsum([0] + [part.draws for part in parts])
    return Passers(
        columns=parts[0].columns,
        draws=int(offsets[-1]),
        draw=np.concatenate([p.draw + start for p, start in zip(parts, offsets, strict=False)]),
        column=np.concatenate([part.column for part in parts]),
        ratio=np.concatenate([part.ratio for part in parts]),
    )


def none_taken(exceeding: FloatArray, columns: int, p: int) -> FloatArray:
    """C(P-K, p)/C(P, p): probability that none of K exceeding columns is among p taken of P."""
    k = np.asarray(exceeding, dtype=np.float64)
    free = columns - k
    inside = free >= p
    safe = np.where(inside, free, p)
    logs = (
        gammaln(safe + 1) - gammaln(safe - p + 1) - gammaln(columns + 1) + gammaln(columns - p + 1)
    )
    return np.asarray(np.where(inside, np.exp(np.minimum(logs, 0.0)), 0.0))


def exceeding_counts(found: Passers, level: float) -> np.ndarray:
    """K per draw: how many columns' ratios exceed the level, shape (R,)."""
    return np.bincount(found.draw[found.ratio > level], minlength=found.draws)


def risk_at(found: Passers, p: int, level: float) -> tuple[float, float]:
    """Break-through risk at p columns, averaged exactly over which are taken, and its s.e."""
    broken = 1 - none_taken(exceeding_counts(found, level), found.columns, p)
    return float(broken.mean()), float(broken.std() / np.sqrt(found.draws))


def largest_quantile(found: Passers, p: int, probability: float) -> float | None:
    """Quantile of the largest ratio over p of the P columns, averaged over which are taken.

    None if it lies at or below the floor of the passers.
    """
    order = np.argsort(-found.ratio, kind="stable")
    ratio, draw = found.ratio[order], found.draw[order]
    # Walking down the ratios, each raises one draw's K; find where P(max > t) passes 1 - prob.
    rank = np.empty(ratio.size, dtype=np.int64)
    by_draw = np.argsort(draw, kind="stable")
    starts = np.searchsorted(draw[by_draw], np.arange(found.draws))
    rank[by_draw] = np.arange(ratio.size) - starts[draw[by_draw]]
    ranks = np.arange(rank.max() + 2 if rank.size else 1)
    kept = none_taken(ranks, found.columns, p)
    exceed = np.cumsum(kept[rank] - kept[rank + 1]) / found.draws
    place = int(np.searchsorted(exceed, 1 - probability, side="right"))
    return float(ratio[place]) if place < ratio.size else None


def column_shares(found: Passers, level: float) -> FloatArray:
    """Each column's share of the break-throughs at the level, shape (P,); zeros if none."""
    counts = np.bincount(found.column[found.ratio > level], minlength=found.columns)
    return np.asarray(counts / max(1, counts.sum()))
