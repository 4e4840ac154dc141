"""Is the error serially dependent, in its level or in its size?

The default for the size is Ljung-Box on |u - med u| with a permutation
p-value; the classical tests on u^2, which need four moments, stand beside it.
What tests of dependence and of variance share is here: the record of a
result, and the permutations.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np
from numpy.typing import NDArray

from scantling.core.checks import finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import blocks, stream
from scantling.errors import InputError

LEVEL = 0.05
"""Of the tests that decide what is modelled."""

CHUNK = 2**18
"""Numbers a permutation test holds at once (2 MiB, so that they stay in cache)."""

TIE = 1e-10
"""Relative slack with which a permuted statistic counts as equal to the observed one."""

CONSTANT = 1e-12
"""Range over largest absolute value below which a series counts as constant."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TestResult:
    """One test of variance or dependence."""

    __test__: ClassVar[bool] = False  # the name is the trade's; not a class of tests

    test: str
    """What was tested and how, in trade words."""
    statistic: float
    """Value of the test statistic, at least 0 unless the test says otherwise."""
    p_value: float
    """Probability of a value as large under the null, 0 to 1."""
    needs_moment: int
    """Order of the error's moment that the p-value needs: 4, 2 or 0 (none)."""
    method: Literal["asymptotic", "permutation"]
    """Where the p-value comes from."""
    lags: int | None = None
    """Lags taken together, of a test of dependence; None for others."""
    permutations: int | None = None
    """Rearrangements behind the p-value, which is at least 1/(1 + their number)."""


def ljung_box(u: Any, lags: int = 5) -> TestResult:
    """Test the levels: Q = n(n+2) sum_l r_l^2/(n-l), chi2(lags).

    Over-rejects when volatility clusters: read it with `robust_ljung_box`.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order; centred at their mean here.
    lags : int
        Autocorrelations taken together, 1 to n/4.

    Raises
    ------
    InputError
        If u is not finite or constant, or lags is out of range.

    Source: Ljung et al. (1978), Biometrika 65, 297-303. Needs two moments of
    independent errors.
    """
    series = _centred(u, lags)
    return _portmanteau(series, lags, "Ljung-Box", needs_moment=2)


def robust_ljung_box(u: Any, lags: int = 5) -> TestResult:
    """Test the levels, allowing for any heteroskedasticity.

    Q = sum_l (sum_t u_t u_(t-l))^2 / sum_t u_t^2 u_(t-l)^2, chi2(lags) when u
    is a martingale difference whose products u_t u_(t-l), u_t u_(t-m) are
    uncorrelated for l != m. A lag at which all products are 0 adds nothing.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order; centred at their mean here.
    lags : int
        Autocorrelations taken together, 1 to n/4.

    Raises
    ------
    InputError
        As `ljung_box`.

    Source: Lobato et al. (2001), International Economic Review 42, 187-205;
    variance of one autocorrelation as in Lo et al. (1989), Journal of
    Econometrics 40, 203-238 (both from memory). Needs four moments when
    volatility is dependent.
    """
    from scipy.stats import chi2

    series = _centred(u, lags)
    statistic = 0.0
    for lag in range(1, lags + 1):
        products = series[lag:] * series[:-lag]
        variance = float(products @ products)
        if variance > 0:
            statistic += float(products.sum()) ** 2 / variance
    return TestResult(
        test="Ljung-Box, heteroskedasticity-robust",
        statistic=statistic,
        p_value=float(chi2.sf(statistic, lags)),
        needs_moment=4, method="asymptotic", lags=lags,
    )  # fmt: skip


def arch_lm(u: Any, lags: int = 5, *, centre: bool = True) -> TestResult:
    """Test the squares: (n - lags) R^2 of u_t^2 on its own lags, chi2(lags).

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order.
    lags : int
        Lags of u^2, 1 to n/4.
    centre : bool
        Whether to centre u at its own mean first; False takes it as centred.

    Raises
    ------
    InputError
        As `ljung_box`.

    Source: Engle (1982), Econometrica 50, 987-1007. Needs four moments.
    """
    from statsmodels.stats.diagnostic import het_arch

    series = _centred(u, lags, centre=centre)
    name = "Engle's ARCH-LM"
    if steady(series**2):
        return unmoved(name, 4, "asymptotic", lags)
    with warnings.catch_warnings():
        # Of the named tuple to come, and of lags of u^2 that hardly vary: the fit is of their span.
        warnings.simplefilter("ignore")
        statistic, p_value = het_arch(series, nlags=lags)[:2]
    return TestResult(
        test=name,
        statistic=float(statistic),
        p_value=float(p_value),
        needs_moment=4, method="asymptotic", lags=lags,
    )  # fmt: skip


