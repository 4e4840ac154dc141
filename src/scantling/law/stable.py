"""Stable innovations of index between 1 and 2: a mean, no variance.

Characteristic function exp(-|s t|^a (1 - i b sign(t) tan(pi a/2))), so that the mean is 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammaln

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size
from scantling.law.stable_density import stable_table

LEAST_INDEX, MOST_INDEX = 1.1, 1.99
MOST_SKEW = 0.95
POINTS = np.pi / 25 * np.arange(1, 11)
"""Where the characteristic function is read, after division by the scale."""
INTERQUARTILE = 1.95
"""Distance of the quartiles over the scale, near enough for indices from 1.1 to 2."""
SPREAD_DRAWS = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Stable(Innovation):
    """A stable law centred at its mean."""

    scale: float = 1.0
    """s; for index 2 it would be sd/sqrt(2)."""
    index: float
    """Tail index, above 1 and below 2."""
    skew: float = 0.0
    """Between -1 and 1; negative: the left tail is the heavier."""

    name: ClassVar[str] = "stable"
    meaning: ClassVar[str] = (
        "Sums of it are of its own kind; tails fall like |x|^-index with index below 2, so"
        " there is a mean but no variance."
    )
    stated_by: ClassVar[tuple[Parameter, ...] | None] = (
        Parameter(key="index", low=LEAST_INDEX - 1e-9, high=2.0, example=1.7),
        Parameter(key="skew", low=-1.0, high=1.0, example=0, default=0.0),
    )
    bootstraps: ClassVar[int] = 99

    @property
    def parameters(self) -> dict[str, float]:
        """Scale, index and skew."""
        return {"scale": self.scale, "index": self.index, "skew": self.skew}

    @property
    def variance(self) -> float:
        """Inf."""
        return math.inf

    @property
    def tail_index(self) -> float:
        """The index."""
        return self.index

    @property
    def at_edge(self) -> bool:
        """At the largest skew, or at either end of the index."""
        return abs(self.skew) >= MOST_SKEW or not LEAST_INDEX < self.index < MOST_INDEX

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws.

        Source: Chambers et al. (1976), Journal of the American Statistical Association 71,
        340-344.
        """
        a, lean = self.index, self.skew * math.tan(math.pi * self.index / 2)
        angle = np.pi * (rng.random(size) - 0.5)
        waiting = rng.standard_exponential(size)
        shifted = a * angle + math.atan(lean)
        out = (
            (1 + lean**2) ** (1 / (2 * a))
            * np.sin(shifted)
            / np.cos(angle) ** (1 / a)
            * (np.cos(angle - shifted) / waiting) ** ((1 - a) / a)
        )
        return np.asarray(self.scale * out)

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function, to about 1e-4."""
        return stable_table(self.index, self.skew).cdf(x / self.scale)

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density, to about 1e-3."""
        table = stable_table(self.index, self.skew)
        return table.log_density(x / self.scale) - math.log(self.scale)

    def moment(self, order: float) -> float:
        """E|z|^q, q below the index.

        Source: Samorodnitsky et al. (1994), Stable Non-Gaussian Random Processes, property
        1.2.17.
        """
        a, q = self.index, order
        if q >= a:
            return math.inf
        lean = self.skew * math.tan(math.pi * a / 2)
        # Gamma(1 - q/2) for q up to 2; |x|^q of the symmetric law first.
        log = (
            q * math.log(2) + gammaln((1 + q) / 2) + gammaln(1 - q / a) - gammaln(1 - q / 2)
            - 0.5 * math.log(math.pi) + q / (2 * a) * math.log1p(lean**2)
        )  # fmt: skip
        return self.scale**q * math.exp(float(log)) * math.cos(q / a * math.atan(lean))

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Regression on the empirical characteristic function of each row.

        ln(-ln|phi(t)|^2) is a line in ln t, whose slope is the index; the angle of phi gives
        skew beside a shift, which is left out. Index 1.1 to 1.99 in steps of 0.01, skew -0.95 to
        0.95 in steps of 0.05, so that few densities have to be tabulated.

        Source: Koutrouvelis (1980), Journal of the American Statistical Association 75, 918-928.
        """
        quartiles = np.quantile(samples, [0.25, 0.75], axis=1)
        width = (quartiles[1] - quartiles[0]) / INTERQUARTILE
        sizes = np.abs(samples).mean(axis=1)
        width = np.where(width > 1e-6 * sizes, width, sizes)
        scaled = samples / width[:, None]
        wave = np.stack([np.exp(1j * t * scaled).mean(axis=1) for t in POINTS], axis=1)
        level = np.clip(np.abs(wave), 1e-6, 1 - 1e-9)
        logs = np.log(-2 * np.log(level))
        t = np.log(POINTS)
        slope = ((logs - logs.mean(axis=1, keepdims=True)) * (t - t.mean())).sum(axis=1)
        index = np.clip(slope / ((t - t.mean()) ** 2).sum(), LEAST_INDEX, MOST_INDEX)
        height = (logs - index[:, None] * t).mean(axis=1) - math.log(2)
        unit = np.exp(height / index)
        angle = np.unwrap(np.angle(wave), axis=1)
        return [
            cls(
                scale=float(unit[row] * width[row]),
                index=round(float(index[row]), 2),
                skew=_skew(angle[row], float(unit[row]), float(index[row])),
            )
            for row in range(samples.shape[0])
        ]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """Refits to samples of the same length drawn from the law, equally likely."""
        rng = stream(seed, "stable spread")
        drawn = self.draw((SPREAD_DRAWS, values.size), rng)
        again = self.fit_rows(drawn - drawn.mean(axis=1, keepdims=True))
        return ShapeSpread(
            laws=tuple(again),
            weights=read_only(np.full(SPREAD_DRAWS, 1 / SPREAD_DRAWS)),
            log_scale_error=0.0,
            log_evidence=float(self.log_density(values).sum()),
        )


def _skew(angle: FloatArray, unit: float, index: float) -> float:
    """Skew by regression of the angle on t and on (s t)^a tan(pi a/2)."""
    bend = (unit * POINTS) ** index * math.tan(math.pi * index / 2)
    found = np.linalg.lstsq(np.column_stack([POINTS, bend]), angle, rcond=None)[0]
    return round(float(np.clip(found[1], -MOST_SKEW, MOST_SKEW)) * 20) / 20
