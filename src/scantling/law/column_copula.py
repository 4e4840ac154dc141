"""Dependence of many series on the scale of normal scores: factors, clusters, time, scale."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import blocks
from scantling.diagnostics.structure import (
    eigenvalue_ratio,
    principal_components,
    spectrum,
    standardised,
)
from scantling.law.column_margins import pooled
from scantling.law.shared_scale import CommonScale, fit_scale

LARGEST_COMMUNALITY = 0.995
LARGEST_PAIR = 0.9999
LARGEST_AUTOCORRELATION = 0.99
FALSE_PAIR = 0.05
"""Chance that any pair of independent series is joined into a cluster."""
BLOCK = 512
MOST_STRETCHED = 200
"""Series among which correlations are compared with those of their scores."""
FEW_PAIRS = 4
FEWEST_EVENED = 20
"""Series from which their size in a row says little of any one of them."""
SAME = 0.9999
"""A series this correlated with the errors is theirs."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Cluster:
    """Series correlated beyond the factors: their scores are normals @ root + noise."""

    members: NDArray[np.int64]
    """Series, shape (m,)."""
    root: FloatArray
    """Shape (r, m), r at most the rows; root' root + noise^2 I is their correlation."""
    noise: float
    """sd of the independent part."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Copula:
    """Normal scores of B series over time."""

    autocorrelation: FloatArray
    """From one row to the next, shape (B,); zeros where rows have no order."""
    loadings: FloatArray
    """Of the factors, on the innovations' unit scale, shape (K, B)."""
    clusters: tuple[Cluster, ...]
    """Of the parts the factors leave."""
    cluster_of: NDArray[np.int64]
    """Cluster of each series, shape (B,); -1: none."""
    scale: CommonScale
    """The log scale that sizes share."""
    error_share: FloatArray
    """Correlation of each series' innovations with the errors' of the same row, shape (B,):
    other than 0 only for series that the regression sees lagged."""


def fit_copula(
    series: FloatArray, scores: FloatArray, error_scores: FloatArray, smooth: NDArray[np.bool_],
    active: FloatArray, lagged: NDArray[np.bool_], *, ordered: bool,
) -> Copula:  # fmt: skip
    """Fit the dependence of normal scores (m, B), in time order if `ordered`.

    Factors are counted by the eigenvalue ratio and loaded by principal components. On what
    they leave the common scale is measured, and pairs clear of 0 in all B(B-1)/2 comparisons
    are joined into clusters, in the way of Fan et al. (2013), J. Royal Statistical Society B
    75; the correlation of each cluster is shrunk to the identity as in Ledoit et al. (2004), J.
    Multivariate Analysis 88.

    Parameters
    ----------
    series : array, shape (m, B)
        Mean 0, mean square 1.
    scores : array, shape (m, B)
        Their normal scores, likewise.
    error_scores : array, shape (m,)
        Of the errors' innovations in the same rows.
    smooth : array, shape (B,), bool
        Series without many repeats, on which common scale is measured.
    active : array, shape (B,)
        Share of rows off the mode: it bounds what a correlation of two sparse series says.
    lagged : array, shape (B,), bool
        Series that the regression sees lagged only, so that they may hold the errors.
    """
    phi = autocorrelations(scores) if ordered else np.zeros(scores.shape[1])
    fresh = scores
    if ordered:
        fresh = unit((scores[1:] - phi * scores[:-1]) / np.sqrt(1 - phi**2))
        error_scores = error_scores[1:]
    error_share = _error_shares(fresh, error_scores, lagged)
    rest = fresh - error_scores[:, None] * error_share
    own = np.abs(error_share) >= SAME
    rest[:, own] = fresh[:, own]
    rest = unit(rest)
    loadings = _loadings(rest, smooth)
    left = unit(rest - _factors(rest, len(loadings)) @ loadings) if len(loadings) else rest
    common = CommonScale(shared=0.0, own=0.0, persistence=0.0, errors=0.0, heavy=False)
    if smooth.any():
        part = _correlation_part(left[:, smooth])
        common = fit_scale(left[:, smooth], part, error_scores, ordered=ordered)
        if common.shared:  # chance correlations are larger under a common scale
            left = _even(left, smooth)
    stretch = _stretch(series[:, smooth], scores[:, smooth])
    communality = np.maximum((loadings**2).sum(axis=0), np.finfo(float).tiny)
    loadings *= np.sqrt(np.minimum(stretch, LARGEST_COMMUNALITY / communality))
    clusters = _clusters(left, active, own, stretch)
    cluster_of = np.full(scores.shape[1], -1)
    for number, cluster in enumerate(clusters):
        cluster_of[cluster.members] = number
    return Copula(
        autocorrelation=read_only(phi),
        loadings=read_only(loadings),
        clusters=clusters,
        cluster_of=cluster_of,
        scale=common,
        error_share=read_only(error_share),
    )


