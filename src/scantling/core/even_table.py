"""A function looked up in a table with even steps: no search, so a few nanoseconds a value."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Self

import numpy as np

from scantling.core.record import FloatArray, read_only


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EvenTable:
    """Values at low, low + step, ...; straight lines between, the end values beyond."""

    low: float
    """Argument of the first value."""
    step: float
    """Distance from one argument to the next."""
    values: FloatArray
    """Shape (m,), m at least 2."""
    rises: FloatArray
    """Differences of the values, shape (m - 1,)."""

    @classmethod
    def of(cls, function: Callable[[FloatArray], FloatArray], reach: float, cells: int) -> Self:
        """The function tabulated from -reach to reach in so many steps."""
        values = np.asarray(function(np.linspace(-reach, reach, cells + 1)), dtype=np.float64)
        return cls(
            low=-reach,
            step=2 * reach / cells,
            values=read_only(values),
            rises=read_only(np.diff(values)),
        )

    def __call__(self, x: FloatArray) -> FloatArray:
        """Return the function at x, of any shape."""
        spot = np.array(x, dtype=np.float64)
        spot -= self.low
        spot /= self.step
        np.clip(spot, 0.0, float(self.rises.size), out=spot)
        cell = np.minimum(spot.astype(np.intp), self.rises.size - 1)
        spot -= cell
        spot *= self.rises.take(cell)
        spot += self.values.take(cell)
        return spot
