"""Marginal laws of many series: body from the sample, Student tails by the tail index.

Each is a quantile function of the normal score, tabulated on one grid, so that drawing is a
look-up. Series of few values, and sparse ones, are drawn from their own values.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri, stdtrit

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.column_tails import SPARSE_SHARE, column_tails
from scantling.diagnostics.tail_estimators import weighted_hill
from scantling.diagnostics.tail_index import tail_counts
from scantling.diagnostics.tail_interval import asymmetry_bias

TAIL_SHARE = 0.10
"""Share of the rows beyond a threshold, on each side."""
FEWEST_EXCESSES = 10
MOST_VALUES = 20
"""Series of at most so many distinct values are drawn from them (common practice, no source)."""
ATOM_SHARE = 0.02
"""Least share of rows at one value for that value to be drawn exactly."""
END, STEP = 9.0, 1 / 32
"""The grid of normal scores."""
GAMMA_STEP = 0.005
SHAPES = np.concatenate([[1e-3], np.arange(0.02, 0.96, 0.02)])
HEAVIEST = 0.95


@dataclass(frozen=True, slots=True, kw_only=True)
class Margins:
    """Marginal laws of B series."""

    table: FloatArray
    """Quantiles at the grid's scores, shape (B, grid); rows of stepped series are unused."""
    steps: dict[int, tuple[FloatArray, FloatArray]]
    """Of few-valued and sparse series: values, and the share of rows up to each but the last."""
    atoms: dict[int, tuple[float, float, float]]
    """Of others with a repeated value: lower and upper score between which it is taken, and
    the value."""
    gamma: FloatArray
    """1/index of the left and right tails, shape (2, B); nan for stepped series."""

    def quantile(
        self, scores: FloatArray, series: NDArray[np.int64], rng: np.random.Generator
    ) -> FloatArray:
        """Values at normal scores (I, T), row i by the law of series[i].

        Stepped series keep the shares of their values, up to rounding, which is random: drawn
        at random these would vary from table to table on top of what the sample's did.
        """
        out = np.empty_like(scores)
        for place, number in enumerate(series):
            score, row = scores[place], self.table[number]
            if int(number) in self.steps:
                values, cuts = self.steps[int(number)]
                counts = np.floor(cuts * score.size + rng.random())
                ranks = np.empty(score.size)
                ranks[np.argsort(score)] = np.arange(score.size)
                out[place] = values[np.searchsorted(counts, ranks, side="right")]
                continue
            spot = (np.clip(score, -END, END) + END) / STEP
            cell = np.minimum(spot.astype(np.intp), row.size - 2)
            left = row[cell]
            out[place] = left + (spot - cell) * (row[cell + 1] - left)
            if int(number) in self.atoms:
                low, high, value = self.atoms[int(number)]
                out[place][(score > low) & (score <= high)] = value
        return out


@dataclass(frozen=True, slots=True, kw_only=True)
class Values:
    """What repeats in B series."""

    distinct: NDArray[np.int64]
    """Distinct values, shape (B,)."""
    mode: FloatArray
    """The commonest value, shape (B,)."""
    active: FloatArray
    """Share of rows that differ from it, shape (B,)."""

    @property
    def stepped(self) -> NDArray[np.bool_]:
        """Few-valued or sparse, shape (B,)."""
        return np.asarray((self.distinct <= MOST_VALUES) | (self.active < SPARSE_SHARE))

    @property
    def repeats(self) -> NDArray[np.bool_]:
        """Not stepped, but with an atom, shape (B,)."""
        return np.asarray(~self.stepped & (1 - self.active >= ATOM_SHARE))