def unit(columns: FloatArray) -> FloatArray:
    """Columns of mean 0 and mean square 1; zeros where they do not vary."""
    centred = columns - columns.mean(axis=0)
    size = np.sqrt((centred**2).mean(axis=0))
    return np.asarray(centred / np.where(size > 1e-9, size, np.inf))


def autocorrelations(scores: FloatArray) -> FloatArray:
    """First autocorrelation of each column, shrunk towards their mean; 0 if under 2/sqrt(m).

    Freed of its bias, -(1 + 3 phi)/m: Kendall (1954), Biometrika 41; error sqrt((1 - phi^2)/m).
    """
    m = len(scores)
    found = (scores[1:] * scores[:-1]).sum(axis=0) / (scores**2).sum(axis=0)
    freed = np.clip(found + (1 + 3 * found) / m, -LARGEST_AUTOCORRELATION, LARGEST_AUTOCORRELATION)
    shrunk = pooled(freed, np.sqrt((1 - freed**2) / m))
    return np.asarray(np.where(np.abs(shrunk) > 2 / math.sqrt(m), shrunk, 0.0))


def _error_shares(
    fresh: FloatArray, error_scores: FloatArray, lagged: NDArray[np.bool_]
) -> FloatArray:
    """Correlations with the errors that are clear of 0 for as many series as are seen lagged."""
    out = np.zeros(fresh.shape[1])
    if not lagged.any():
        return out
    errors = unit(error_scores[:, None])[:, 0]
    out[lagged] = errors @ fresh[:, lagged] / len(fresh)
    least = float(-ndtri(FALSE_PAIR / (2 * lagged.sum()))) / math.sqrt(len(fresh))
    out[np.abs(out) < least] = 0.0
    return np.where(np.abs(out) >= SAME, np.sign(out), out)


def _correlation_part(scores: FloatArray) -> float:
    """Mean over pairs of arcsin(r)^2/2: covariance of log sizes that correlation alone gives."""
    m, width = scores.shape
    if width < 2:
        return 0.0
    total = 0.0
    for start, stop in blocks(width, BLOCK):
        r = scores[:, start:stop].T @ scores / m
        total += float((np.arcsin(np.clip(r, -1, 1)) ** 2).sum())
    mean = (total - width * (math.pi / 2) ** 2) / (width * (width - 1))
    return max(0.0, mean - 1 / m) / 2  # 1/m: what chance correlations add


def _factors(even: FloatArray, count: int) -> FloatArray:
    """The leading principal components, of mean square 1."""
    parts = principal_components(even, count)
    return np.asarray(parts / np.sqrt((parts**2).mean(axis=0)))


def _even(rest: FloatArray, smooth: NDArray[np.bool_]) -> FloatArray:
    """Rows divided by their size over series, standardised again."""
    size = np.sqrt((rest[:, smooth] ** 2).mean(axis=1))
    return unit(rest / np.maximum(size, 0.1)[:, None])


def _loadings(rest: FloatArray, smooth: NDArray[np.bool_]) -> FloatArray:
    """Loadings (K, B) of the factors.

    Counted, where series are enough, on rows of like size, since a scale that series share
    passes for factors; loaded on rows as they are, whose size is in part the factors' own.
    """
    m, width = rest.shape
    if width < 3:
        return np.zeros((0, width))
    even = _even(rest, smooth) if smooth.sum() >= FEWEST_EVENED else rest
    varying = even[:, (even**2).sum(axis=0) > 0]
    count = eigenvalue_ratio(spectrum(standardised(varying, "scores")), m, varying.shape[1])
    if not count:
        return np.zeros((0, width))
    return np.asarray(_factors(rest, count).T @ rest / m)