def mcleod_li(u: Any, lags: int = 5, *, centre: bool = True) -> TestResult:
    """Test the squares: Ljung-Box of u^2, chi2(lags).

    Parameters
    ----------
    u, lags, centre
        As `arch_lm`.

    Raises
    ------
    InputError
        As `ljung_box`.

    Source: McLeod et al. (1983), Journal of Time Series Analysis 4, 269-273.
    Needs four moments; without them the autocorrelations of squares have
    random limits (Davis et al. (1998), Annals of Statistics 26, 2049-2080).
    """
    squares = _centred(u, lags, centre=centre) ** 2
    if steady(squares):
        return unmoved("McLeod-Li", 4, "asymptotic", lags)
    return _portmanteau(squares, lags, "McLeod-Li", needs_moment=4)


def absolute_ljung_box_permutation(
    u: Any, *, seed: int, lags: int = 5, draws: int = 999
) -> TestResult:
    """Test |u - med u| for serial dependence by permutation: the default for clustering.

    The statistic is Ljung-Box of |u - med u|; p = (1 + #{Q* >= Q})/(draws + 1)
    over permutations in time. Exact for every n and law if the errors are
    observed and exchangeable under the null, approximate on residuals.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order.
    seed : int
        The design's seed.
    lags : int
        Autocorrelations taken together, 1 to n/4.
    draws : int
        Permutations, at least 1.

    Raises
    ------
    InputError
        As `ljung_box`; also if draws is below 1.

    Sources: statistic as `ljung_box`; median centring after Machado et al.
    (2000), Journal of Econometrics 97, 189-202 (from memory). Needs a second
    moment for its power to be usual.
    """
    series = _centred(u, lags)
    name = "Ljung-Box of absolute residuals"
    size = np.abs(series - np.median(series))
    if steady(size):
        return unmoved(name, 2, "permutation", lags)
    return _permutation_box(size, name, 2, "absolute Ljung-Box permutation", seed, lags, draws)


def sign_ljung_box_permutation(u: Any, *, seed: int, lags: int = 5, draws: int = 999) -> TestResult:
    """Test the levels by their signs alone: Ljung-Box of sign(u - med u), by permutation.

    Neither heavy tails nor volatility of any kind disturb it: where the median given the past is
    constant, signs are exchangeable. Price: less power than `ljung_box` under normal errors.

    Parameters
    ----------
    u, seed, lags, draws
        As `absolute_ljung_box_permutation`.

    Raises
    ------
    InputError
        As `ljung_box`; also if draws is below 1.

    Source: signs against serial dependence after Campbell et al. (1991), Journal of Business &
    Economic Statistics 9, 269-273 (from memory). Needs no moment.
    """
    series = _centred(u, lags)
    signs = np.sign(series - np.median(series))
    name = "Ljung-Box of signs"
    if np.ptp(signs) == 0:
        return unmoved(name, 0, "permutation", lags)
    return _permutation_box(signs, name, 0, "sign Ljung-Box permutation", seed, lags, draws)


def _permutation_box(
    values: FloatArray, name: str, needs_moment: int, purpose: str, seed: int, lags: int,
    draws: int,
) -> TestResult:  # fmt: skip
    """Ljung-Box of values that vary, p = (1 + #{Q* >= Q})/(draws + 1) over permutations."""
    unit = values - values.mean()
    unit /= np.sqrt(unit @ unit)
    observed = float(_box(unit[None], lags)[0])
    exceeding = 0
    for rows in permuted(unit, draws, stream(seed, purpose)):
        exceeding += int(np.count_nonzero(_box(rows, lags) >= observed * (1 - TIE)))
    return TestResult(
        test=name,
        statistic=observed,
        p_value=(1 + exceeding) / (draws + 1),
        needs_moment=needs_moment, method="permutation", lags=lags, permutations=draws,
    )  # fmt: skip


