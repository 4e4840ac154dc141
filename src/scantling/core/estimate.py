"""A number with its interval."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """A point estimate and its interval; the interval's level is named where it is used."""

    value: float
    """Point estimate."""
    low: float
    """Lower end of the interval."""
    high: float
    """Upper end of the interval."""