def _stretch(series: FloatArray, scores: FloatArray) -> float:
    """Factor on the scores' correlations at which drawn series are as correlated as these.

    Under a Gaussian copula scores of correlation r give series of about c r + (1 - c) r^3, c
    the product of each one's correlation with its score; sums of heavy parts, as factors make,
    are closer than that in their large values. Over pairs clear of 0, weighted by r; towards 1
    where these are few.
    """
    m, width = scores.shape
    if width < 2:
        return 1.0
    step = max(1, width // MOST_STRETCHED)
    series, scores = series[:, ::step], scores[:, ::step]
    own = (series * scores).mean(axis=0)
    upper = np.triu_indices(own.size, 1)
    r, found = ((a.T @ a / m)[upper] for a in (scores, series))
    clear = np.abs(r) > float(-ndtri(FALSE_PAIR / r.size)) / math.sqrt(m)
    if not clear.any():
        return 1.0
    r, found, linear = r[clear], found[clear], (own[upper[0]] * own[upper[1]])[clear]
    tried = np.linspace(0.8, 1.3, 51)
    moved = np.clip(tried[:, None] * r, -1, 1)
    given = ((linear * moved + (1 - linear) * moved**3) * r).sum(axis=1)
    best = float(tried[np.argmin(np.abs(given - float((found * r).sum())))])
    return 1 + (best - 1) * r.size / (r.size + FEW_PAIRS)


def _clusters(
    left: FloatArray, active: FloatArray, own: NDArray[np.bool_], stretch: float
) -> tuple[Cluster, ...]:
    """Join series whose correlation is clear of 0, and shrink the correlation of each cluster.

    The error of a correlation is 1/sqrt(m), made larger by rows that are large in many series
    at once and where few rows differ from the mode.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    m, width = left.shape
    if width < 2:
        return ()
    together = max(0.0, float((left**2).mean(axis=1).var()) - 2 / width)
    share = np.where(active < 0.5, 4 * active * (1 - active), 1.0)
    least = float(-ndtri(FALSE_PAIR / (width * (width - 1)))) * math.sqrt((1 + together) / m)
    bound = least / np.sqrt(np.maximum(share, 1e-12))
    bound[own] = np.inf
    ones, twos = [], []
    for start, stop in blocks(width, BLOCK):
        r = np.abs(left[:, start:stop].T @ left / m)
        one, two = np.nonzero(r > np.maximum(bound[start:stop, None], bound))
        ones.append(one + start)
        twos.append(two)
    one, two = np.concatenate(ones), np.concatenate(twos)
    one, two = one[one != two], two[one != two]
    graph = coo_array((np.ones(one.size), (one, two)), shape=(width, width))
    _, label = connected_components(graph, directed=False)
    counts = np.bincount(label)
    order = np.argsort(label, kind="stable")
    ends = np.cumsum(counts)
    return tuple(
        _cluster(left, np.sort(order[ends[number] - counts[number] : ends[number]]), stretch)
        for number in np.flatnonzero(counts > 1)
    )


def _cluster(left: FloatArray, members: NDArray[np.int64], stretch: float) -> Cluster:
    part = left[:, members]
    m, width = part.shape
    keep = 1 - shrinkage(part)
    if width <= m:
        matrix = np.clip(stretch * keep * (part.T @ part / m), -LARGEST_PAIR, LARGEST_PAIR)
        np.fill_diagonal(matrix, 1.0)
        values, vectors = np.linalg.eigh(matrix)
        root = (vectors * np.sqrt(np.maximum(values, 0.0))).T
        root /= np.sqrt((root**2).sum(axis=0))  # where stretching took it out of the cone
        return Cluster(members=members, root=read_only(root), noise=0.0)
    return Cluster(
        members=members, root=read_only(math.sqrt(keep / m) * part), noise=math.sqrt(1 - keep)
    )


def shrinkage(part: FloatArray) -> float:
    """Weight of the identity in the correlation of unit columns (m, k), 0 to 1.

    Ledoit et al. (2004), J. Multivariate Analysis 88, with the target's mean variance 1.
    """
    m, width = part.shape
    gram = part.T @ part / m if width <= m else part @ part.T / m
    square = float((gram**2).sum())
    distance = square - width
    error = (float(((part**2).sum(axis=1) ** 2).sum()) / m - square) / m
    return min(max(error, 0.0), distance) / distance if distance > 0 else 1.0
