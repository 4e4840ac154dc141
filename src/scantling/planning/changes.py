"""The changes that may apply to a design, each with its price in words."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.design.expand import clipped
from scantling.law.families import ErrorLaw
from scantling.planning.breakthrough import BreakThrough
from scantling.planning.case import Case
from scantling.planning.recipe import Origin, Recipe
from scantling.simulation.loss_scores import ROBUST, huber_thresholds
from scantling.simulation.scores import (
    column_shares,
    exceeding_counts,
    join,
    penalty_level,
)

DROP_SHARES = (0.01, 0.02, 0.05, 0.1, 0.15, 0.2, 0.25, 0.3, 0.35, 0.4, 0.5)
LOCATION_DRAWS = 100_000
"""Draws of innovations that Huber's location is computed from."""
SMALL_SHIFT = 0.01
"""sd of the errors; a smaller distance between two locations is no distance."""
UNCHANGED = 1e-9
"""Share of a column's largest value; what moves by less is not clipped."""


def recipes(origin: Origin) -> tuple[Recipe, ...]:
    """Every single change that may apply; some may turn out to leave the design as it is."""
    return (
        *_penalties(origin.case),
        *_expansions(origin),
        *_fewer_columns(origin),
        *_weights(origin.case),
    )


def _penalties(case: Case) -> Iterator[Recipe]:
    if case.rule == "plug-in":
        yield Recipe(
            names=("self-normalised loadings",),
            prices=("a larger penalty where a large x meets a large error, so less power there",),
            rule="self-normalised",
        )
    if case.loss not in ROBUST:
        yield Recipe(names=("Huber loss",), prices=(_huber_price(case),), loss="huber")


def _huber_price(case: Case) -> str:
    shift = huber_shift(case.law, case.seed)
    where = "within 0.01 sd of the mean for the fitted law"
    if abs(shift) >= SMALL_SHIFT:
        side = "above" if shift > 0 else "below"
        where = f"{abs(shift):.2f} sd {side} the mean, as the fitted law is skewed"
    return (
        f"it fits a clipped location of the errors ({where}), not the mean; large errors count"
        " for less, heavy columns are as heavy as before"
    )


def huber_shift(law: ErrorLaw, seed: int) -> float:
    """Huber's location of the innovations less their mean, in their typical sd.

    0 but for chance where the law is symmetric; of a law without variance the sd is that of
    the draws.
    """
    z = law.innovations(LOCATION_DRAWS, stream(seed, "Huber location"))
    z = z - z.mean()
    tau = float(huber_thresholds(z[:, None])[0])
    place = float(np.median(z))
    for _ in range(30):
        # A Newton step: the clipped mean, over the share that is not clipped.
        gap = z - place
        place += float(np.clip(gap, -tau, tau).mean() / max((np.abs(gap) < tau).mean(), 0.5))
    return place / float(z.std())


def _expansions(origin: Origin) -> Iterator[Recipe]:
    spec, raw = origin.design.expand, origin.table.values
    if spec.transform != "normal-scores":
        yield Recipe(
            names=("normal scores of columns",),
            prices=("effects are read per normal score of a column, not per unit",),
            transform="normal-scores",
        )
    share = clipped_share(raw)
    if spec.transform == "none" and share > 0:
        yield Recipe(
            names=("winsorised columns",),
            prices=(
                f"{_per_cent(share)} of the raw values are clipped (5 robust sd from the median);"
                " effects that live in the tails are lost",
            ),
            transform="clip",
        )
    for powers in range(spec.powers - 1, 0, -1):
        yield Recipe(
            names=("no powers" if powers == 1 else f"powers up to {powers}",),
            prices=("higher powers are not searched",),
            powers=powers,
        )
    if spec.products:
        yield Recipe(
            names=("no products",), prices=("no interactions are searched",), products=False
        )
    factors = origin.diagnosis.structure.factors
    if 1 <= factors < raw.shape[1]:
        counted = "1 factor" if factors == 1 else f"{factors} factors"
        yield Recipe(
            names=(f"{counted} in place of raw columns",),
            prices=(
                "effects are those of factors: single columns can no longer be told apart, and"
                " what factors leave out joins the errors",
            ),
            factors=factors,
        )


def clipped_share(raw: FloatArray) -> float:
    """Share of the raw values (n, k) that winsorising would move."""
    if not raw.size:
        return 0.0
    moved = np.abs(clipped(raw) - raw) > UNCHANGED * np.abs(raw).max(axis=0)
    return float(moved.mean())


def _per_cent(share: float) -> str:
    return "under 0.1 %" if share < 0.001 else f"{100 * share:.1f} %"


def _fewer_columns(origin: Origin) -> Iterator[Recipe]:
    case, broken = origin.case, origin.diagnosis.scores_without_variance
    if broken and 2 * len(broken) <= case.columns:
        which = "column" if len(broken) == 1 else f"{len(broken):,} columns"
        yield Recipe(
            names=(f"drop the {which} whose scores lack a variance",),
            prices=("these columns are not searched",),
            dropped=broken,
        )
    if origin.noise.noise.reached:
        worst = worst_to_drop(case, origin.noise)
        if worst.size:
            which = "worst column" if worst.size == 1 else f"{worst.size:,} worst columns"
            yield Recipe(
                names=(f"drop the {which}",),
                prices=("the columns that break through most are not searched",),
                dropped=tuple(int(j) for j in worst),
            )


def _weights(case: Case) -> Iterator[Recipe]:
    if case.law.autoregression is not None:
        yield Recipe(
            names=("filter rows by the errors' autoregression",),
            prices=(
                "the autoregression is believed; an effect that comes a row later than its column"
                " is distorted",
            ),
            filtered=True,
        )
    elif case.law.volatility is not None:
        yield Recipe(
            names=("weight rows by fitted volatility",),
            prices=("the volatility model is believed; effects are those of weighted rows",),
            weighted=True,
        )


def worst_to_drop(case: Case, noise: BreakThrough) -> np.ndarray:
    """Fewest of the worst columns whose removal brings the risk down to the accepted one.

    Ranked by their break-throughs over all drawn laws; up to half of the columns, at a few
    shares; the largest share examined if none suffices.
    """
    found = join([sample.found for sample in noise.drawn]) if noise.drawn else noise.fitted.found
    risk = case.target.risk
    level = float(penalty_level(case.columns, risk))
    order = np.argsort(-column_shares(found, level), kind="stable")
    count = 0
    for share in DROP_SHARES:
        count = max(1, math.ceil(share * case.columns))
        if count >= case.columns:
            return np.empty(0, dtype=int)
        lower = float(penalty_level(case.columns - count, risk))
        # Only what exceeds the lower level counts.
        left = (found.ratio > lower) & ~np.isin(found.column, order[:count])
        remaining = replace(
            found, column=found.column[left], draw=found.draw[left], ratio=found.ratio[left]
        )
        if (exceeding_counts(remaining, lower) > 0).mean() <= risk:
            break
    return np.asarray(order[:count])
