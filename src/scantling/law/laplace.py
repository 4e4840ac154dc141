"""Laplace (double exponential) innovations."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammaln

from scantling.core.record import FloatArray
from scantling.law.generalised_error import generalised_error_spread
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size


@dataclass(frozen=True, slots=True, kw_only=True)
class Laplace(Innovation):
    """Density exp(-|x|/s)/(2s)."""

    scale: float = 1.0
    """Mean size; the sd is sqrt(2) times it."""

    name: ClassVar[str] = "laplace"
    meaning: ClassVar[str] = (
        "Peaked, tails that fall exponentially; every moment exists, excess kurtosis 3."
    )
    stated_by: ClassVar[tuple[Parameter, ...] | None] = ()

    @property
    def parameters(self) -> dict[str, float]:
        """The scale."""
        return {"scale": self.scale}

    @property
    def variance(self) -> float:
        """2 s^2."""
        return 2 * self.scale**2

    @property
    def tail_index(self) -> float:
        """Inf."""
        return math.inf

    @property
    def heaviness(self) -> tuple[float, float]:
        """Exponential tails."""
        return (0.0, 1.0)

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws."""
        return np.asarray(rng.laplace(scale=self.scale, size=size))

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function."""
        half = 0.5 * np.exp(-np.abs(x) / self.scale)
        return np.asarray(np.where(x < 0, half, 1 - half))

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density."""
        return np.asarray(-np.abs(x) / self.scale - math.log(2 * self.scale))

    def moment(self, order: float) -> float:
        """s^q Gamma(q + 1)."""
        return self.scale**order * math.exp(float(gammaln(order + 1)))

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Mean size of each row, the most likely scale at location 0."""
        return [cls(scale=float(scale)) for scale in np.abs(samples).mean(axis=1)]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """That of the generalised error law, of which the Laplace is one."""
        return generalised_error_spread(values)
