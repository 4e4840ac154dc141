"""Break-through risk over p, and the noise limit, by simulation on the user's own columns."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import MEMORY_BOUND, Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import LAW_DRAWS, Case, column_grid
from scantling.planning.limit import Limit, band, make_limit
from scantling.simulation.loss_scores import ROBUST, loss_scores, score_slope
from scantling.simulation.scores import (
    Passers,
    Ranked,
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
FEWEST_DRAWS = 50
LEAST_RISK = 1e-6
"""Smaller risks are not told apart."""
WIDENING = 2.25
"""Bands are so many times as wide, in logs, as the drawn laws make them: those are fitted to
residuals, not to errors, and over known designs had to be so wide to cover the true risk
(tests/validation/risk_calibration.py)."""
PASSING_SHARE = 0.05
"""Share of ratios above L(1), rounded up: 0.03 under normal errors."""
MANY_COLUMNS = 50
"""From here on the largest ratio's quantiles lie above L(1), and less has to be kept."""
QUANTILE_FLOOR = 1.4
"""Ratios kept where quantiles are wanted; single columns' 95 % points lie near 1.96."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreSample:
    """Simulated scores under one law."""

    found: Passers
    """Ratios above the floor."""
    loadings: FloatArray
    """Typical (median over draws) loading: shape (1,) equal, (P,) self-normalised."""
    typical_sd: float | None = None
    """Median over draws of the errors' root mean square; None: take the law's sd."""
    slope: float = 1.0
    """How much of a small effect reaches the loss's mean score; 1 for least squares."""
    row_squares: FloatArray | None = None
    """Mean square over draws of a robust loss's score at each row, shape (n,); None: squared."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoreBlock:
    """One block of draws under one law."""

    found: Passers
    """Ratios above the floor."""
    loadings: FloatArray
    """Loading of each draw: shape (1, R) equal, (P, R) self-normalised."""
    sizes: FloatArray
    """Root mean square of each draw of errors, shape (R,)."""
    slope: float
    """Of the loss's mean score in a small effect."""
    row_squares: FloatArray
    """Mean square of a robust loss's score at each row, shape (n,); empty for least squares."""


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
    laws: tuple[ErrorLaw | None, ...],
    draws: int,
    floor: float,
    purpose: str,
    mapper: Mapper,
) -> tuple[ScoreSample, ...]:
    """Simulate the scores of all columns under each law, on the present rows.

    None stands for all laws the sample leaves open together.
    """
    squares = case.X**2 if case.loadings == "self-normalised" else None
    units = [(k, b, stop - start) for k in range(len(laws))
             for b, (start, stop) in enumerate(blocks(draws, BLOCK))]  # fmt: skip

    def one(unit: tuple[int, int, int]) -> ScoreBlock:
        k, block, size = unit
        rng = stream(case.seed, purpose, k, block)
        law = laws[k]
        drawn = case.open_errors(size, rng) if law is None else case.draw_errors(law, size, rng)
        return score_block(case, centre(drawn), floor, squares)

    done = mapper(one, units)
    per_law = len(blocks(draws, BLOCK))
    return tuple(
        pooled_blocks(done[k * per_law : (k + 1) * per_law], robust=case.loss in ROBUST)
        for k in range(len(laws))
    )


def score_block(
    case: Case, errors: FloatArray, floor: float, squares: FloatArray | None
) -> ScoreBlock:
    """The scores of all columns under centred draws of errors (n, R).

    `squares` are those of the columns, formed once; only self-normalised loadings need them.
    """
    robust = case.loss in ROBUST
    scores = loss_scores(errors, case.loss)
    ratios, loadings = score_ratios(case.X, scores, case.loadings, squares)
    return ScoreBlock(
        found=passers(ratios, floor),
        loadings=loadings,
        sizes=np.sqrt((errors**2).mean(axis=0)),
        slope=score_slope(errors, case.loss) if robust else 1.0,
        row_squares=(scores**2).mean(axis=1) if robust else np.empty(0),
    )


def pooled_blocks(parts: list[ScoreBlock], *, robust: bool) -> ScoreSample:
    """All blocks of draws under one law."""
    sizes = [part.loadings.shape[1] for part in parts]
    loadings = np.concatenate([part.loadings for part in parts], axis=1)
    squares = None
    if robust:
        squares = read_only(np.average([part.row_squares for part in parts], axis=0, weights=sizes))
    return ScoreSample(
        found=join([part.found for part in parts]),
        loadings=read_only(np.median(loadings, axis=1)),
        typical_sd=float(np.median(np.concatenate([part.sizes for part in parts]))),
        slope=float(np.average([part.slope for part in parts], weights=sizes)),
        row_squares=squares,
    )


