"""Skewed Student t: two Student halves of differing scale, centred at its mean.

Hansen (1994), International Economic Review 35, 705-730; at variance 1 the density is his.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammaln, stdtr

from scantling.core.record import FloatArray
from scantling.law.climb import climb
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size, grid_spread
from scantling.law.student import MOST_DF, PRIOR, Student, fit_student, log_constant

LOW = np.array([-40.0, math.sqrt(0.002), -0.7])
HIGH = np.array([40.0, math.sqrt(0.45), 0.7])
"""Ends of log scale, root of 1/df, and skew in fits: more skew than that is not a t's."""
SPREAD_ROOTS = np.sqrt(np.concatenate([[0.002], np.arange(0.02, 0.451, 0.02)]))
SPREAD_SKEWS = 7
REFIT_STEPS = 3
"""From the true parameters two steps reach the maximum to within a small part of its error."""


def half_mean(df: FloatArray) -> FloatArray:
    """E|T| of a Student t of scale 1, df above 1."""
    log = gammaln((df + 1) / 2) - gammaln(df / 2)
    return np.asarray(2 * np.sqrt(df / np.pi) * np.exp(log) / (df - 1))


def row_densities(samples: FloatArray, at: FloatArray) -> FloatArray:
    """Log density (B, n) of each row at its parameters (B, 3): log scale, root of 1/df, skew."""
    scale, df, skew = np.exp(at[:, :1]), at[:, 1:2] ** -2, at[:, 2:]
    y = samples / scale + 2 * skew * half_mean(df)
    root = np.sqrt(df)
    y *= np.where(y < 0, 1 / ((1 - skew) * root), 1 / ((1 + skew) * root))
    y *= y
    return np.asarray(log_constant(df) - at[:, :1] - (df + 1) / 2 * np.log1p(y, out=y))


@dataclass(frozen=True, slots=True, kw_only=True)
class SkewedStudent(Innovation):
    """z = s (y - E y), y a Student t whose halves are stretched by 1 - skew and 1 + skew."""

    scale: float = 1.0
    """s, that of the symmetric t at skew 0."""
    df: float
    """Degrees of freedom, the index of both tails; above 2."""
    skew: float
    """Between -1 and 1; negative: the left tail is the longer."""

    name: ClassVar[str] = "skewed-t"
    meaning: ClassVar[str] = (
        "Student t with one side stretched (Hansen's); both tails fall like |x|^-df, the"
        " left the longer where skew is below 0."
    )
    bootstraps: ClassVar[int] = 99
    stated_by: ClassVar[tuple[Parameter, ...] | None] = (
        Parameter(key="df", low=2.0, high=MOST_DF, example=4),
        Parameter(key="skew", low=-1.0, high=1.0, example=-0.3),
    )

    @property
    def parameters(self) -> dict[str, float]:
        """Scale, degrees of freedom and skew."""
        return {"scale": self.scale, "df": self.df, "skew": self.skew}

    @property
    def mode(self) -> float:
        """Where the halves meet: minus the mean of the two halves."""
        return -2 * self.scale * self.skew * float(half_mean(np.array(self.df)))

    @property
    def variance(self) -> float:
        """s^2 (1 + 3 skew^2) df/(df - 2) less the squared mean of the halves."""
        about = self.scale**2 * (1 + 3 * self.skew**2) * self.df / (self.df - 2)
        return about - self.mode**2

    @property
    def tail_index(self) -> float:
        """The degrees of freedom."""
        return self.df

    @property
    def at_edge(self) -> bool:
        """At skew 0.7, to which values with a hard end tend, or at the fewest df fitted, 2.2."""
        return abs(self.skew) >= HIGH[2] - 1e-6 or self.df <= HIGH[1] ** -2 + 1e-3

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws: a half is picked by its share, (1 + skew)/2 for the right one."""
        sizes = np.abs(Student(scale=1.0, df=self.df).draw(size, rng))
        left = rng.random(size) < (1 - self.skew) / 2
        y = np.where(left, -(1 - self.skew), 1 + self.skew) * sizes
        return np.asarray(self.scale * y + self.mode)

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function."""
        y = (x - self.mode) / self.scale
        left, right = 1 - self.skew, 1 + self.skew
        below = left * stdtr(self.df, np.minimum(y, 0) / left)
        return np.asarray(
            np.where(y < 0, below, left / 2 + right * (stdtr(self.df, y / right) - 0.5))
        )

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density."""
        at = np.array([[math.log(self.scale), self.df**-0.5, self.skew]])
        return row_densities(x.reshape(1, -1), at).reshape(x.shape)

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Maximum likelihood of each row, from the symmetric fit."""
        gammas, scales, _ = fit_student(samples)
        start = np.column_stack([np.log(scales), np.sqrt(gammas), np.zeros(gammas.size)])
        return cls._climbed(samples, start, 12)

    def refits(self, samples: FloatArray) -> list[Self]:
        """Maximum likelihood by Newton steps from this law's own parameters."""
        own = np.array([math.log(self.scale), self.df**-0.5, self.skew])
        return self._climbed(samples, np.tile(own, (samples.shape[0], 1)), REFIT_STEPS)

    @classmethod
    def _climbed(cls, samples: FloatArray, start: FloatArray, steps: int) -> list[Self]:
        found, _ = climb(
            lambda at: row_densities(samples, at).sum(axis=1), start, LOW, HIGH, steps=steps
        )
        return [
            cls(scale=math.exp(at[0]), df=float(at[1]) ** -2, skew=float(at[2])) for at in found
        ]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """Likelihood over 1/df and skew, each at its own most likely scale; prior on 1/df as of
        the Student t, flat on the skew.

        Skew runs over two of its standard errors, about sqrt(1/(3 n)) near 0, either side.
        """
        reach = 2.5 / math.sqrt(3 * values.size)
        skews = np.clip(np.linspace(-reach, reach, SPREAD_SKEWS) + self.skew, LOW[2], HIGH[2])
        roots, skews = (grid.ravel() for grid in np.meshgrid(SPREAD_ROOTS, skews))
        samples = np.broadcast_to(values, (roots.size, values.size))

        def likelihood(log_scale: FloatArray) -> FloatArray:
            at = np.column_stack([log_scale[:, 0], roots, skews])
            return row_densities(samples, at).sum(axis=1)

        # At given size of the middle half the scale hardly depends on the shape.
        start = np.full((roots.size, 1), math.log(self.scale))
        found, best = climb(likelihood, start, LOW[:1], HIGH[:1], steps=6)
        laws: list[Innovation] = [
            replace(self, scale=math.exp(log_scale), df=float(root) ** -2, skew=float(skew))
            for (log_scale,), root, skew in zip(found, roots, skews, strict=True)
        ]
        error = math.sqrt((self.df + 3) / (2 * self.df * values.size))
        centre, width = PRIOR
        prior = np.exp(-0.5 * ((roots**2 - centre) / width) ** 2)
        spread = grid_spread(laws, best, error, prior)
        # The skews looked at are part of those possible before the sample is seen.
        part = math.log(2 * reach / (HIGH[2] - LOW[2]))
        return replace(spread, log_evidence=spread.log_evidence + part)
