"""Spliced innovations: the sample's own body, generalised-Pareto tails."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np
from scipy.special import ndtr

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.moments import Z90
from scantling.diagnostics.tail_estimators import weighted_hill
from scantling.diagnostics.tail_index import TailIndex, one_side, tail_index
from scantling.diagnostics.volatility import Volatility
from scantling.law.innovation import Innovation, Parameter, ShapeSpread, Size
from scantling.law.splice import TAIL_SHARE, Splice, fit_splice


@dataclass(frozen=True, slots=True, kw_only=True)
class Spliced(Innovation):
    """A splice; draws of it are centred at its mean, where that exists."""

    splice: Splice
    """Body and tails."""

    name: ClassVar[str] = "spliced"
    meaning: ClassVar[str] = (
        "The sample's own middle 80 %, generalised-Pareto tails with the reported tail"
        " index beyond; fitted only."
    )
    stated_by: ClassVar[tuple[Parameter, ...] | None] = None
    bootstraps: ClassVar[int] = 99

    @property
    def parameters(self) -> dict[str, float]:
        """Shape and scales of the tails."""
        return {
            "gamma": self.splice.gamma,
            "left_scale": self.splice.left_scale,
            "right_scale": self.splice.right_scale,
        }

    @property
    def variance(self) -> float:
        """Exact; inf from gamma 1/2."""
        return self.splice.mean_and_variance()[1]

    @property
    def tail_index(self) -> float:
        """1/gamma."""
        return 1 / self.splice.gamma if self.splice.gamma > 0 else math.inf

    @property
    def heaviness(self) -> tuple[float, float]:
        """Exponential tails where gamma is 0."""
        return (self.splice.gamma, 1.0)

    def _mean(self) -> float:
        mean = self.splice.mean_and_variance()[0]
        return 0.0 if math.isnan(mean) else mean

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws, centred."""
        drawn = self.splice.quantile(np.asarray(rng.random(size)))
        return np.asarray(drawn - self._mean())

    def at_scores(self, scores: FloatArray) -> FloatArray:
        """By the quantile function, which has a closed form."""
        return np.asarray(self.splice.quantile(ndtr(scores)) - self._mean())

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function of the centred law."""
        return self.splice.cdf(x + self._mean())

    def uniforms(self, sample: FloatArray) -> FloatArray:
        """By the splice as it was fitted: its body is the sample's, not moved to mean 0."""
        return self.splice.cdf(sample)

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density of the centred law; flat between the body's order statistics."""
        return self.splice.log_density(x + self._mean())

    def recurrence_index(self, path: Volatility) -> float:
        """The smaller of its own index and that of the sample's recurrence."""
        return min(self.tail_index, path.tail_index)

    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""
        return replace(
            self,
            splice=replace(
                self.splice,
                body=read_only(self.splice.body * factor),
                left_scale=self.splice.left_scale * factor,
                right_scale=self.splice.right_scale * factor,
            ),
        )

    def moved(self, factor: float) -> Self:
        """The scales of the tails times `factor`; the body is the sample's."""
        tails = replace(
            self.splice,
            left_scale=self.splice.left_scale * factor,
            right_scale=self.splice.right_scale * factor,
        )
        return replace(self, splice=tails)

    @classmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """Each row's own body, weighted Hill index and tail scales."""
        out = []
        for row in samples:
            gamma = float(weighted_hill(one_side(row, "both"), row.size // 2))
            out.append(cls(splice=fit_splice(row, gamma)))
        return out

    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """With the interval of the sample's tail index as its own."""
        return spliced_spread(self, tail_index(values, seed=seed), values.size)


def spliced_spread(law: Spliced, tail: TailIndex, n: int) -> ShapeSpread:
    """Weights over the shape of spliced tails: normal, with the tail index's interval as theirs."""
    top, bottom = 1 / tail.low, 1 / tail.high
    centre, error = (top + bottom) / 2, max((top - bottom) / 2 / Z90, 1e-3)
    gammas = np.linspace(max(0.0, centre - 3 * error), max(0.02, centre + 3 * error), 61)
    weight = np.exp(-0.5 * ((gammas - centre) / error) ** 2)
    return ShapeSpread(
        laws=tuple(
            replace(law, splice=replace(law.splice, gamma=float(gamma))) for gamma in gammas
        ),
        weights=read_only(weight / weight.sum()),
        log_scale_error=math.sqrt(2 * (1 + max(tail.gamma, 0)) / (TAIL_SHARE * n)),
    )
