"""What a stated law implies: spread, moments, tails, index under volatility."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scantling.law.catalogue import CATALOGUE
from scantling.law.families import ErrorLaw
from scantling.law.notation import WRITTEN, parse_law

ORDERS = (1, 2, 3, 4)
TAILS = (0.001, 0.01, 0.99, 0.999)
"""Probabilities at which quantiles are shown."""


@dataclass(frozen=True, slots=True, kw_only=True)
class FamilyFacts:
    """A family, for the list."""

    family: str
    """Its name."""
    written: str
    """An example of it on one line; empty where it can only be fitted."""
    meaning: str
    """What it looks like and which moments exist."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LawFacts:
    """One stated law."""

    law: ErrorLaw
    """As read."""
    written: str
    """As it was written."""
    sd: float
    """Of the errors; inf where there is no variance."""
    tail_index: float
    """Of the errors, volatility included; inf where all moments exist."""
    innovation_index: float
    """Of the innovations alone."""
    exists: tuple[bool, ...]
    """Whether the moments of orders 1 to 4 exist, of the errors."""
    excess_kurtosis: float
    """Of the innovations; inf where the fourth moment is missing."""
    quantiles: tuple[float, ...]
    """Of the innovations at `TAILS`, in units of their sd, or of their scale."""
    in_scale: bool
    """Whether quantiles are in units of the scale, there being no sd."""


def families() -> tuple[FamilyFacts, ...]:
    """Every family there is."""
    return tuple(
        FamilyFacts(family=name, written=WRITTEN.get(name, ""), meaning=kind.meaning)
        for name, kind in CATALOGUE.items()
    )


def law_facts(text: str) -> LawFacts:
    """The facts of a law written on one line.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    law = parse_law(text)
    z = law.innovation
    index = law.tail_index
    fourth = z.moment(4.0)
    # A fourth moment missing beside a missing variance is no ratio.
    kurtosis = fourth / z.variance**2 - 3 if math.isfinite(fourth) else math.inf
    return LawFacts(
        law=law,
        written=text.strip(),
        sd=law.sd,
        tail_index=index,
        innovation_index=z.tail_index,
        exists=tuple(order < index * (1 - 1e-9) for order in ORDERS),
        excess_kurtosis=round(kurtosis, 9) + 0.0,
        quantiles=tuple(z.quantile(p) / z.unit for p in TAILS),
        in_scale=not math.isfinite(z.variance),
    )
