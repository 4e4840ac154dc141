"""Geometry of the columns: factors, condition, effective rank, incoherence.

Heavy columns create false factors, so factors are counted on normal-score
columns; the geometry the regression meets is that of the columns as they are.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from scantling.core.checks import finite_matrix
from scantling.core.record import FloatArray
from scantling.core.streams import blocks, stream
from scantling.design.expand import normal_scores
from scantling.errors import InputError

CHUNK = 2**20
"""Numbers a pass over column blocks holds at once (8 MiB)."""

MOST_FACTORS = 8
"""Largest number of factors considered (common practice, no source)."""

CONSTANT = 1e-12
"""Standard deviation over largest absolute value below which a column counts as constant."""

DEPENDENT = "columns are linearly dependent: the correlation matrix is singular"
"""Why there is no condition number although there are fewer columns than rows."""

ALIKE = 0.99
"""Correlation from which two columns are called all but the same (common practice, no source)."""

COLLINEAR = 1e-6
"""A column whose part not explained by those before it is shorter than this
share of its length counts as collinear."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Structure:
    """Shape of a table of columns."""

    factors: int
    """Common factors by the eigenvalue ratio on normal-score columns, 0 to 8."""
    factors_alternative: int
    """Common factors by the information criterion IC_p2 on the same, 0 to 8."""
    leading_share: float
    """Share of the trace that the first `factors` eigenvalues of the normal-score
    columns carry (the first one when `factors` is 0), 0 to 1."""
    condition: float | None
    """Largest over smallest eigenvalue of the columns' correlation, at least 1;
    None where the smallest is 0."""
    condition_note: str | None
    """Why `condition` is None; None where it is given."""
    effective_rank: float
    """Exponential of the entropy of the correlation's eigenvalues, 1 to min(n - 1, P)."""
    largest_correlation: float
    """Largest absolute correlation between two columns; 0 for a single column."""
    largest_pair: tuple[int, int] | None
    """Indices of that pair, the smaller first; None for a single column."""


def column_structure(X: Any) -> Structure:
    """Return the geometry of the columns.

    Eigenvalues come from the smaller of the two Gram matrices, correlations in
    blocks of columns: time of order n P min(n, P) + n P^2 / 2, and memory for
    one copy of X and the smaller Gram matrix.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Columns; n at least 3.

    Raises
    ------
    InputError
        If X is not finite, has fewer than 3 rows, or a column is constant.

    Sources: `eigenvalue_ratio`, `information_criterion`; Roy et al. (2007),
    The effective rank, 15th European Signal Processing Conference, 606-610
    (from memory), for the effective rank.
    """
    columns = _checked(X)
    n, p = columns.shape
    scores = spectrum(standardised(normal_scores(columns), "X"))
    factors = eigenvalue_ratio(scores, n, p)
    standard = standardised(columns, "X")
    values = spectrum(standard)
    condition, note = _condition(values, n, p)
    share = values[values > 0]
    largest, pair = _largest_correlation(standard)
    return Structure(
        factors=factors,
        factors_alternative=information_criterion(scores, n, p),
        leading_share=min(1.0, float(scores[: max(1, factors)].sum())),
        condition=condition,
        condition_note=note,
        effective_rank=float(np.exp(-np.sum(share * np.log(share)))),
        largest_correlation=largest,
        largest_pair=pair,
    )


def spectrum(standard: FloatArray) -> FloatArray:
    """Return the eigenvalues of X X'/(n P), largest first, which sum to 1.

    Parameters
    ----------
    standard : array, shape (n, P)
        Columns with mean 0 and mean square 1.

    Returns
    -------
    array, shape (min(n - 1, P),)
        Times P, they are those of the correlation matrix; what centring makes
        exactly 0 is left out.
    """
    from scipy.linalg import eigvalsh

    n, p = standard.shape
    gram = standard @ standard.T if p >= n else standard.T @ standard
    values = eigvalsh(gram / (n * p))[::-1][: min(n - 1, p)]
    return np.maximum(values, 0.0)


def eigenvalue_ratio(values: FloatArray, n: int, p: int) -> int:
    """Return the number of factors that maximises mu_k / mu_(k+1), k = 0..8.

    The mock mu_0 = V(0)/ln min(n, P) lets the answer be 0. With few columns k
    stops at half of min(n - 1, P), where the ratio still says something.

    Takes the eigenvalues from `spectrum`, and rows and columns.

    Source: Ahn et al. (2013), Econometrica 81, 1203-1227. Assumes strong
    factors and bounded fourth moments: hence the normal scores.
    """
    largest = _most_factors(values)
    if largest == 0:
        return 0
    chain = np.concatenate([[values.sum() / math.log(min(n, p))], values[: largest + 1]])
    chain = np.maximum(chain, np.finfo(float).eps)
    return int(np.argmax(chain[:-1] / chain[1:]))


