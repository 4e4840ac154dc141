"""Signal limit: how many columns leave the smallest effect detectable."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

from scantling.core.record import FloatArray
from scantling.law.families import ErrorLaw
from scantling.planning.breakthrough import ScoreSample, needed_penalty
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, last_below, make_limit, missing_limit
from scantling.simulation.scores import Ranked, ranked


@dataclass(frozen=True, slots=True, kw_only=True)
class Signal:
    """Which effects the design can detect."""

    limit: Limit
    """Largest number of columns at which the smallest effect is detectable."""
    detectable: float | None
    """Smallest detectable effect at the present p, median column, in sd of the response."""
    detectable_worst: float | None
    """The same for the worst tenth of columns."""


def score_deviation(X: FloatArray, law: ErrorLaw, typical_sd: float | None = None) -> FloatArray:
    """sd of S_j under the law: sd(e) sqrt(mean_i x_ij^2 sigma_i^2 / mean_i sigma_i^2), shape (P,).

    Where the level persists, x_ij gives way to what multiplies the shock of row i in S_j, and
    sd(e) to the sd of the shocks.

    With `typical_sd`, the errors' typical root mean square in samples of this size takes the
    place of sd(e): near two moments the latter is ruled by errors that hardly any sample has.
    """
    sd = law.sd if typical_sd is None or not math.isfinite(law.sd) else typical_sd
    if law.autoregression is not None:
        X = law.autoregression.seen_by_shocks(X)
        sd /= math.sqrt(law.autoregression.gain)
    elif law.volatility is None:
        return np.full(X.shape[1], sd)
    square = np.ones(len(X)) if law.volatility is None else law.volatility.path**2
    return np.asarray(sd * np.sqrt(np.einsum("ij,ij,i->j", X, X, square / square.mean()) / len(X)))


def sample_deviation(case: Case, law: ErrorLaw, sample: ScoreSample) -> FloatArray:
    """sd of S_j for the loss's score under the law, shape (P,)."""
    if sample.row_squares is None:
        return score_deviation(case.X, law, sample.typical_sd)
    squares = np.einsum("ij,ij,i->j", case.X, case.X, sample.row_squares) / case.rows
    if law.autoregression is not None:
        # A clipped score persists about as its errors do.
        apart = law.without_autoregression()
        squares *= (score_deviation(case.X, law) / score_deviation(case.X, apart)) ** 2
        squares /= law.autoregression.gain
    return np.asarray(np.sqrt(squares))


def detectable_effects(
    case: Case, sample: ScoreSample, deviation: FloatArray, p: int, table: Ranked | None = None
) -> FloatArray:
    """b_j(p) = (lambda*(p) v_j + Phi^-1(power) tau_j) / (sqrt(n) sd(y) slope), shape (P,).

    `table` is the sample's passers, ranked once where many p are asked for.
    """
    needed = needed_penalty(table or sample.found, p, case.target.risk)
    power = float(ndtri(case.target.power))
    return np.asarray(
        (needed * sample.loadings + power * deviation)
        / (math.sqrt(case.rows) * case.response_sd * sample.slope)
    )


def signal_limit_of(case: Case, law: ErrorLaw, sample: ScoreSample) -> float:
    """Largest p whose median detectable effect is small enough; inf if all are, 0 if none."""
    deviation = sample_deviation(case, law, sample)
    if not np.isfinite(deviation).all():
        return 0.0
    table = ranked(sample.found)

    def detects(p: int) -> bool:
        effects = detectable_effects(case, sample, deviation, p, table)
        return float(np.median(effects)) <= case.target.smallest_effect

    if detects(case.columns):
        return math.inf
    if not detects(1):
        return 0.0
    # The needed penalty grows with p, so the grid narrows the search before bisection.
    grid = column_grid(case.columns, points=9)
    good = max(int(p) for p in grid if detects(int(p)))
    bad = min(int(p) for p in grid if p > good)
    return float(last_below(detects, good, bad))


def signal(case: Case, fitted: ScoreSample, drawn: tuple[ScoreSample, ...]) -> Signal:
    """Signal limit with its band, and detectable effects at the present p."""
    deviation = sample_deviation(case, case.law, fitted)
    if not np.isfinite(deviation).all():
        reason = "the fitted error law has no variance"
        return Signal(limit=missing_limit(reason), detectable=None, detectable_worst=None)
    point = signal_limit_of(case, case.law, fitted)
    draws = [
        signal_limit_of(case, law, sample)
        for law, sample in zip(case.law_draws, drawn, strict=False)
    ] or [point]
    effects = detectable_effects(case, fitted, deviation, case.columns)
    return Signal(
        limit=make_limit(point, draws, case.columns, mode="conditional"),
        detectable=float(np.median(effects)),
        detectable_worst=float(np.quantile(effects, 0.9)),
    )
