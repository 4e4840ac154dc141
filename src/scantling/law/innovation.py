"""What every law of the innovations answers: the one protocol a new family has to meet."""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import ClassVar, Self

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.kesten import ShockDensity, kesten_index, log_expectation
from scantling.diagnostics.volatility import Volatility
from scantling.law.inversion import quantile_table

Size = int | tuple[int, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Parameter:
    """A parameter by which a law is stated on one line."""

    key: str
    """As written: 'df' in student-t:df=5."""
    low: float
    """Lower end of what is accepted, not itself accepted."""
    high: float
    """Upper end of what is accepted, not itself accepted."""
    example: float
    """A value to show."""
    default: float | None = None
    """Taken where it is left out; None: it must be given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ShapeSpread:
    """What the sample leaves open about the law: laws with their probabilities."""

    laws: tuple[Innovation, ...]
    """Laws of differing shape, each at its most likely scale."""
    weights: FloatArray
    """Their probabilities given the sample, summing to 1."""
    log_scale_error: float
    """Standard error of the log scale at given shape."""
    log_evidence: float = 0.0
    """Log-likelihood averaged over the shapes before the sample is seen; it compares families."""

    @property
    def gammas(self) -> FloatArray:
        """1/(tail index) of each law, 0 where all moments exist."""
        return np.array([1 / law.tail_index for law in self.laws])

    def scaled(self, factor: float) -> ShapeSpread:
        """The spread of `factor` times the innovations."""
        return replace(self, laws=tuple(law.scaled(factor) for law in self.laws))


class Innovation(ABC):
    """A law of independent innovations, of mean zero where the mean exists.

    A family is one frozen record derived from this; `law/catalogue.py` lists them. Fits take the
    location as 0: samples are centred before.
    """

    __slots__ = ()

    name: ClassVar[str]
    """The family, as written."""
    meaning: ClassVar[str]
    """One sentence: what it looks like, which moments exist."""
    stated_by: ClassVar[tuple[Parameter, ...] | None] = ()
    """Parameters by which it can be stated; None: it can only be fitted."""
    bootstraps: ClassVar[int] = 199
    """Samples drawn for the goodness-of-fit test."""

    @property
    @abstractmethod
    def parameters(self) -> dict[str, float]:
        """Parameters by name, finite."""

    @property
    @abstractmethod
    def variance(self) -> float:
        """Variance; inf where it does not exist."""

    @property
    @abstractmethod
    def tail_index(self) -> float:
        """Moments below it exist; inf if all do."""

    @abstractmethod
    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws."""

    @abstractmethod
    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function, any shape."""

    @abstractmethod
    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density, any shape."""

    @abstractmethod
    def scaled(self, factor: float) -> Self:
        """The law of `factor` times the innovation."""

    @classmethod
    @abstractmethod
    def fit_rows(cls, samples: FloatArray) -> list[Self]:
        """The law fitted to each row of `samples` (B, n), location 0."""

    @classmethod
    def fit(cls, values: FloatArray) -> Self:
        """The law fitted to one sample (n,)."""
        return cls.fit_rows(values[None])[0]

    @abstractmethod
    def spread(self, values: FloatArray, *, seed: int) -> ShapeSpread:
        """What the sample (n,), to which the law was fitted, leaves open about it."""

    @classmethod
    def stated(cls, **parameters: float) -> Self:
        """The law with these parameters: of variance 1 where it exists, else of scale 1."""
        law = cls(**parameters)
        return law.scaled(1 / math.sqrt(law.variance)) if math.isfinite(law.variance) else law

    @property
    def unit(self) -> float:
        """What a size is measured in: the sd, or the scale where there is no variance."""
        if math.isfinite(self.variance):
            return math.sqrt(self.variance)
        return self.parameters.get("scale", 1.0)

    @property
    def at_edge(self) -> bool:
        """Whether a fit ended where the range of the family ends, so that it is no fit."""
        return False

    @property
    def negative_share(self) -> float:
        """E z^2 1(z < 0)/E z^2, by which leverage adds to the persistence."""
        density = self.density_in_units()
        return math.exp(log_expectation(density, lambda s: 2 * s - 1e9, lambda s: 2 * s))

    @property
    def heaviness(self) -> tuple[float, float]:
        """Larger for heavier tails: 1/index, then 1/exponent of exp(-|x|^exponent)."""
        return (1 / self.tail_index, 0.5)

    def moment(self, order: float) -> float:
        """E|z|^order, order above 0; inf at and above the tail index. By quadrature."""
        if order >= self.tail_index:
            return math.inf
        unit = self.unit
        return unit**order * math.exp(log_expectation(self.density_in_units(), lambda s: order * s))

    def density_in_units(self) -> ShockDensity:
        """Log density of z in units of its sd, or of its scale where there is no variance."""
        unit = self.unit
        return ShockDensity(
            log_density=lambda z: self.log_density(unit * z) + math.log(unit),
            tail_index=self.tail_index,
        )

    def at_scores(self, scores: FloatArray) -> FloatArray:
        """Innovations at normal scores of any shape: quantiles at Phi(score)."""
        return quantile_table(self)(scores)

    def quantile(self, probability: float) -> float:
        """The quantile at a probability strictly inside (0, 1), by bisection of the cdf."""
        from scipy.optimize import brentq

        def gap(z: float) -> float:
            return float(self.cdf(np.array([z * self.unit]))[0]) - probability

        reach = 1.0
        while gap(-reach) > 0 or gap(reach) < 0:
            reach *= 4
        return self.unit * float(brentq(gap, -reach, reach, xtol=1e-12, rtol=1e-13))

    def recurrence_index(self, path: Volatility) -> float:
        """Tail index of the errors under this volatility, by the Kesten equation.

        Never above the law's own, and the law's own where it has no variance.
        """
        if not math.isfinite(self.variance):
            return self.tail_index
        return kesten_index(
            path.alpha, path.beta, gamma=path.leverage, moment_of=self.density_in_units()
        )

    def moved(self, factor: float) -> Self:
        """The law where its uncertain scale is `factor` times what was fitted."""
        return self.scaled(factor)

    def uniforms(self, sample: FloatArray) -> FloatArray:
        """Probability transform of the sample the law was fitted to."""
        return self.cdf(sample)

    def refits(self, samples: FloatArray) -> list[Self]:
        """The family fitted to samples (B, n) drawn from this law; it may start from it."""
        return self.fit_rows(samples)


def averaged_spread(spreads: list[ShapeSpread], weights: FloatArray) -> ShapeSpread:
    """Spreads of several families as one, each with its probability; weights sum to 1."""
    return ShapeSpread(
        laws=tuple(law for spread in spreads for law in spread.laws),
        weights=read_only(
            np.concatenate([w * s.weights for w, s in zip(weights, spreads, strict=True)])
        ),
        log_scale_error=float(
            np.average([spread.log_scale_error for spread in spreads], weights=weights)
        ),
    )


def single_spread(law: Innovation, values: FloatArray) -> ShapeSpread:
    """A law whose shape is known: only its scale is open, to about 1/sqrt(2n)."""
    return ShapeSpread(
        laws=(law,), weights=read_only(np.ones(1)), log_scale_error=1 / math.sqrt(2 * values.size),
        log_evidence=float(law.log_density(values).sum()),
    )  # fmt: skip


def grid_spread(
    laws: list[Innovation], likelihoods: FloatArray, log_scale_error: float,
    prior: FloatArray | None = None,
) -> ShapeSpread:  # fmt: skip
    """Laws weighted by their likelihood and a prior over the grid they stand on (flat if none)."""
    before = np.ones(len(laws)) if prior is None else prior
    weight = np.exp(likelihoods - likelihoods.max()) * (before / before.sum())
    return ShapeSpread(
        laws=tuple(laws),
        weights=read_only(weight / weight.sum()),
        log_scale_error=log_scale_error,
        log_evidence=float(likelihoods.max() + math.log(weight.sum())),
    )
