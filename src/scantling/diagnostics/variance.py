"""Is the error variance constant, and does it move with the columns?

The default answer rests on |u - med u| and a permutation p-value, which is
exact for exchangeable errors of any law; the classical tests on u^2, which
need four moments, stand beside it.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from typing import Any

import numpy as np

from scantling.core.checks import finite_matrix, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.dependence import TIE, permuted, steady, unmoved
from scantling.diagnostics.dependence import TestResult as TestResult
from scantling.diagnostics.structure import (
    CONSTANT,
    column_blocks,
    independent_columns,
    principal_components,
    standardised,
)
from scantling.errors import InputError

MOST_SUSPECTS = 6
"""Columns of Z that `scale_suspects` returns at most."""

COMPONENTS = 3
"""Principal components that stand for the columns when none is selected."""


CO_MOVEMENT = "co-movement of |x| and |e|, rank corr."
"""Name of the test of sizes that move together."""


def koenker(u: Any, Z: Any, *, studentised: bool = True) -> TestResult:
    """Test u^2 against Z: n R^2 of u^2 on a constant and Z, chi2(m).

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals of the pilot fit.
    Z : array-like, shape (n, m)
        Suspects, without constant; constant and collinear ones are dropped.
    studentised : bool
        False gives the original form (explained sum of squares over
        2 sigma^4), which takes the kurtosis to be 3; for comparison only.

    Raises
    ------
    InputError
        If u or Z is not finite, they differ in rows, nothing in Z varies, or
        n <= m + 1.

    Sources: Breusch et al. (1979), Econometrica 47, 1287-1294; Koenker (1981),
    Journal of Econometrics 17, 107-112. Needs four moments of the error.
    """
    from statsmodels.stats.diagnostic import het_breuschpagan

    error, suspects = _pair(u, Z)
    name = "Koenker's studentised Breusch-Pagan" if studentised else "Breusch-Pagan, unstudentised"
    if steady(error**2):
        return unmoved(name, 4, "asymptotic")
    statistic, p_value = het_breuschpagan(error, _with_constant(suspects), robust=studentised)[:2]
    return TestResult(
        test=name,
        statistic=float(statistic),
        p_value=float(p_value),
        needs_moment=4,
        method="asymptotic",
    )


def white(u: Any, Z: Any) -> TestResult:
    """Test u^2 against Z, its squares and cross products, chi2(m(m+3)/2).

    Over-rejects under heavy tails (about .11 for nominal .05 under t(2.5),
    n = 250): never show it without `glejser_permutation` beside it.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals of the pilot fit.
    Z : array-like, shape (n, m)
        Suspects, without constant.

    Raises
    ------
    InputError
        As `koenker`; also if n <= m(m+3)/2 + 1.

    Source: White (1980), Econometrica 48, 817-838. Needs E|Z|^4 e^4.
    """
    from statsmodels.stats.diagnostic import het_white

    error, suspects = _pair(u, Z)
    n, m = suspects.shape
    terms = m * (m + 3) // 2
    if n <= terms + 1:
        raise InputError(f"Z: White's test of {m} columns needs {terms + 2} rows; found {n}")
    if steady(error**2):
        return unmoved("White", 4, "asymptotic")
    with warnings.catch_warnings():
        # A dummy is its own square up to scale: statsmodels warns of the lost rank, but counts
        # its degrees of freedom by the rank all the same.
        warnings.simplefilter("ignore")
        statistic, p_value = het_white(error, _with_constant(suspects))[:2]
    return TestResult(
        test="White",
        statistic=float(statistic),
        p_value=float(p_value),
        needs_moment=4,
        method="asymptotic",
    )


def glejser_permutation(
    u: Any, Z: Any, *, seed: int, draws: int = 999, block: int | None = None
) -> TestResult:
    """Test |u - med u| against Z by permutation: the default for heteroskedasticity.

    T = n R^2 of |u - med u| on a constant and Z; p = (1 + #{T* >= T})/(draws + 1)
    over permutations of the rows of Z. Exact for every n and law if the errors
    are observed and exchangeable, approximate on residuals. Under serial
    dependence give `block`: see `permuted`.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals of the pilot fit, in time order if `block` is given.
    Z : array-like, shape (n, m)
        Suspects, without constant; constant and collinear ones are dropped.
    seed : int
        The design's seed.
    draws : int
        Permutations.
    block : int or None
        Rows per block, 1 to n/2.

    Raises
    ------
    InputError
        As `koenker`; also if draws or block is out of range.

    Source: Machado et al. (2000), Journal of Econometrics 97, 189-202, for the
    centring at the median. Needs a second moment for its power to be usual.
    """
    error, suspects = _pair(u, Z)
    name = "Glejser, |e| on pilot and its columns"
    size = np.abs(error - np.median(error))
    if steady(size):
        return unmoved(name, 2, "permutation")
    size -= size.mean()
    basis, _ = np.linalg.qr(suspects)
    observed = float(np.sum((size @ basis) ** 2))
    generator = stream(seed, "Glejser permutation")
    exceeding = 0
    for rows in permuted(size, draws, generator, block):
        explained = np.sum((rows @ basis) ** 2, axis=1)
        exceeding += int(np.count_nonzero(explained >= observed * (1 - TIE)))
    return TestResult(
        test=name,
        statistic=size.size * observed / float(size @ size),
        p_value=(1 + exceeding) / (draws + 1),
        needs_moment=2,
        method="permutation",
        permutations=draws,
    )


def scale_suspects(X: Any, fitted: Any, selected: Sequence[int]) -> FloatArray:
    """Return the few columns that the error's variance is tested against.

    The pilot's fitted values, then up to five selected columns in the order
    given; with none selected, the first three principal components of the
    standardised columns. Constant ones and those collinear with earlier ones
    are dropped (fitted values are often a combination of the selected columns).

    Parameters
    ----------
    X : array-like, shape (n, P)
        Candidate columns.
    fitted : array-like, shape (n,)
        Fitted values of the pilot.
    selected : sequence of int
        Indices into the columns of X, most important first; may be empty.

    Returns
    -------
    array, shape (n, m), 1 <= m <= 6
        Standardised to mean 0 and mean square 1.

    Raises
    ------
    InputError
        If an argument is not finite, rows differ, an index is out of range, or
        nothing varies.
    """
    columns = finite_matrix(X, "X")
    pilot = finite_vector(fitted, "fitted")
    _same_rows(pilot.size, "fitted", columns.shape[0], "X")
    wrong = [index for index in selected if not 0 <= index < columns.shape[1]]
    if wrong:
        raise InputError(
            f"selected: indices from 0 to {columns.shape[1] - 1} are needed; found {wrong[0]}"
        )
    if len(selected):
        others = columns[:, list(selected[: MOST_SUSPECTS - 1])]
    else:
        others = principal_components(columns, COMPONENTS)
    return independent_columns(np.column_stack([pilot, others]), "X")


def co_movement(X: Any, u: Any) -> FloatArray:
    """Return by how much each score's sd exceeds what independence gives.

    sqrt(mean(x^2 u^2) / (mean x^2 mean u^2)), column and error centred: the
    factor by which the penalty must be raised under equal loadings.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Candidate columns.
    u : array-like, shape (n,)
        Residuals of the pilot fit.

    Returns
    -------
    array, shape (P,)
        1 where column and error are unrelated in size (on average), larger
        where they are large together.

    Raises
    ------
    InputError
        If X or u is not finite, rows differ, or a column or u is constant.
    """
    columns, error = _columns_and_error(X, u)
    squared = error**2
    ratio = np.empty(columns.shape[1])
    for start, stop in column_blocks(columns):
        standard = standardised(columns[:, start:stop], "X", start)
        ratio[start:stop] = np.sqrt(squared @ standard**2 / error.size)
    return ratio


def rank_co_movement(X: Any, u: Any) -> FloatArray:
    """Return the Spearman correlation of |x_j - med x_j| with |u - med u|.

    The robust companion of `co_movement`: one row cannot decide it. A column
    with only one absolute deviation (a balanced dummy) gets 0, since its size
    does not move.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Candidate columns.
    u : array-like, shape (n,)
        Residuals of the pilot fit.

    Returns
    -------
    array, shape (P,)
        Between -1 and 1.

    Raises
    ------
    InputError
        As `co_movement`.
    """
    columns, error = _columns_and_error(X, u)
    target = _rank_scores(error[:, None])[:, 0]
    correlation = np.empty(columns.shape[1])
    for start, stop in column_blocks(columns):
        standard = standardised(columns[:, start:stop], "X", start)
        correlation[start:stop] = target @ _rank_scores(standard)
    return correlation


def co_movement_test(
    X: Any, u: Any, seed: int, draws: int = 199, block: int | None = None
) -> TestResult:
    """Test whether the columns' sizes and the error's move together.

    The statistic is the mean over columns of `rank_co_movement`: bounded, so
    no heavy column can dominate. One-sided: only sizes that rise together
    raise the needed penalty. Rows of all columns are permuted jointly against
    u, which keeps the columns' dependence on each other. Out-of-fold residuals
    grow with the columns they were fitted on: give `levelled_residuals`.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Candidate columns, in time order if `block` is given.
    u : array-like, shape (n,)
        Residuals of the pilot fit, levelled.
    seed, draws, block
        As `glejser_permutation`; with persistent volatility give `block`.

    Raises
    ------
    InputError
        As `co_movement` and `glejser_permutation`.
    """
    columns, error = _columns_and_error(X, u)
    target = _rank_scores(error[:, None])[:, 0]
    # The mean of correlations is the correlation-like product with the mean
    # of the columns' rank scores, so a draw costs n and not n P.
    profile = np.zeros(error.size)
    for start, stop in column_blocks(columns):
        standard = standardised(columns[:, start:stop], "X", start)
        profile += _rank_scores(standard).sum(axis=1)
    profile /= columns.shape[1]
    observed = float(target @ profile)
    generator = stream(seed, "co-movement permutation")
    slack = TIE * float(np.linalg.norm(profile))
    exceeding = 0
    for rows in permuted(target, draws, generator, block):
        exceeding += int(np.count_nonzero(rows @ profile >= observed - slack))
    return TestResult(
        test=CO_MOVEMENT,
        statistic=observed,
        p_value=(1 + exceeding) / (draws + 1),
        needs_moment=0,
        method="permutation",
        permutations=draws,
    )


def _pair(u: Any, Z: Any) -> tuple[FloatArray, FloatArray]:
    """Return u with mean square 1 (not centred) and the independent columns of Z."""
    error = finite_vector(u, "u", minimum=3)
    suspects = finite_matrix(Z, "Z")
    _same_rows(suspects.shape[0], "Z", error.size, "u")
    if np.ptp(error / max(np.abs(error).max(), np.finfo(float).tiny)) <= CONSTANT:
        raise InputError("u: values that vary are needed; all are equal")
    suspects = independent_columns(suspects, "Z")
    if error.size <= suspects.shape[1] + 1:
        raise InputError(
            f"Z: fewer columns than rows less one are needed; found {suspects.shape[1]} columns,"
            f" {error.size} rows"
        )
    error = error / np.abs(error).max()
    return error / np.sqrt(np.mean(error**2)), suspects


def _columns_and_error(X: Any, u: Any) -> tuple[FloatArray, FloatArray]:
    """Return X as it is and u with mean 0 and mean square 1."""
    columns = finite_matrix(X, "X")
    error = finite_vector(u, "u", minimum=3)
    _same_rows(columns.shape[0], "X", error.size, "u")
    if np.ptp(error / max(np.abs(error).max(), np.finfo(float).tiny)) <= CONSTANT:
        raise InputError("u: values that vary are needed; all are equal")
    return columns, standardised(error[:, None], "u")[:, 0]


def _same_rows(found: int, name: str, needed: int, other: str) -> None:
    """Raise unless two arguments have as many rows."""
    if found != needed:
        raise InputError(f"{name}: as many rows as {other} ({needed}) are needed; found {found}")


def _with_constant(columns: FloatArray) -> FloatArray:
    """Return the columns after a column of ones."""
    return np.column_stack([np.ones(columns.shape[0]), columns])


def _rank_scores(columns: FloatArray) -> FloatArray:
    """Return centred ranks of the absolute deviations from the median, of unit length.

    A column whose deviations are all equal becomes zeros.
    """
    from scipy.stats import rankdata

    deviation = np.abs(columns - np.median(columns, axis=0))
    # Rounding must not order deviations that are equal (0 and 1 about 1/2).
    ranks = rankdata(np.round(deviation, 12), axis=0)
    ranks -= ranks.mean(axis=0)
    length = np.sqrt(np.sum(ranks**2, axis=0))
    scores: FloatArray = ranks / np.where(length > 0, length, 1.0)
    return scores
