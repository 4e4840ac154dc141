"""Break-through risk over p, and the noise limit, by simulation on the user's own columns."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, band, last_below, make_limit
from scantling.simulation.scores import (
    Passers,
    centre,
    column_shares,
    join,
    largest_quantile,
    passers,
    penalty_level,
    risk_at,
    score_ratios,
)

BLOCK = 100
"""Draws simulated together; fixed, so that results do not depend on workers."""
DRAWS_PER_LAW = 200
"""Most draws of errors under each drawn law."""
QUANTILE_FLOOR = 1.4
"""Ratios kept where quantiles are wanted; single columns' 95 % points lie near 1.96."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreSample:
    """Simulated scores under one law."""

    found: Passers
    """Ratios above the floor."""
    loadings: FloatArray
    """Typical (median over draws) loading: shape (1,) equal, (P,) self-normalised."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePoint:
    """Break-through risk at one number of columns."""

    p: int
    risk: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class BreakThrough:
    """The risk curve and what follows from it alone."""

    noise: Limit
    curve: tuple[CurvePoint, ...]
    penalty_ratio: float | None
    """Quantile of the largest ratio over the Gaussian twin's, at the present p."""
    equivalent_rows: int | None
    """n / penalty ratio squared, never above n."""
    worst_columns: tuple[int, ...]
    """Columns by their share of the break-throughs at the present p, over all drawn laws."""
    worst_shares: tuple[float, ...]
    """Those shares."""
    fitted: ScoreSample
    drawn: tuple[ScoreSample, ...]
    """One for each drawn law."""


def sample_scores(
    case: Case,
    laws: tuple[ErrorLaw, ...],
    draws: int,
    floor: float,
    purpose: str,
    mapper: Mapper,
) -> tuple[ScoreSample, ...]:
    """Simulate the scores of all columns under each law, on the present rows."""
    squares = case.X**2 if case.rule == "self-normalised" else None
    units = [(k, b, stop - start) for k in range(len(laws))
             for b, (start, stop) in enumerate(blocks(draws, BLOCK))]  # fmt: skip

    def one(unit: tuple[int, int, int]) -> tuple[Passers, FloatArray]:
        k, block, size = unit
        rng = stream(case.seed, purpose, k, block)
        errors = centre(laws[k].draw_given_path(case.rows, size, rng))
        ratios, loadings = score_ratios(case.X, errors, case.rule, squares)
        return passers(ratios, floor), loadings

    done = mapper(one, units)
    out = []
    per_law = len(blocks(draws, BLOCK))
    for k in range(len(laws)):
        mine = done[k * per_law : (k + 1) * per_law]
        loadings = np.concatenate([part[1] for part in mine], axis=1)
        out.append(
            ScoreSample(
                found=join([part[0] for part in mine]),
                loadings=read_only(np.median(loadings, axis=1)),
            )
        )
    return tuple(out)


def noise_limit_of(found: Passers, grid: np.ndarray, risk: float) -> tuple[float, FloatArray]:
    """Largest p up to which the risk stays accepted (inf if throughout), and the risk curve."""
    curve = np.array([risk_at(found, int(p), float(penalty_level(p, risk)))[0] for p in grid])
    over = np.flatnonzero(curve > risk)
    if not over.size:
        return math.inf, curve
    first = int(over[0])
    if first == 0:
        return float(grid[0]) - 1, curve
    limit = last_below(
        lambda p: risk_at(found, p, float(penalty_level(p, risk)))[0] <= risk,
        int(grid[first - 1]),
        int(grid[first]),
    )
    return float(limit), curve


def break_through(case: Case, mapper: Mapper, *, bands: bool = True) -> BreakThrough:
    """Risk curve, noise limit, penalty ratio and the columns that break through most.

    Parameters
    ----------
    case : Case
    mapper : callable
        Applies a function to units of work.
    bands : bool
        Whether the drawn laws are simulated too; without them bands are the point values.
    """
    risk = case.target.risk
    grid = column_grid(case.columns)
    floor = float(penalty_level(1, risk))
    low_floor = min(floor, QUANTILE_FLOOR)
    fitted, twin = (
        sample_scores(case, (law,), case.replicates, low_floor, purpose, mapper)[0]
        for law, purpose in (
            (case.law, "scores, fitted law"),
            (case.twin, "scores, twin"),
        )
    )
    drawn: tuple[ScoreSample, ...] = ()
    if bands:
        drawn = sample_scores(
            case, case.law_draws, min(case.replicates, DRAWS_PER_LAW), floor,
            "scores, drawn laws", mapper,
        )  # fmt: skip
    point, curve = noise_limit_of(fitted.found, grid, risk)
    many = [noise_limit_of(sample.found, grid, risk) for sample in drawn] or [(point, curve)]
    curves = np.array([c for _, c in many])
    ends = np.array([band(curves[:, k].tolist()) for k in range(grid.size)]).T
    ratio = _penalty_ratio(case, fitted, twin)
    seen = join([sample.found for sample in drawn]) if drawn else fitted.found
    shares = column_shares(seen, float(penalty_level(case.columns, risk)))
    order = np.argsort(-shares, kind="stable")[:50]
    return BreakThrough(
        noise=make_limit(point, [d for d, _ in many], case.columns, mode="conditional"),
        curve=tuple(
            CurvePoint(p=int(p), risk=float(r), low=float(lo), high=float(hi))
            for p, r, lo, hi in zip(grid, curve, *ends, strict=True)
        ),
        penalty_ratio=ratio,
        equivalent_rows=None if ratio is None else int(case.rows / max(1.0, ratio) ** 2),
        worst_columns=tuple(int(j) for j in order if shares[j] > 0),
        worst_shares=tuple(float(shares[j]) for j in order if shares[j] > 0),
        fitted=fitted,
        drawn=drawn,
    )


def needed_penalty(found: Passers, p: int, risk: float) -> float:
    """lambda*(p): the plug-in level, or the simulated quantile where noise passes it."""
    level = float(penalty_level(p, risk))
    if risk_at(found, p, level)[0] <= risk:
        return level
    quantile = largest_quantile(found, p, 1 - risk)
    return level if quantile is None else max(level, quantile)


def _penalty_ratio(case: Case, fitted: ScoreSample, twin: ScoreSample) -> float | None:
    p, risk = case.columns, case.target.risk
    if case.rule == "self-normalised":
        needed = [
            needed_penalty(sample.found, p, risk) * float(np.median(sample.loadings))
            for sample in (fitted, twin)
        ]
        return needed[0] / needed[1] if needed[1] > 0 else None
    quantiles = [largest_quantile(sample.found, p, 1 - risk) for sample in (fitted, twin)]
    if quantiles[0] is None or quantiles[1] is None:
        return None
    return quantiles[0] / quantiles[1]
