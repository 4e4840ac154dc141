"""Laws of known tail index that the validation studies draw from, replications as columns."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.tail_interval import asymmetry_bias
from scantling.diagnostics.volatility import kesten_index

BURN_IN = 1000
"""Rows a volatility process runs before those that are kept."""

Draw = Callable[[np.random.Generator, int, int], FloatArray]
"""(generator, rows, replications) -> array (rows, replications)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class KnownLaw:
    """A law, its name and its index."""

    name: str
    """As printed in tables."""
    index: float
    """Tail index; inf where every moment exists."""
    draw: Draw
    """Draws series, one per column."""
    centred: bool = True
    """Whether magnitudes are taken about the sample median; False: about 0, which is known."""

    @property
    def gamma(self) -> float:
        """1/index."""
        return 1 / self.index

    def magnitudes(self, rng: np.random.Generator, rows: int, replications: int) -> FloatArray:
        """Absolute distances from the centre, shape (rows, replications)."""
        return self.with_skew(rng, rows, replications)[0]

    def with_skew(
        self, rng: np.random.Generator, rows: int, replications: int
    ) -> tuple[FloatArray, FloatArray]:
        """The same, and the bias that pooling unequal halves may add, shape (replications,)."""
        drawn = self.draw(rng, rows, replications)
        if not self.centred:
            return np.abs(drawn), np.zeros(replications)
        return np.abs(drawn - np.median(drawn, axis=0)), asymmetry_bias(drawn)


def student(df: float) -> KnownLaw:
    """Student t."""
    return KnownLaw(
        name=f"t {df:g}", index=df, draw=lambda rng, n, count: rng.standard_t(df, (n, count))
    )


def pareto(index: float, *, centred: bool = False) -> KnownLaw:
    """Symmetric Pareto, |x| >= 1: no values near 0, so its sample median is unstable."""

    def draw(rng: np.random.Generator, n: int, count: int) -> FloatArray:
        return (1 + rng.pareto(index, (n, count))) * rng.choice([-1.0, 1.0], (n, count))

    name = f"Pareto {index:g}" + (", median-centred" if centred else "")
    return KnownLaw(name=name, index=index, draw=draw, centred=centred)


def stable(index: float) -> KnownLaw:
    """Symmetric stable by the formula of Chambers et al. (1976), JASA 71."""

    def draw(rng: np.random.Generator, n: int, count: int) -> FloatArray:
        angle = rng.uniform(-math.pi / 2, math.pi / 2, (n, count))
        exponential = rng.standard_exponential((n, count))
        first = np.sin(index * angle) / np.cos(angle) ** (1 / index)
        return first * (np.cos((1 - index) * angle) / exponential) ** ((1 - index) / index)

    return KnownLaw(name=f"stable {index:g}", index=index, draw=draw)


def skewed_student(df: float, skew: float) -> KnownLaw:
    """Two-piece Student t of Fernandez et al. (1998), JASA 93: right side stretched by `skew`."""

    def draw(rng: np.random.Generator, n: int, count: int) -> FloatArray:
        size = np.abs(rng.standard_t(df, (n, count)))
        right = rng.random((n, count)) < skew**2 / (1 + skew**2)
        return np.where(right, skew * size, -size / skew)

    return KnownLaw(name=f"skewed t {df:g} ({skew:g})", index=df, draw=draw)


def garch(alpha: float, beta: float, nu: float | None = None) -> KnownLaw:
    """GARCH(1,1) with normal or unit-variance t(nu) shocks; index of Kesten (1973), Acta 131."""

    def draw(rng: np.random.Generator, n: int, count: int) -> FloatArray:
        out, variance = np.empty((n, count)), np.ones(count)
        for t in range(-BURN_IN, n):
            shock = (
                rng.standard_normal(count)
                if nu is None
                else rng.standard_t(nu, count) * math.sqrt((nu - 2) / nu)
            )
            row = np.sqrt(variance) * shock
            if t >= 0:
                out[t] = row
            variance = (1 - alpha - beta) + alpha * row**2 + beta * variance
        return out

    index = kesten_index(alpha, beta, moment_of="normal" if nu is None else nu)
    label = "n" if nu is None else f"t{nu:g}"
    return KnownLaw(name=f"GARCH-{label} ({alpha:g}, {beta:g})", index=index, draw=draw)


NORMAL = KnownLaw(
    name="normal", index=math.inf, draw=lambda rng, n, count: rng.standard_normal((n, count))
)
LAPLACE = KnownLaw(
    name="Laplace", index=math.inf, draw=lambda rng, n, count: rng.laplace(size=(n, count))
)
