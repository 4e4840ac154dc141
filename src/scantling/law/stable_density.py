"""Density of stable laws by Fourier inversion, with power tails beyond the grid."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from scantling.core.record import FloatArray, read_only

POINTS = 2**14
SPACING = 0.05
EDGE = 150.0
"""Beyond it both tails are powers to within about 1 %, and are continued as such."""
FOLDS = 6
"""Copies of the tails that the discrete transform folds back, each taken off; the rest together."""
DUST = 1e-13
"""Densities below it are rounding of the transform."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StableTable:
    """Log density and distribution function of a stable law of scale 1 on a grid."""

    index: float
    """Tail index."""
    x: FloatArray
    """Grid from -150 to 150."""
    logs: FloatArray
    """Log density there."""
    below: FloatArray
    """Distribution function there."""

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density at any x."""
        inside = np.interp(x, self.x, self.logs)
        beyond = np.maximum(np.abs(x) / self.x[-1], 1.0)
        return np.asarray(inside - (self.index + 1) * np.log(beyond))

    def cdf(self, x: FloatArray) -> FloatArray:
        """Distribution function at any x."""
        inside = np.interp(x, self.x, self.below)
        shrink = np.maximum(np.abs(x) / self.x[-1], 1.0) ** -self.index
        return np.asarray(np.where(x < 0, inside * shrink, 1 - (1 - inside) * shrink))


@lru_cache(maxsize=256)
def stable_table(index: float, skew: float) -> StableTable:
    """The table of one law; 1 < index < 2, -1 < skew < 1, mean 0."""
    lean = skew * math.tan(math.pi * index / 2)
    t = 2 * np.pi * np.fft.fftfreq(POINTS, SPACING)
    power = np.abs(t) ** index
    wave = np.exp(-power * (1 - 1j * np.sign(t) * lean))
    # Real at the folding frequency, so that the transform is.
    density = np.fft.fftshift(np.fft.fft(wave).real) / (POINTS * SPACING)
    x = (np.arange(POINTS) - POINTS // 2) * SPACING
    kept = np.abs(x) <= EDGE
    x, density = x[kept], density[kept]
    length = POINTS * SPACING
    constant = index * math.sin(math.pi * index / 2) * math.gamma(index) / math.pi
    for fold in range(1, FOLDS + 1):
        density -= constant * (1 + skew) * (x + fold * length) ** (-index - 1)
        density -= constant * (1 - skew) * (fold * length - x) ** (-index - 1)
    density -= 2 * constant * ((FOLDS + 0.5) * length) ** -index / (index * length)
    density = np.maximum(density, DUST)
    steps = (density[1:] + density[:-1]) / 2 * SPACING
    tails = density[[0, -1]] * EDGE / index
    below = np.concatenate([[0.0], np.cumsum(steps)]) + tails[0]
    whole = float(below[-1] + tails[1])
    return StableTable(
        index=index, x=read_only(x), logs=read_only(np.log(density / whole)),
        below=read_only(below / whole),
    )  # fmt: skip
