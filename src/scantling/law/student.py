"""Student t by maximum likelihood, for one sample or for many at once.

The law is scanned over gamma = 1/df, so that the normal (gamma = 0) is an end of the scan
and not at infinity; for each gamma the scale solves its likelihood equation by a few steps
of iteratively reweighted least squares.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammaln, stdtr

from scantling.core.record import FloatArray
from scantling.diagnostics.kesten import kesten_index
from scantling.diagnostics.volatility import Volatility
from scantling.law.climb import climb
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size, grid_spread
from scantling.law.inversion import quantile_table

SCAN = (
    0.002, 0.02, 0.05, 0.08, 0.11, 0.14, 0.17, 0.2, 0.235, 0.27, 0.31, 0.36, 0.42, 0.5,
    0.6, 0.72, 0.86, 1.0,
)  # fmt: skip
"""Values of 1/df scanned; between them the likelihood is interpolated by a parabola."""
PRIOR = (0.30, 0.15)
"""Mean and sd of 1/df before the sample is seen: tail indices of returns lie mostly between 2 and
5; Cont (2001), Quantitative Finance 1, 223-236. Wide enough that 200 rows overrule it."""
FINE_SCAN = np.concatenate([[0.002], np.arange(0.01, 0.951, 0.01)])
"""Values of 1/df that a law's uncertainty is spread over; the first stands for the normal."""
VERTEX_STEPS = 12
"""Reweighting steps for the scale at the interpolated maximum."""
MOST_DF = 1e6
FEWEST_TABULATED_DF = 0.8
"""Degrees of freedom below which quantiles span too many powers of ten for a table."""


def log_constant(df: FloatArray) -> FloatArray:
    """Log of the density's constant at scale 1."""
    return np.asarray(gammaln((df + 1) / 2) - gammaln(df / 2) - 0.5 * np.log(np.pi * df))


def reweighted(
    squares: FloatArray, df: FloatArray, square_scale: FloatArray, steps: int
) -> tuple[FloatArray, FloatArray]:
    """Log-likelihood and squared scale, each (B,), after reweighting steps at given df.

    `squares` is (B, n), `df` and `square_scale` (B,); with no steps the likelihood is that at
    the given scale.
    """
    each = df[:, None]
    for _ in range(steps):
        weighted = (each + 1) * squares / (each + squares / square_scale[:, None])
        square_scale = weighted.mean(axis=1)
    logs = np.log1p(squares / (each * square_scale[:, None])).sum(axis=1)
    constant = squares.shape[1] * (log_constant(df) - 0.5 * np.log(square_scale))
    return constant - (df + 1) / 2 * logs, square_scale


def profile(
    samples: FloatArray, gammas: tuple[float, ...] | FloatArray, *, steps: int = 6
) -> tuple[FloatArray, FloatArray]:
    """Profile log-likelihood over gamma = 1/df, location 0.

    Parameters
    ----------
    samples : array, shape (B, n)
    gammas : sequence of G increasing values in (0, 1]
    steps : int
        Reweighting steps per gamma, each started from its neighbour's scale.

    Returns
    -------
    log-likelihood, scale : arrays, shape (G, B)
    """
    squares = samples**2
    square_scale = squares.mean(axis=1)
    likelihoods, scales = [], []
    for position, gamma in enumerate(gammas):
        df = np.full(square_scale.shape, 1 / float(gamma))
        likelihood, square_scale = reweighted(
            squares, df, square_scale, steps if position else 3 * steps
        )
        likelihoods.append(likelihood)
        scales.append(np.sqrt(square_scale))
    return np.array(likelihoods), np.array(scales)


