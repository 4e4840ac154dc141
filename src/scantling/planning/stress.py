"""Selection under fresh errors: stability and geometry limits by simulated refits."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case
from scantling.planning.limit import Limit
from scantling.planning.refits import (
    StressRun,
    coefficients,
    mean_of,
    scaled_errors,
    stability_of,
    support_set,
)
from scantling.planning.stress_search import (
    CRITERIA,
    GRID_POINTS,
    SUPPORTS,
    CaseOf,
    LimitSearch,
    carry_out,
    grid_of,
    limit_of,
    limit_on_grid,
    margins,
    run_law,
)
from scantling.simulation.selection import summarise_selection

REFITS_PER_LAW = 20
"""Refits under each drawn law, from which the laws' effect on the criteria is estimated."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Stress:
    """All runs, and the limits read off them."""

    runs: tuple[StressRun, ...]
    """Fitted law first, then its twin, each by increasing columns."""
    stability: Limit
    """Largest number of columns that meets the criteria."""
    geometry: Limit
    """The same under the Gaussian twin."""
    failing: tuple[str, ...]
    """Criteria not met at the columns asked for, under the fitted law."""


def stress(
    case: Case, mapper: Mapper, *, twins: bool = True, points: int = GRID_POINTS,
    case_of: CaseOf | None = None,
) -> Stress:  # fmt: skip
    """Stability limit under the fitted law, geometry limit under its Gaussian twin.

    Parameters
    ----------
    case : Case
        Its law has a variance.
    mapper : callable
    twins : bool
        Whether the twin (and, under volatility, normal innovations on the fitted path) are run;
        without them the geometry limit is the stability limit's own.
    points : int
        Numbers of columns that may be examined.
    case_of : callable, optional
        Generative mode: the case, with drawn columns, of each support set.
    """
    grid = grid_of(case.columns, case.target.relevant, points)
    laws = laws_of(case) if twins else laws_of(case)[:1]
    searches = [
        LimitSearch(case, law, name, grid[-1:] if name == PATH else grid, case_of)
        for name, law in laws
    ]
    carry_out(searches, mapper)
    fitted = searches[0]
    if case.law.spread is not None:
        point = fitted.limit()
        near = grid[-1] if math.isinf(point) else min(grid, key=lambda p: abs(p - point))
        fitted.effects = law_effects(case, near, mapper)
        carry_out(searches[:1], mapper)  # what the wider band may take
    stability = fitted.found()
    missed = margins(case, fitted.runs[-1]) < 0
    return Stress(
        runs=tuple(run for search in searches for run in search.runs),
        stability=stability,
        geometry=searches[1].found() if twins else stability,
        failing=tuple(name for name, miss in zip(CRITERIA, missed, strict=True) if miss),
    )


PATH = "normal-volatility"


def laws_of(case: Case) -> list[tuple[str, ErrorLaw]]:
    """Fitted law, its twin and, under volatility or persistent levels, normal innovations there."""
    laws = [("fitted", case.law), ("twin", case.twin)]
    if case.law.ordered:
        laws.append((PATH, case.law.normal_innovations()))
    return laws


def law_effects(case: Case, p: int, mapper: Mapper) -> FloatArray:
    """Effect of each drawn law on the margins at p columns, shape (laws, 3).

    Each drawn law has a few refits; their means vary by law and by chance. The part due to
    chance is taken out by shrinking towards the mean, by the ratio of variance components
    (the usual random-effects predictor): the fitted law refitted twice shows chance alone.
    """
    groups = np.arange(len(case.law_draws)) % SUPPORTS

    def one(unit: tuple[int, bool]) -> list[list[float]]:
        group, drawn = unit
        if drawn:
            name, which = "refits, drawn laws", [int(k) for k in np.flatnonzero(groups == group)]
            laws = [(case.law_draws[k], stream(case.seed, name, k)) for k in which]
        else:
            name = "refits, fitted law again"
            laws = [(case.law, stream(case.seed, name, k)) for k in (group, group + SUPPORTS)]
        return _criteria(case, group, p, laws)

    found = mapper(one, [(group, drawn) for drawn in (True, False) for group in range(SUPPORTS)])
    values = np.empty((len(groups), len(CRITERIA)))
    for group in range(SUPPORTS):
        values[groups == group] = found[group]
        values[groups == group] -= values[groups == group].mean(axis=0)
    values[:, 2] *= -1  # as margins: a larger false share is worse
    pairs = np.array(found[SUPPORTS:])
    within = ((pairs[:, 0] - pairs[:, 1]) ** 2 / 2).mean(axis=0)
    total = values.var(axis=0, ddof=SUPPORTS)
    return np.asarray(values * np.clip(1 - within / np.maximum(total, 1e-12), 0, 1))


def _criteria(
    case: Case, number: int, p: int, laws: Sequence[tuple[ErrorLaw, np.random.Generator]]
) -> list[list[float]]:
    """Stability, power and false share of a few refits under each law.

    Laws are refitted together, as what is done once for the columns costs most.
    """
    chosen = support_set(case, number)
    X, mean = mean_of(case, chosen, p)
    errors = np.concatenate(
        [scaled_errors(case, law, REFITS_PER_LAW, rng) for law, rng in laws], axis=1
    )
    selected = (coefficients(case, X, mean[:, None] + errors, errors) != 0).T
    truth = np.arange(p) < min(chosen.signs.size, p)
    out = []
    for start, stop in blocks(len(selected), REFITS_PER_LAW):
        summary = summarise_selection(selected[start:stop], truth)
        out.append([stability_of(summary).value, summary.power.value, summary.false_share.value])
    return out


__all__ = [
    "CRITERIA", "GRID_POINTS", "PATH", "SUPPORTS", "CaseOf", "Stress", "StressRun", "grid_of",
    "law_effects", "laws_of", "limit_of", "limit_on_grid", "margins", "run_law", "stress",
    "support_set",
]  # fmt: skip