def count_values(series: FloatArray) -> Values:
    """Count distinct and repeated values of series (n, B), at least 3 rows to an atom."""
    n, width = series.shape
    ordered = np.sort(series, axis=0)
    changes = ordered[1:] != ordered[:-1]
    distinct = 1 + changes.sum(axis=0)
    mode, active = ordered[n // 2].copy(), np.full(width, 1 - 1 / n)
    for place in np.flatnonzero(distinct < n - 1):
        edges = np.concatenate([[0], np.flatnonzero(changes[:, place]) + 1, [n]])
        longest = int(np.argmax(np.diff(edges)))
        mode[place] = ordered[edges[longest], place]
        active[place] = 1 - np.diff(edges)[longest] / n
    return Values(distinct=distinct, mode=mode, active=active)


def pooled(values: FloatArray, errors: FloatArray) -> FloatArray:
    """Shrink estimates towards their mean by the share of their spread that is error.

    Efron et al. (1973), JASA 68. Shape (B,) each; the mean is unweighted, because errors grow
    with the estimates.
    """
    if values.size < 2:
        return values
    noise = errors**2
    between = max(0.0, float(values.var(ddof=1)) - float(noise.mean()))
    weight = between / np.maximum(between + noise, np.finfo(float).tiny)
    return np.asarray(values.mean() + weight * (values - values.mean()))


def fit_margins(series: FloatArray, kinds: Values) -> Margins:
    """Fit the marginal law of each of the series (n, B), n at least 30.

    Tail indices are those of `column_tails`, read through what the estimator gives on Student
    samples, so that drawn series report what the data report; where the outer deciles are
    unequal each side has its own. Indices and tail scales are shrunk towards their means over
    series, so that the heaviest of many does not owe its weight to chance.
    """
    width = series.shape[1]
    smooth = np.flatnonzero(~kinds.stepped)
    gamma = np.full((2, width), np.nan)
    table = np.zeros((width, 2 * round(END / STEP) + 1))
    if smooth.size:
        gamma[:, smooth] = tail_shapes(series[:, smooth])
        table[smooth] = quantile_table(series[:, smooth], gamma[:, smooth])
    return Margins(
        table=read_only(table),
        steps={int(j): _steps(series[:, j]) for j in np.flatnonzero(kinds.stepped)},
        atoms={int(j): _atom(series[:, j]) for j in np.flatnonzero(kinds.repeats)},
        gamma=read_only(gamma),
    )


def tail_shapes(series: FloatArray) -> FloatArray:
    """1/index of the left and right tails of series (n, B), shape (2, B), from 0 to 0.95."""
    n = len(series)
    gamma = np.tile(_shapes(series, "both"), (2, 1))
    skewed = np.flatnonzero(asymmetry_bias(series) > 0)
    if skewed.size:
        for row, side in enumerate(("left", "right")):
            gamma[row, skewed] = _shapes(series[:, skewed], side)
    return np.asarray(np.clip(_student_shape(gamma, n), 0.0, HEAVIEST))


def _shapes(series: FloatArray, side: str) -> FloatArray:
    """Estimates of one side, shrunk; a series not assessed takes the others' mean, or 0."""
    found = column_tails(series, dependent=False, side=side)
    known = found.assessed
    out = np.full(series.shape[1], float(found.gamma[known].mean()) if known.any() else 0.0)
    out[known] = pooled(found.gamma[known], found.error[known])
    return out


def _student_shape(estimate: FloatArray, n: int) -> FloatArray:
    """The Student law's 1/df at which the estimator gives `estimate`, on its mid-quantiles."""
    probability = (np.arange(n) + 0.5) / n / 2
    kappa = tail_counts(n, "both")[0]
    sizes = np.column_stack([-stdtrit(1 / shape, probability) for shape in SHAPES])
    given = np.maximum.accumulate(weighted_hill(sizes, kappa))
    given += 1e-9 * np.arange(given.size)
    return np.asarray(np.interp(estimate, given, SHAPES, left=0.0))


def quantile_table(series: FloatArray, gamma: FloatArray) -> FloatArray:
    """Quantiles of series (n, B) at the grid's scores, tails of shape `gamma` (2, B)."""
    n, width = series.shape
    share = max(TAIL_SHARE, FEWEST_EXCESSES / n)
    edge = float(-ndtri(share))
    grid = np.arange(-round(END / STEP), round(END / STEP) + 1) * STEP
    ordered = np.sort(series, axis=0)
    scores = ndtri((np.arange(n) + 0.5) / n)

    def body(at: FloatArray) -> FloatArray:
        place = np.clip(np.searchsorted(scores, at) - 1, 0, n - 2)
        part = (at - scores[place]) / (scores[place + 1] - scores[place])
        return np.asarray(ordered[place] + part[:, None] * (ordered[place + 1] - ordered[place]))

    inside = np.abs(grid) < edge
    out = np.empty((width, grid.size))
    out[:, inside] = body(grid[inside]).T
    low, middle, high = body(np.array([-edge, 0.0, edge]))
    beyond = grid[grid >= edge]
    count = math.ceil(share * n)
    for row, sign, threshold, excess in (
        (0, -1, low, low - ordered[:count]),
        (1, 1, high, ordered[-count:] - high),
    ):
        shapes = np.maximum(np.round(gamma[row] / GAMMA_STEP) * GAMMA_STEP, 1e-3)
        unit, start = np.empty((width, beyond.size)), np.empty(width)
        for shape in np.unique(shapes):
            mine = shapes == shape
            tail = -stdtrit(1 / shape, np.append(ndtr(-beyond), share))
            unit[mine], start[mine] = tail[:-1] - tail[-1], tail[-1]
        scale = _tail_scale(np.maximum(excess, 0.0), start, 1 / shapes)
        scale = _pooled_scale(scale, np.abs(threshold - middle) / start, shapes, count)
        tails = threshold[:, None] + sign * scale[:, None] * unit
        if sign > 0:
            out[:, grid >= edge] = tails
        else:
            out[:, grid <= -edge] = tails[:, ::-1]
    return out


def _tail_scale(excess: FloatArray, start: FloatArray, df: FloatArray) -> FloatArray:
    """Maximum-likelihood scale of excesses (k, B) over the point `start` of a Student law.

    The root in s of mean[(df + 1)(x/s) t/(df + t^2)] = 1, t = start + x/s, by bisection.
    """
    size = np.maximum(excess.mean(axis=0), np.finfo(float).tiny)
    low, high = np.full(size.size, -8.0), np.full(size.size, 8.0)
    for _ in range(40):
        middle = (low + high) / 2
        unit = excess / (size * np.exp(middle))
        place = start + unit
        score = ((df + 1) * unit * place / (df + place**2)).mean(axis=0)
        low, high = np.where(score > 1, middle, low), np.where(score > 1, high, middle)
    return np.asarray(size * np.exp((low + high) / 2))


def _pooled_scale(
    scale: FloatArray, inner: FloatArray, shapes: FloatArray, count: int
) -> FloatArray:
    """Tail scales shrunk through their ratio to the scale that the body's width gives.

    Error of the log scale of excesses at known shape: sqrt((1 + 2 gamma)/k), Smith (1987),
    Annals of Statistics 15.
    """
    fine = (inner > 0) & (scale > 0)
    out = scale.copy()
    if fine.any():
        logs = np.log(scale[fine] / inner[fine])
        out[fine] = inner[fine] * np.exp(pooled(logs, np.sqrt((1 + 2 * shapes[fine]) / count)))
    return out


def _steps(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    found, counts = np.unique(values, return_counts=True)
    return read_only(found), read_only(np.cumsum(counts)[:-1] / values.size)


def _atom(values: FloatArray) -> tuple[float, float, float]:
    found, counts = np.unique(values, return_counts=True)
    top = int(np.argmax(counts))
    below = int(counts[:top].sum())
    ends = ndtri(np.array([below, below + counts[top]]) / values.size)
    return float(ends[0]), float(ends[1]), float(found[top])