def score_draws(case: Case) -> tuple[int, int]:
    """Draws of errors under the fitted law and its twin, and under each drawn law.

    Of very many columns fewer draws are taken under each drawn law, so that the ratios kept
    stay within the memory bound.
    """
    affordable = min(CELLS // (case.rows * case.columns), MOST_TIMES * case.replicates)
    per_law = max(min(case.replicates, DRAWS_PER_LAW), min(affordable, 2 * case.replicates))
    kept = MEMORY_BOUND // 2 // int(PASSING_SHARE * 16 * case.columns * LAW_DRAWS + 1)
    return max(case.replicates, affordable), max(FEWEST_DRAWS, min(per_law, kept))


def steadied(curves: FloatArray, chance: FloatArray) -> FloatArray:
    """Risk curves (B, P) under drawn laws, freed of most of their simulation error.

    Each is drawn towards their mean by the share of their variance that chance explains: the
    usual random-effects predictor. `chance` (P,) is the simulation variance of one curve.
    """
    mean = curves.mean(axis=0)
    share = np.clip(1 - chance / np.maximum(curves.var(axis=0), 1e-300), 0, 1)
    return np.asarray(mean + share * (curves - mean))


def simulation_variance(found: Passers, risk: float, grid: np.ndarray) -> FloatArray:
    """Variance that one draw brings to the risk at every p, shape (P,).

    Computed on the grid and interpolated in log p; at small p it is far below risk (1 - risk),
    because a draw's risk is averaged over which columns are taken.
    """
    errors = [risk_at(found, int(p), float(penalty_level(int(p), risk)))[1] for p in grid]
    p = np.arange(1, found.columns + 1)
    return np.asarray(found.draws * np.interp(np.log(p), np.log(grid), errors) ** 2)


def curve_points(
    curve: FloatArray, many: FloatArray, grid: np.ndarray, at: np.ndarray | None = None
) -> tuple[CurvePoint, ...]:
    """The risk curve (P,) on a grid of p, its band from curves under drawn laws (B, P).

    A band contains its point. `at` says where the grid lies in the curves; default: at p - 1.
    """
    place = grid - 1 if at is None else at
    return tuple(
        CurvePoint(p=int(p), risk=risk, low=min(low, risk), high=max(high, risk))
        for p, risk, (low, high) in zip(
            grid, map(float, curve[place]), map(band, many[:, place].T), strict=True
        )
    )


def pooled_curve(
    case: Case, found: Passers, curves: FloatArray, grid: np.ndarray, draws_per_law: int
) -> tuple[FloatArray, FloatArray]:
    """The risk curve (P,) over all draws there are, and curves (B, P) as bands are read off them.

    The draws of `found` are shared among the laws the sample leaves open, and so are those behind
    `curves` under each drawn law: together they are one sample of the same risk, and a larger one.
    A law stated exactly leaves none open, and its own draws are the point.
    The curves are steadied, and given the simulation error of the point: it belongs to the band.
    """
    own = risk_curves(found, case.target.risk)[0]
    curve, total = own, found.draws
    if case.law.spread is not None:
        total = found.draws + len(curves) * draws_per_law
        curve = (found.draws * own + draws_per_law * curves.sum(axis=0)) / total
    spread = simulation_variance(found, case.target.risk, grid)
    many = steadied(curves, spread / draws_per_law)
    chance = stream(case.seed, "risk error").standard_normal((len(curves), 1))
    many = np.clip(many + chance * np.sqrt(spread / total), LEAST_RISK, 1.0)
    if case.law.spread is None:
        return curve, many
    # In logs, so that a risk far above what is accepted does not seem to reach down to it.
    middle = np.maximum(curve, LEAST_RISK)
    return curve, np.minimum(middle * (many / middle) ** WIDENING, 1.0)


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
    low_floor = floor if case.columns >= MANY_COLUMNS else min(floor, QUANTILE_FLOOR)
    draws, draws_per_law = score_draws(case)
    fitted, twin = (
        sample_scores(case, (law,), draws, low_floor, purpose, mapper)[0]
        for law, purpose in (
            (None, "scores, fitted law"),
            (case.twin, "scores, twin"),
        )
    )
    drawn: tuple[ScoreSample, ...] = ()
    if bands:
        drawn = sample_scores(
            case, case.law_draws, draws_per_law, floor, "scores, drawn laws", mapper
        )
    grid = column_grid(case.columns)
    curve = risk_curves(fitted.found, risk)[0]
    many = curve[None]
    if drawn:
        curves = np.array([risk_curves(sample.found, risk)[0] for sample in drawn])
        curve, many = pooled_curve(case, fitted.found, curves, grid, draws_per_law)
    limits = [first_above(each, risk) for each in many]
    ratio = _penalty_ratio(case, fitted, twin)
    level = float(penalty_level(case.columns, risk))
    shares = np.mean([column_shares(s.found, level) for s in drawn or (fitted,)], axis=0)
    order = np.argsort(-shares, kind="stable")
    return BreakThrough(
        noise=make_limit(first_above(curve, risk), limits, case.columns, mode="conditional"),
        curve=curve_points(curve, many, grid),
        penalty_ratio=ratio,
        equivalent_rows=None if ratio is None else int(case.rows / max(1.0, ratio) ** 2),
        worst_columns=tuple(int(j) for j in order if shares[j] > 0),
        worst_shares=tuple(float(shares[j]) for j in order if shares[j] > 0),
        fitted=fitted,
        drawn=drawn,
    )


def needed_penalty(found: Passers | Ranked, p: int, risk: float) -> float:
    """lambda*(p): the plug-in level, or the simulated quantile where noise passes it."""
    level = float(penalty_level(p, risk))
    quantile = largest_quantile(found, p, 1 - risk)
    return level if quantile is None else max(level, quantile)


def _penalty_ratio(case: Case, fitted: ScoreSample, twin: ScoreSample) -> float | None:
    p, risk = case.columns, case.target.risk
    if case.loadings == "self-normalised":
        # Loadings over the typical error, so that a law with rare huge errors is not taken for
        # a quiet one.
        needed = [
            needed_penalty(s.found, p, risk) * float(np.median(s.loadings)) / _score_size(s)
            for s in (fitted, twin)
        ]
        return needed[0] / needed[1] if needed[1] > 0 else None
    quantiles = [largest_quantile(sample.found, p, 1 - risk) for sample in (fitted, twin)]
    if quantiles[0] is None or quantiles[1] is None:
        return None
    return quantiles[0] / quantiles[1]


def _score_size(sample: ScoreSample) -> float:
    """Typical root mean square of the loss's score."""
    if sample.row_squares is not None:
        return math.sqrt(float(sample.row_squares.mean()))
    return sample.typical_sd or 1.0
