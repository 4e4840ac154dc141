"""Kernels for the largest score: arrays in, arrays out.

Notation: X is (n, P), columns of mean 0 and mean square 1; E is (n, R), one draw of errors a
column; S_jr = n^(-1/2) sum_i x_ij e_ir; v the loading; ratio = |S|/v.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln, ndtri

from scantling.core.record import FloatArray
from scantling.errors import InputError

RULES = ("plug-in", "self-normalised")
ROUNDING = 1e-12
"""Probabilities that differ by less are the same."""


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
    return np.asarray(constant * -ndtri(risk / (2 * np.asarray(p, dtype=np.float64))))


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
    if rule not in RULES:
        raise InputError(f"rule: one of {', '.join(RULES)} is needed; found {rule!r}")
    n = X.shape[0]
    scores = X.T @ errors
    np.abs(scores, out=scores)
    if rule == "plug-in":
        loadings = np.sqrt((errors**2).mean(axis=0))[None]
    else:
        loadings = np.sqrt(((X**2 if squares is None else squares).T @ errors**2) / n)
    # A draw whose errors all vanish where the column is active scores 0: its ratio is 0.
    scores /= np.maximum(loadings, np.finfo(float).tiny) * np.sqrt(n)
    return scores, loadings


def passers(ratios: FloatArray, floor: float) -> Passers:
    """The entries of (P, R) ratios above the floor."""
    column, draw = np.nonzero(ratios > floor)
    return Passers(
        columns=ratios.shape[0], draws=ratios.shape[1],
        draw=draw.astype(np.int32), column=column.astype(np.int32),
        ratio=ratios[column, draw],
    )  # fmt: skip


def join(parts: list[Passers]) -> Passers:
    """Passers of several blocks of draws over the same columns, draws numbered on."""
    offsets = np.cumsum([0] + [part.draws for part in parts])
    return Passers(
        columns=parts[0].columns,
        draws=int(offsets[-1]),
        draw=np.concatenate(
            [p.draw + np.int32(start) for p, start in zip(parts, offsets, strict=False)]
        ),
        column=np.concatenate([part.column for part in parts]),
        ratio=np.concatenate([part.ratio for part in parts]),
    )


def none_taken(exceeding: FloatArray | int, columns: int, p: np.ndarray | int) -> FloatArray:
    """C(P-K, p)/C(P, p): probability that none of K exceeding columns is among p taken of P.

    K and p broadcast against each other.
    """
    k = np.asarray(exceeding, dtype=np.float64)
    free = columns - k
    inside = free >= p
    safe = np.where(inside, free, p)
    # In pairs that cancel exactly where K is 0.
    logs = gammaln(safe + 1) - gammaln(columns + 1)
    logs -= gammaln(safe - p + 1) - gammaln(columns - p + 1)
    return np.asarray(np.where(inside, np.exp(np.minimum(logs, 0.0)), 0.0))


def exceeding_counts(found: Passers, level: float) -> np.ndarray:
    """K per draw: how many columns' ratios exceed the level, shape (R,)."""
    return np.bincount(found.draw[found.ratio > level], minlength=found.draws)


def risk_at(found: Passers, p: int, level: float) -> tuple[float, float]:
    """Break-through risk at p columns, averaged exactly over which are taken, and its s.e."""
    broken = 1 - none_taken(exceeding_counts(found, level), found.columns, p)
    return float(broken.mean()), float(broken.std() / np.sqrt(found.draws))


def ranks_in_draw(draw: np.ndarray, ratio: FloatArray) -> np.ndarray:
    """How many ratios of the same draw are larger (ties in the order given), shape (m,)."""
    order = np.lexsort((-ratio, draw))
    grouped = draw[order]
    ranks = np.empty(order.size, dtype=np.int64)
    ranks[order] = np.arange(order.size) - np.searchsorted(grouped, grouped)
    return ranks