def information_criterion(values: FloatArray, n: int, p: int) -> int:
    """Return the number of factors that minimises IC_p2(k), k = 0..8.

    IC_p2(k) = ln V(k) + k g, V(k) = sum of the eigenvalues after the k-th, g
    the second of `factor_penalties`.

    Takes the eigenvalues from `spectrum`, and rows and columns.

    Source: Bai et al. (2002), Econometrica 70, 191-221.
    """
    largest = _most_factors(values)
    left = values.sum() - np.concatenate([[0.0], np.cumsum(values[:largest])])
    criterion = np.log(np.maximum(left, np.finfo(float).eps))
    return int(np.argmin(criterion + np.arange(largest + 1) * factor_penalties(n, p)[1]))


def factor_penalties(n: int, p: int) -> tuple[float, float]:
    """Return what IC_p1 and IC_p2 charge for each factor at n rows and P columns.

    ((n + P)/(n P)) ln(n P/(n + P)) and ((n + P)/(n P)) ln min(n, P): Bai et
    al. (2002), Econometrica 70, 191-221.
    """
    rate = (n + p) / (n * p)
    return rate * math.log(1 / rate), rate * math.log(min(n, p))


def incoherence(X: Any, support_size: int, supports: int, seed: int) -> float:
    """Return how far the columns are from letting a lasso recover a support.

    The median over `supports` random supports S of max over j outside S of
    the row sum of |C_jS C_SS^-1|, C the columns' correlation. Above 1 there
    are signs for which no penalty recovers that support. Infinite where
    C_SS is singular for half of the supports or more.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Columns; pass normal scores as well where columns are heavy.
    support_size : int
        Columns in a support: at least 1, below P and below n - 1.
    supports : int
        Supports simulated, at least 1.
    seed : int
        The design's seed.

    Raises
    ------
    InputError
        If X is not usable (as `column_structure`) or a size is out of range.

    Source: Zhao et al. (2006), Journal of Machine Learning Research 7,
    2541-2563; signs are unknown beforehand, so the sign-free bound is used.
    """
    standard = standardised(_checked(X), "X")
    n, p = standard.shape
    most = min(p - 1, n - 2)
    if not 1 <= support_size <= most:
        raise InputError(f"support_size: 1 to {most} columns are needed; found {support_size}")
    if supports < 1:
        raise InputError(f"supports: at least 1 is needed; found {supports}")
    generator = stream(seed, "incoherence")
    largest = np.empty(supports)
    for draw in range(supports):
        chosen = np.sort(generator.choice(p, size=support_size, replace=False))
        inside = standard[:, chosen]
        rows = standard.T @ inside / n
        largest[draw] = _row_sums(rows, chosen).max()
    ordered = np.sort(largest)
    # The mean of a finite and an infinite middle value is infinite, as it should be.
    return float((ordered[(supports - 1) // 2] + ordered[supports // 2]) / 2)


def irrepresentable(
    correlation: FloatArray, support: Sequence[int], signs: Sequence[int] | None = None
) -> FloatArray:
    """Return |C_jS C_SS^-1 sign(b_S)| for every j outside S, in column order.

    Parameters
    ----------
    correlation : array, shape (P, P)
        Correlation matrix C.
    support : sequence of int
        Indices of S.
    signs : sequence of +1 and -1, or None
        Signs of the coefficients on S; None gives the sign-free row sums of
        |C_jS C_SS^-1|, the largest value over all signs.

    Returns
    -------
    array, shape (P - len(support),)
        Sign recovery needs all at most 1; infinite where C_SS is singular.

    Source: Zhao et al. (2006), Journal of Machine Learning Research 7, 2541-2563.
    """
    chosen = np.asarray(support, dtype=np.intp)
    return _row_sums(np.asarray(correlation, dtype=np.float64)[:, chosen], chosen, signs)


def column_blocks(columns: FloatArray) -> list[tuple[int, int]]:
    """Return (start, stop) of column blocks of about `CHUNK` numbers."""
    return blocks(columns.shape[1], max(1, CHUNK // columns.shape[0]))


def standardised(columns: FloatArray, name: str, first: int = 0) -> FloatArray:
    """Return columns with mean 0 and mean square 1; `first` numbers them in the message.

    Raises
    ------
    InputError
        If a column is constant.
    """
    standard, varies = _scaled(columns)
    if not varies.all():
        raise InputError(
            f"{name}: columns that vary are needed; column"
            f" {first + int(np.argmin(varies)) + 1} is constant"
        )
    return standard


def independent_columns(columns: FloatArray, name: str) -> FloatArray:
    """Return standardised columns, less constant ones and those collinear with earlier ones.

    Raises
    ------
    InputError
        If no column varies.
    """
    scaled, varies = _scaled(columns)
    standard = scaled[:, varies]
    n = standard.shape[0]
    basis = np.empty((n, min(standard.shape)))
    kept: list[int] = []
    for index in range(standard.shape[1]):
        if len(kept) == n - 1:
            break
        found = basis[:, : len(kept)]
        rest = standard[:, index]
        for _ in range(2):  # twice is enough for orthogonality to rounding
            rest = rest - found @ (found.T @ rest)
        length = np.linalg.norm(rest)
        if length > COLLINEAR * math.sqrt(n):
            basis[:, len(kept)] = rest / length
            kept.append(index)
    if not kept:
        raise InputError(f"{name}: a column that varies is needed; all are constant")
    return standard[:, kept]


def principal_components(columns: FloatArray, number: int) -> FloatArray:
    """Return the leading principal components of the columns that vary, (n, <= number).

    The largest entry of each is made positive; scale is arbitrary.
    """
    from scipy.linalg import eigh

    scaled, varies = _scaled(columns)
    standard = scaled[:, varies]
    n, p = standard.shape
    if not p:
        return np.empty((n, 0))
    gram = standard @ standard.T if p >= n else standard.T @ standard
    size = gram.shape[0]
    _, vectors = eigh(gram, subset_by_index=(size - min(number, size), size - 1))
    components: FloatArray = vectors[:, ::-1] if p >= n else standard @ vectors[:, ::-1]
    peak = np.take_along_axis(components, np.abs(components).argmax(axis=0)[None], axis=0)
    return components * np.sign(peak)


def _scaled(columns: FloatArray) -> tuple[FloatArray, Any]:
    """Return standardised columns (zeros where constant) and which of them vary."""
    top = np.abs(columns).max(axis=0)
    scaled: FloatArray = columns / np.where(top > 0, top, 1.0)
    scaled -= scaled.mean(axis=0)
    spread = np.sqrt(np.einsum("ij,ij->j", scaled, scaled) / columns.shape[0])
    varies = spread > CONSTANT
    scaled /= np.where(varies, spread, np.inf)
    scaled -= scaled.mean(axis=0)  # again: a large offset leaves rounding in the mean
    return scaled, varies


def _checked(X: Any) -> FloatArray:
    """Return X as a finite table of at least 3 rows."""
    columns = finite_matrix(X, "X")
    if columns.shape[0] < 3:
        raise InputError(f"X: at least 3 rows are needed; found {columns.shape[0]}")
    return columns


def _most_factors(values: FloatArray) -> int:
    """Return the largest number of factors examined."""
    return min(MOST_FACTORS, values.size // 2)


def _condition(values: FloatArray, n: int, p: int) -> tuple[float | None, str | None]:
    """Return the correlation's condition number, or None and why not."""
    if p >= n:
        return None, f"{p} columns on {n} rows: the correlation matrix is singular"
    if values[-1] <= p * np.finfo(float).eps * values[0]:
        return None, DEPENDENT
    return float(values[0] / values[-1]), None


def _largest_correlation(standard: FloatArray) -> tuple[float, tuple[int, int] | None]:
    """Return the largest absolute correlation and its pair, the first of equals."""
    largest, pair = 0.0, None
    for value, i, j in _block_maxima(standard):
        if pair is None or value > largest:
            largest, pair = value, (i, j)
    return min(1.0, largest), pair


def _block_maxima(standard: FloatArray) -> Iterator[tuple[float, int, int]]:
    """Yield the largest absolute correlation of each block above the diagonal, with its pair."""
    n, p = standard.shape
    ranges = blocks(p, math.isqrt(CHUNK))
    for start, stop in ranges:
        for other, end in ranges:
            if end <= start + 1 or other < start:
                continue
            part = np.abs(standard[:, start:stop].T @ standard[:, other:end]) / n
            if other == start:
                part = np.triu(part, 1)
            i, j = np.unravel_index(int(np.argmax(part)), part.shape)
            if start + int(i) < other + int(j):
                yield float(part[i, j]), start + int(i), other + int(j)


def _row_sums(rows: FloatArray, chosen: Any, signs: Sequence[int] | None = None) -> FloatArray:
    """Return |C_jS C_SS^-1 s| over j outside S from the columns S of C, s free if None."""
    inner = rows[chosen]
    outside = np.delete(rows, chosen, axis=0)
    smallest = np.linalg.eigvalsh(inner)[0]
    if smallest <= 10 * chosen.size * np.finfo(float).eps:
        return np.full(outside.shape[0], np.inf)
    weights = np.linalg.solve(inner, outside.T).T
    if signs is None:
        return np.sum(np.abs(weights), axis=1)
    return np.abs(weights @ np.asarray(signs, dtype=np.float64))
