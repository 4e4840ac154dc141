"""Normal innovations."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import gammaln, ndtr

from scantling.core.record import FloatArray
from scantling.diagnostics.kesten import kesten_index
from scantling.diagnostics.volatility import Volatility
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size
from scantling.law.student import student_spread


@dataclass(frozen=True, slots=True, kw_only=True)
class Normal(Innovation):
    """The normal law."""

    scale: float = 1.0
    """Standard deviation."""

    name: ClassVar[str] = "normal"
    meaning: ClassVar[str] = "Thin tails; every moment exists."
    stated_by: ClassVar[tuple[Parameter, ...] | None] = ()

    @property
    def parameters(self) -> dict[str, float]:
        """Its sd, as the scale."""
        return {"scale": self.scale}

    @property
    def variance(self) -> float:
        """Square of the sd."""
        return self.scale**2

    @property
    def tail_index(self) -> float:
        """Inf."""
        return math.inf

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws."""
        return np.asarray(self.scale * rng.standard_normal(size))

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function."""
        return np.asarray(ndtr(x / self.scale))

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density."""
        return np.asarray(-0.5 * (x / self.scale) ** 2 - math.log(self.scale * math.sqrt(math.tau)))

    def moment(self, order: float) -> float:
        """(2 s^2)^(q/2) Gamma((q + 1)/2)/sqrt(pi)."""
        log = order / 2 * math.log(2) + float(gammaln((order + 1) / 2)) - 0.5 * math.log(math.pi)
        return self.scale**order * math.exp(log)

    def recurrence_index(self, path: Volatility) -> float:
        """Root of the Kesten equation for normal innovations."""
        return kesten_index(path.alpha, path.beta, gamma=path.leverage)

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(self, scale=self.scale * factor)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Root mean square of each row."""
        return [cls(scale=float(scale)) for scale in np.sqrt((samples**2).mean(axis=1))]

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """That of the Student t, of which the normal is the light end."""
        return student_spread(values)