def risk_curves(found: Passers, risk: float, weights: FloatArray | None = None) -> FloatArray:
    """Break-through risk at the plug-in level for every p from 1 to P.

    The ratio of rank k in its draw raises that draw's K from k to k + 1 at each p whose level
    it exceeds; it adds what that takes from the probability that none is taken.

    Parameters
    ----------
    found : Passers
        Its floor is at most L(1).
    risk : float
    weights : array, shape (B, R), optional
        Weights of the draws, summing to R in each of B resamples; default: one row of ones.

    Returns
    -------
    array, shape (B, P)
    """
    weight = np.ones((1, found.draws)) if weights is None else weights
    levels = penalty_level(np.arange(1.0, found.columns + 1), risk)
    above = found.ratio > levels[0]
    draw, ratio = found.draw[above], found.ratio[above]
    alive = np.searchsorted(levels, ratio)  # it exceeds the levels of 1..alive columns
    ranks = ranks_in_draw(draw, ratio)
    order = np.lexsort((-alive, ranks))
    ends = np.searchsorted(ranks[order], np.arange(ranks.max(initial=-1) + 2))
    curves = np.zeros((len(weight), found.columns))
    every = np.arange(1.0, found.columns + 1)
    kept = np.ones(found.columns)  # P(none of k is among p taken of P); k = 0
    for k, (start, stop) in enumerate(itertools.pairwise(ends)):
        mine = order[start:stop]
        p = every[: alive[mine[0]]]
        counted = np.searchsorted(-alive[mine], -p, side="right") - 1
        exceeding = np.cumsum(weight[:, draw[mine]], axis=1)[:, counted]
        kept = kept[: p.size]  # ranks of a draw fall together: later ones reach no further
        lost = kept * p / (found.columns - k)
        curves[:, : p.size] += exceeding * lost
        kept = np.maximum(kept - lost, 0.0)
    return np.asarray(curves / found.draws)


def first_above(curve: FloatArray, risk: float) -> float:
    """Largest p with curve(p') <= risk for every p' <= p; inf if that is all of them."""
    over = np.flatnonzero(curve > risk + ROUNDING)
    return float(over[0]) if over.size else math.inf


@dataclass(frozen=True, slots=True, kw_only=True)
class Ranked:
    """Passers from the largest ratio down, ready for quantiles at many p."""

    columns: int
    """P."""
    draws: int
    """R."""
    ratio: FloatArray
    """Decreasing, shape (m,)."""
    rank: np.ndarray
    """How many ratios of the same draw are larger, shape (m,)."""


def ranked(found: Passers) -> Ranked:
    """Sort and rank the passers once."""
    order = np.argsort(-found.ratio, kind="stable")
    return Ranked(
        columns=found.columns,
        draws=found.draws,
        ratio=found.ratio[order],
        rank=ranks_in_draw(found.draw, found.ratio)[order],
    )


def largest_quantile(found: Passers | Ranked, p: int, probability: float) -> float | None:
    """Quantile of the largest ratio over p of the P columns, averaged over which are taken.

    None if it lies at or below the floor of the passers.
    """
    # Walking down the ratios, each raises one draw's K; find where P(max > t) passes 1 - prob.
    table = found if isinstance(found, Ranked) else ranked(found)
    kept = none_taken(np.arange(table.rank.max(initial=-1) + 2), table.columns, p)
    exceed = np.cumsum((kept[:-1] - kept[1:])[table.rank]) / table.draws
    place = int(np.searchsorted(exceed, 1 - probability + ROUNDING, side="right"))
    return float(table.ratio[place]) if place < table.ratio.size else None


def column_shares(found: Passers, level: float) -> FloatArray:
    """Each column's share of the break-throughs at the level, shape (P,); zeros if none."""
    counts = np.bincount(found.column[found.ratio > level], minlength=found.columns)
    return np.asarray(counts / max(1, counts.sum()))


def risks_on_grid(
    found: Passers, risk: float, grid: np.ndarray, weights: FloatArray | None = None
) -> FloatArray:
    """Break-through risk at the plug-in level at some numbers of columns, shape (B, G).

    For very many columns, of which a curve at every p would take too long. `grid` (G,) is
    increasing; `weights` as in `risk_curves`.
    """
    weight = np.ones((1, found.draws)) if weights is None else weights
    levels = penalty_level(np.asarray(grid, dtype=np.float64), risk)
    # Each ratio counts at the grid's first `alive` numbers; from the largest p down they add up.
    alive = np.searchsorted(levels, found.ratio)
    order = np.argsort(-alive, kind="stable")
    ends = np.searchsorted(-alive[order], -np.arange(len(grid), 0, -1), side="right")
    counts = np.zeros(found.draws)
    out = np.empty((len(weight), len(grid)))
    start = 0
    for place, stop in zip(range(len(grid) - 1, -1, -1), ends, strict=True):
        counts += np.bincount(found.draw[order[start:stop]], minlength=found.draws)
        broken = 1 - none_taken(counts, found.columns, int(grid[place]))
        out[:, place] = weight @ broken / found.draws
        start = int(stop)
    return out
