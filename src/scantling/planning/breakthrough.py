"""Break-through risk over p, and the noise limit, by simulation on the user's own columns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, band, make_limit
from scantling.simulation.scores import (
    Passers,
    centre,
    column_shares,
    first_above,
    join,
    largest_quantile,
    passers,
    penalty_level,
    risk_at,
    risk_curves,
    score_ratios,
)

BLOCK = 100
"""Draws simulated together; fixed, so that results do not depend on workers."""
DRAWS_PER_LAW = 200
"""Fewest draws of errors under each drawn law, unless the design asks for fewer replicates."""
CELLS = 60_000_000
"""Rows times columns times draws under one law up to which more draws are taken than asked:
they cost little and the risk is a small probability."""
MOST_TIMES = 10
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
    """Number of columns."""
    risk: float
    """Break-through risk under the fitted law."""
    low: float
    """5 % point over draws of the law."""
    high: float
    """95 % point over draws of the law."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BreakThrough:
    """The risk curve and what follows from it alone."""

    noise: Limit
    """Largest number of columns whose risk stays accepted."""
    curve: tuple[CurvePoint, ...]
    """Risk over p, increasing p; the last is all columns."""
    penalty_ratio: float | None
    """Quantile of the largest ratio over the Gaussian twin's, at the present p."""
    equivalent_rows: int | None
    """n / penalty ratio squared, never above n."""
    worst_columns: tuple[int, ...]
    """Columns by their share of the break-throughs at the present p, over all drawn laws."""
    worst_shares: tuple[float, ...]
    """Those shares."""
    fitted: ScoreSample
    """Scores under the fitted law."""
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


def score_draws(case: Case) -> tuple[int, int]:
    """Draws of errors under the fitted law and its twin, and under each drawn law."""
    affordable = min(CELLS // (case.rows * case.columns), MOST_TIMES * case.replicates)
    return (
        max(case.replicates, affordable),
        max(min(case.replicates, DRAWS_PER_LAW), min(affordable, 2 * case.replicates)),
    )


def curve_points(curve: FloatArray, many: FloatArray, grid: np.ndarray) -> tuple[CurvePoint, ...]:
    """The risk curve (P,) on a grid of p, its band from curves under drawn laws (B, P)."""
    return tuple(
        CurvePoint(p=int(p), risk=float(curve[p - 1]), low=low, high=high)
        for p, (low, high) in zip(grid, map(band, many[:, grid - 1].T), strict=True)
    )


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
    floor = float(penalty_level(1, risk))
    low_floor = min(floor, QUANTILE_FLOOR)
    draws, draws_per_law = score_draws(case)
    fitted, twin = (
        sample_scores(case, (law,), draws, low_floor, purpose, mapper)[0]
        for law, purpose in (
            (case.law, "scores, fitted law"),
            (case.twin, "scores, twin"),
        )
    )
    drawn: tuple[ScoreSample, ...] = ()
    if bands:
        drawn = sample_scores(
            case, case.law_draws, draws_per_law, floor, "scores, drawn laws", mapper
        )
    curve = risk_curves(fitted.found, risk)[0]
    many = [risk_curves(sample.found, risk)[0] for sample in drawn] or [curve]
    limits = [first_above(each, risk) for each in many]
    ratio = _penalty_ratio(case, fitted, twin)
    seen = join([sample.found for sample in drawn]) if drawn else fitted.found
    shares = column_shares(seen, float(penalty_level(case.columns, risk)))
    order = np.argsort(-shares, kind="stable")[:50]
    return BreakThrough(
        noise=make_limit(first_above(curve, risk), limits, case.columns, mode="conditional"),
        curve=curve_points(curve, np.array(many), column_grid(case.columns)),
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
