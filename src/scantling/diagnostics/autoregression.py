"""Errors whose level persists from row to row: an autoregression, and the shocks behind it.

Where columns persist too, such errors raise the variance of every score, by the long-run factor
1 + 2 sum_k rho_x(k) rho_e(k), and a penalty for independent errors is passed by noise at will.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.diagnostics.dependence import LEVEL, TestResult, sign_ljung_box_permutation

MOST_LAGS = 10
ROWS_PER_LAG = 20
"""Fewest rows for each lag tried."""
DRAWS = 50
"""Coefficients drawn, one set for each drawn law behind a band."""
FURTHEST = 0.999
"""Largest root; a drawn autoregression beyond it is moved there."""
NEAR_UNIT_ROOT = 0.95
"""Largest root from which levels are hardly told from a random walk (common practice, no
source)."""
EXACT = 1e-9
"""Share of the variance left below which the next value is known, and no longer order tried."""
BURN_IN = 1000
"""Most rows before the first that a drawn series runs in."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Autoregression:
    """e_t = sum_k a_k e_(t-k) + u_t, stationary; the law of the errors is that of the shocks u."""

    coefficients: FloatArray
    """a_1..a_L, shape (L,), read-only."""
    draws: FloatArray
    """Coefficients under what the sample leaves open, shape (50, L), read-only."""

    @property
    def gain(self) -> float:
        """Variance of the errors over that of independent shocks."""
        return float(1 / np.prod(1 - partial_autocorrelations(self.coefficients) ** 2))

    @property
    def root(self) -> float:
        """Size of the largest root, below 1: the share of a shock left after one more row."""
        return largest_root(self.coefficients)

    @property
    def long_run(self) -> float:
        """Variance of the mean over what it were if the same errors were independent."""
        return float(1 / (1 - self.coefficients.sum()) ** 2 / self.gain)

    def shocks(self, errors: FloatArray) -> FloatArray:
        """u of errors (n,) or (n, R) about 0; rows before the first count as 0."""
        return _run(_polynomial(self.coefficients), [1.0], errors)

    def errors(self, shocks: FloatArray, rng: np.random.Generator) -> FloatArray:
        """Errors of shocks (n, R), run in on rows of theirs picked at random."""
        before = min(BURN_IN, max(50, int(8 / (1 - self.root))))
        picked = shocks[rng.integers(len(shocks), size=before)]
        whole = np.concatenate([picked, shocks])
        return _run([1.0], _polynomial(self.coefficients), whole)[before:]

    def seen_by_shocks(self, X: FloatArray) -> FloatArray:
        """What multiplies u_t in x'e, for columns X (n, P): sum_k psi_k x_(t+k)."""
        return _run([1.0], _polynomial(self.coefficients), X[::-1])[::-1]

    def moved(self, draw: int) -> Autoregression:
        """The same with one of the drawn sets of coefficients."""
        drawn = read_only(self.draws[draw % len(self.draws)])
        return Autoregression(coefficients=drawn, draws=self.draws)


@dataclass(frozen=True, slots=True, kw_only=True)
class Levels:
    """The test of the levels, and the autoregression fitted where it rejects."""

    test: TestResult
    """Autocorrelation of signs, by permutation."""
    autoregression: Autoregression | None
    """None: levels are taken as independent from row to row."""

    def shocks(self, errors: FloatArray) -> FloatArray:
        """What is left of errors (n,) about 0; they themselves where levels do not persist."""
        return errors if self.autoregression is None else self.autoregression.shocks(errors)


def find_autoregression(values: FloatArray, *, seed: int) -> Levels:
    """Test signs for autocorrelation at 5 % and fit an autoregression if it is found.

    The order, 0 to 10 and at most n/20, minimises n ln(variance) + order ln n.

    Parameters
    ----------
    values : array, shape (n,)
        Errors in time order, centred.
    seed : int
        Of the permutations and the drawn coefficients.

    Source: coefficients by Burg's method (statsmodels), which are always stationary; criterion
    of Schwarz (1978), Annals of Statistics 6, 461-464; their errors as in Brockwell et al. (1991),
    Time Series: Theory and Methods, section 8.10 (from memory).
    """
    test = sign_ljung_box_permutation(values, seed=seed)
    fitted = fit_autoregression(values, seed=seed) if test.p_value <= LEVEL else None
    return Levels(test=test, autoregression=fitted)


def fit_autoregression(values: FloatArray, *, seed: int) -> Autoregression | None:
    """The autoregression of a centred series (n,), its order chosen; None for order 0."""
    from statsmodels.regression.linear_model import burg

    n = values.size
    unit = values / np.sqrt((values**2).mean())
    found = [(0.0, np.empty(0), 1.0)]
    for order in range(1, min(MOST_LAGS, n // ROWS_PER_LAG) + 1):
        coefficients, variance = burg(unit, order=order)
        variance = max(float(variance), 1e-300)
        found.append((n * np.log(variance) + order * np.log(n), coefficients, variance))
        if variance < EXACT:
            break
    _, chosen, variance = min(found, key=lambda each: each[0])
    if not chosen.size:
        return None
    chosen = stationary(np.asarray(chosen))
    return Autoregression(
        coefficients=read_only(chosen), draws=read_only(_drawn(unit, chosen, variance, seed))
    )


def _drawn(unit: FloatArray, chosen: FloatArray, variance: float, seed: int) -> FloatArray:
    """Coefficients about the chosen ones, covariance variance * Gamma^-1/n, made stationary."""
    from scipy.linalg import toeplitz

    n, order = unit.size, chosen.size
    lagged = [float(unit[k:] @ unit[: n - k]) / n for k in range(order)]
    covariance = variance * np.linalg.inv(toeplitz(lagged)) / n
    root = np.linalg.cholesky(covariance + 1e-12 * np.eye(order))
    normals = stream(seed, "autoregression draws").standard_normal((DRAWS, order))
    return np.array([stationary(chosen + root @ each) for each in normals])


def stationary(coefficients: FloatArray) -> FloatArray:
    """The coefficients, their roots drawn in to 0.999 where one lies beyond."""
    root = largest_root(coefficients)
    if root <= FURTHEST:
        return coefficients
    return np.asarray(coefficients * (FURTHEST / root) ** np.arange(1, coefficients.size + 1))


def largest_root(coefficients: FloatArray) -> float:
    """Largest size of a root of z^L - a_1 z^(L-1) - ... - a_L."""
    return float(np.abs(np.roots(_polynomial(coefficients))).max(initial=0.0))


def _polynomial(coefficients: FloatArray) -> FloatArray:
    return np.concatenate([[1.0], -coefficients])


def _run(above: ArrayLike, below: ArrayLike, x: FloatArray) -> FloatArray:
    """The rational filter above/below along the first axis, from rest."""
    from scipy.signal import lfilter

    return np.asarray(lfilter(above, below, x, axis=0))


def partial_autocorrelations(coefficients: FloatArray) -> FloatArray:
    """Partial autocorrelations of lags L..1, by stepping the order down (Levinson)."""
    a = np.array(coefficients, dtype=np.float64)
    out = []
    while a.size:
        last = float(a[-1])
        out.append(last)
        a = (a[:-1] + last * a[-2::-1]) / (1 - last**2) if a.size > 1 else a[:0]
    return np.array(out)