def permuted(
    values: FloatArray, draws: int, generator: np.random.Generator, block: int | None = None
) -> Iterator[FloatArray]:
    """Yield `draws` rearrangements of `values`, some rows at a time.

    Without `block` every row is a uniform permutation. With it the circle of
    the n positions is cut into blocks of that length, starting at a uniform
    offset (one block is shorter if n is no multiple), and the blocks are put
    in random order; `values` are laid against the rows so reordered. That
    keeps dependence within blocks in both series and breaks it between them;
    the p-value is then approximate.

    Parameters
    ----------
    values : array, shape (n,)
        What is rearranged.
    draws : int
        Rearrangements in all, at least 1.
    generator : numpy Generator
        Its draws decide everything; how many rows are yielded at once does not
        matter.
    block : int or None
        Rows per block, 1 to n/2.

    Yields
    ------
    array, shape (k, n)
        The next k rearrangements; k n is about `CHUNK`.

    Raises
    ------
    InputError
        If draws or block is out of range.
    """
    n = values.size
    if draws < 1:
        raise InputError(f"draws: at least 1 is needed; found {draws}")
    if block is not None and not 1 <= block <= n // 2:
        raise InputError(f"block: 1 to {n // 2} rows are needed; found {block}")
    offsets = None if block is None else generator.integers(n, size=draws)
    for start, stop in blocks(draws, max(1, CHUNK // n)):
        rows = np.tile(values, (stop - start, 1))
        if block is None or offsets is None:
            generator.permuted(rows, axis=1, out=rows)
            yield rows
            continue
        order = block_order(n, block, offsets[start:stop], generator)
        laid = np.empty_like(rows)
        np.put_along_axis(laid, order, rows, axis=1)
        yield laid


def block_order(
    n: int, block: int, offsets: NDArray[np.int64], generator: np.random.Generator
) -> NDArray[np.int64]:
    """Return positions 0..n-1 with circular blocks in random order, one row per offset.

    Parameters
    ----------
    n, block : int
        Positions and block length.
    offsets : array of int, shape (k,)
        Where on the circle the first block starts.
    generator : numpy Generator
        Draws the order of the blocks.

    Returns
    -------
    array of int, shape (k, n)
        Each row a permutation of 0..n-1.
    """
    number = -(-n // block)
    sequence = np.tile(np.arange(number), (offsets.size, 1))
    generator.permuted(sequence, axis=1, out=sequence)
    positions = (sequence[:, :, None] * block + np.arange(block)).reshape(offsets.size, -1)
    # Every row holds the same number of positions past the end, all in the
    # short block, so dropping them leaves n in each.
    kept = positions[positions < n].reshape(offsets.size, n)
    order: NDArray[np.int64] = (kept + offsets[:, None]) % n
    return order


def steady(values: FloatArray) -> bool:
    """Say whether non-negative values do not vary."""
    return bool(np.ptp(values) <= CONSTANT * values.max())


def unmoved(
    name: str, needs_moment: int, method: Literal["asymptotic", "permutation"],
    lags: int | None = None,
) -> TestResult:  # fmt: skip
    """Return the result where the error's size is the same in every row."""
    return TestResult(
        test=name, statistic=0.0, p_value=1.0, needs_moment=needs_moment, method=method, lags=lags
    )


def _centred(u: Any, lags: int, *, centre: bool = True) -> FloatArray:
    """Return u with largest absolute value 1, centred unless told otherwise, after checks."""
    series = finite_vector(u, "u", minimum=8)
    top = float(np.abs(series).max())
    if not top or np.ptp(series / top) <= CONSTANT:
        raise InputError("u: values that vary are needed; all are equal")
    if not 1 <= lags <= series.size // 4:
        raise InputError(f"lags: 1 to {series.size // 4} are needed; found {lags}")
    series = series / top
    if centre:
        series = series - series.mean()
        series /= np.abs(series).max()
    return series


def _portmanteau(series: FloatArray, lags: int, name: str, *, needs_moment: int) -> TestResult:
    """Return the asymptotic Ljung-Box test of a series, which is centred there."""
    from statsmodels.stats.diagnostic import acorr_ljungbox

    table = acorr_ljungbox(series, lags=[lags])
    return TestResult(
        test=name,
        statistic=float(table["lb_stat"].iloc[0]),
        p_value=float(table["lb_pvalue"].iloc[0]),
        needs_moment=needs_moment, method="asymptotic", lags=lags,
    )  # fmt: skip


def _box(rows: FloatArray, lags: int) -> FloatArray:
    """Return the Ljung-Box statistic of each row, rows centred and of unit length."""
    n = rows.shape[1]
    statistic = np.zeros(rows.shape[0])
    for lag in range(1, lags + 1):
        statistic += np.einsum("ij,ij->i", rows[:, lag:], rows[:, :-lag]) ** 2 / (n - lag)
    return n * (n + 2) * statistic