def fit_student(samples: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Maximum-likelihood 1/df, scale and log-likelihood of each row of `samples` (B, n).

    Lange et al. (1989), Journal of the American Statistical Association 84, for the
    reweighting; location 0.
    """
    likelihood, scale = profile(samples, SCAN)
    grid = np.array(SCAN)
    rows = np.arange(samples.shape[0])
    best = likelihood.argmax(axis=0)
    inner = np.clip(best, 1, grid.size - 2)
    around = (inner - 1, inner, inner + 1)
    # In the root of gamma the likelihood is closest to the parabola through the three points
    # around the maximum; its vertex is the estimate.
    x0, x1, x2 = (np.sqrt(grid[at]) for at in around)
    f0, f1, f2 = (likelihood[at, rows] for at in around)
    above = (x1 - x0) ** 2 * (f1 - f2) - (x1 - x2) ** 2 * (f1 - f0)
    below = (x1 - x0) * (f1 - f2) - (x1 - x2) * (f1 - f0)
    safe = np.where(np.abs(below) > 1e-12, below, 1.0)
    vertex = np.where(np.abs(below) > 1e-12, x1 - 0.5 * above / safe, x1)
    gamma = np.clip(vertex, x0, x2) ** 2
    gamma = np.where(best == 0, grid[0], np.where(best == grid.size - 1, grid[-1], gamma))
    top, square_scale = reweighted(samples**2, 1 / gamma, scale[best, rows] ** 2, VERTEX_STEPS)
    return gamma, np.sqrt(square_scale), top


@dataclass(frozen=True, slots=True, kw_only=True)
class Student(Innovation):
    """Student t: density proportional to (1 + (x/s)^2/df)^(-(df + 1)/2)."""

    scale: float = 1.0
    """s; the sd is s sqrt(df/(df - 2)), where df is above 2."""
    df: float
    """Degrees of freedom, which are the tail index."""

    name: ClassVar[str] = "student-t"
    meaning: ClassVar[str] = "Both tails fall like |x|^-df, so moments below order df exist."
    stated_by: ClassVar[tuple[Parameter, ...] | None] = (
        Parameter(key="df", low=0.0, high=MOST_DF, example=5),
    )

    @property
    def parameters(self) -> dict[str, float]:
        """Scale and degrees of freedom."""
        return {"scale": self.scale, "df": self.df}

    @property
    def variance(self) -> float:
        """s^2 df/(df - 2); inf up to df 2."""
        return self.scale**2 * self.df / (self.df - 2) if self.df > 2 else math.inf

    @property
    def tail_index(self) -> float:
        """The degrees of freedom."""
        return self.df

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws, by inversion: half the time of a normal over a root of a gamma."""
        if self.df < FEWEST_TABULATED_DF:
            return np.asarray(self.scale * rng.standard_t(self.df, size))
        draws = quantile_table(replace(self, scale=1.0))(rng.standard_normal(size))
        draws *= self.scale
        return draws

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function."""
        return np.asarray(stdtr(self.df, x / self.scale))

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density."""
        constant = float(log_constant(np.array(self.df))) - math.log(self.scale)
        return np.asarray(constant - (self.df + 1) / 2 * np.log1p((x / self.scale) ** 2 / self.df))

    def moment(self, order: float) -> float:
        """s^q df^(q/2) Gamma((q + 1)/2) Gamma((df - q)/2)/(sqrt(pi) Gamma(df/2)), q < df."""
        if order >= self.df:
            return math.inf
        log = (
            gammaln((order + 1) / 2) + gammaln((self.df - order) / 2) - gammaln(self.df / 2)
            + order / 2 * math.log(self.df) - 0.5 * math.log(math.pi)
        )  # fmt: skip
        return self.scale**order * math.exp(float(log))

    def recurrence_index(self, path: Volatility) -> float:
        """Root of the Kesten equation, below df; df itself where there is no variance."""
        if self.df <= 2:
            return self.df
        return kesten_index(path.alpha, path.beta, gamma=path.leverage, moment_of=self.df)

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Maximum likelihood of each row, df from 1 to 500."""
        gammas, scales, _ = fit_student(samples)
        return [
            cls(scale=float(scale), df=1 / float(gamma))
            for scale, gamma in zip(scales, gammas, strict=True)
        ]

    def refits(self, samples: FloatArray) -> list[Self]:
        """Maximum likelihood by Newton steps from this law's own parameters."""
        squares = samples**2

        def likelihood(at: FloatArray) -> FloatArray:
            return reweighted(squares, at[:, 1] ** -2, np.exp(2 * at[:, 0]), 0)[0]

        low = np.array([math.log(self.scale) - 5, math.sqrt(SCAN[0])])
        high = np.array([math.log(self.scale) + 5, 1.0])
        own = np.array([math.log(self.scale), self.df**-0.5])
        found, _ = climb(likelihood, np.tile(own, (samples.shape[0], 1)), low, high)
        return [replace(self, scale=math.exp(at[0]), df=float(at[1]) ** -2) for at in found]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """Profile likelihood over 1/df."""
        return student_spread(values)


def student_spread(values: FloatArray) -> ShapeSpread:
    """Weights over 1/df given the sample: its profile likelihood times PRIOR, up to 0.95.

    The normal is the lower end. The scale's error is the one at known df,
    sqrt((df + 3)/(2 df n)).
    """
    likelihood, scale = profile(values[None], FINE_SCAN)
    laws: list[Innovation] = [
        Student(scale=float(s), df=1 / float(gamma))
        for s, gamma in zip(scale[:, 0], FINE_SCAN, strict=True)
    ]
    centre, width = PRIOR
    # By the width of each cell, as the grid is not even.
    prior = np.exp(-0.5 * ((FINE_SCAN - centre) / width) ** 2) * np.gradient(FINE_SCAN)
    spread = grid_spread(laws, likelihood[:, 0], 0.0, prior)
    df = 1 / float(FINE_SCAN @ spread.weights)
    return replace(spread, log_scale_error=math.sqrt((df + 3) / (2 * df * values.size)))
