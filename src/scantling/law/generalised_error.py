"""Generalised error innovations: density proportional to exp(-|x/s|^shape)."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammainc, gammaln

from scantling.core.record import FloatArray
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size, grid_spread

INVERSES = np.concatenate([np.arange(0.1, 0.6, 0.1), np.arange(0.6, 3.01, 0.2)])
"""Values of 1/shape scanned; between them the likelihood is interpolated by a parabola."""
FINE_INVERSES = np.arange(0.1, 3.001, 0.04)


@dataclass(frozen=True, slots=True, kw_only=True)
class GeneralisedError(Innovation):
    """Shape 2 is the normal, shape 1 the Laplace law."""

    scale: float = 1.0
    """s of exp(-|x/s|^shape)."""
    shape: float
    """Exponent: below 1 heavier than Laplace, above 2 lighter than normal."""

    name: ClassVar[str] = "ged"
    meaning: ClassVar[str] = (
        "Generalised error: tails exp(-|x|^shape); shape 2 is normal, 1 Laplace, less is"
        " heavier; every moment exists."
    )
    stated_by: ClassVar[tuple[Parameter, ...] | None] = (
        Parameter(key="shape", low=0.2, high=20.0, example=1.5),
    )

    @property
    def parameters(self) -> dict[str, float]:
        """Scale and shape."""
        return {"scale": self.scale, "shape": self.shape}

    @property
    def variance(self) -> float:
        """s^2 Gamma(3/shape)/Gamma(1/shape)."""
        return self.moment(2.0)

    @property
    def tail_index(self) -> float:
        """Inf."""
        return math.inf

    @property
    def heaviness(self) -> tuple[float, float]:
        """By the exponent."""
        return (0.0, 1 / self.shape)

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws: a random sign times a power of a gamma variate."""
        large = rng.standard_gamma(1 / self.shape, size) ** (1 / self.shape)
        return np.asarray(self.scale * np.where(rng.random(size) < 0.5, -large, large))

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function."""
        half = 0.5 * gammainc(1 / self.shape, (np.abs(x) / self.scale) ** self.shape)
        return np.asarray(np.where(x < 0, 0.5 - half, 0.5 + half))

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density."""
        constant = math.log(self.shape / (2 * self.scale)) - math.lgamma(1 / self.shape)
        return np.asarray(constant - (np.abs(x) / self.scale) ** self.shape)

    def moment(self, order: float) -> float:
        """s^q Gamma((q + 1)/shape)/Gamma(1/shape)."""
        log = gammaln((order + 1) / self.shape) - gammaln(1 / self.shape)
        return self.scale**order * math.exp(float(log))

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Maximum likelihood of each row, 1/shape from 0.1 to 3."""
        likelihood, _ = profile(samples, INVERSES)
        rows = np.arange(samples.shape[0])
        best = np.clip(likelihood.argmax(axis=0), 1, INVERSES.size - 2)
        x0, x1, x2 = (np.log(INVERSES[best + step]) for step in (-1, 0, 1))
        f0, f1, f2 = (likelihood[best + step, rows] for step in (-1, 0, 1))
        above = (x1 - x0) ** 2 * (f1 - f2) - (x1 - x2) ** 2 * (f1 - f0)
        below = (x1 - x0) * (f1 - f2) - (x1 - x2) * (f1 - f0)
        flat = np.abs(below) <= 1e-12
        vertex = np.clip(x1 - 0.5 * above / np.where(flat, 1.0, below), x0, x2)
        shapes = np.exp(-np.where(flat, x1, vertex))
        return [
            cls(scale=_scale(np.abs(row), float(shape)), shape=float(shape))
            for row, shape in zip(samples, shapes, strict=True)
        ]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """Profile likelihood over 1/shape, flat prior on 0.1 to 3."""
        return generalised_error_spread(values)


def _scale(sizes: FloatArray, shape: float) -> float:
    """Most likely scale: s^shape = shape mean|x|^shape."""
    return float((shape * (sizes**shape).mean()) ** (1 / shape))


def profile(samples: FloatArray, inverses: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Profile log-likelihood and scale over 1/shape, both (G, B); samples (B, n)."""
    n = samples.shape[1]
    # A zero has size 0 at every shape; its log is kept finite.
    logs = np.log(np.maximum(np.abs(samples), 1e-300))
    likelihoods, scales = [], []
    for inverse in inverses:
        shape = 1 / float(inverse)
        log_scale = (np.log(shape) + np.log(np.exp(shape * logs).mean(axis=1))) / shape
        constant = math.log(shape / 2) - math.lgamma(1 / shape)
        likelihoods.append(n * (constant - log_scale - 1 / shape))
        scales.append(np.exp(log_scale))
    return np.array(likelihoods), np.array(scales)


def generalised_error_spread(values: FloatArray) -> ShapeSpread:
    """Weights over 1/shape given the sample; the scale's error at known shape is
    1/sqrt(shape n)."""
    likelihood, scale = profile(values[None], FINE_INVERSES)
    laws: list[Innovation] = [
        GeneralisedError(scale=float(s), shape=float(1 / inverse))
        for s, inverse in zip(scale[:, 0], FINE_INVERSES, strict=True)
    ]
    best = 1 / float(FINE_INVERSES[int(likelihood[:, 0].argmax())])
    return grid_spread(laws, likelihood[:, 0], 1 / math.sqrt(best * values.size))
