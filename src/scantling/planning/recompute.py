"""Noise and signal limits of changed designs, on errors drawn once for all of them.

The draws are the first of those behind the design's own limits, so that a change is not credited
with luck; bands rest on fewer laws and fewer draws under each than the design's own.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from scantling.core.estimate import Estimate
from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.breakthrough import (
    BLOCK,
    MANY_COLUMNS,
    QUANTILE_FLOOR,
    ScoreBlock,
    ScoreSample,
    pooled_blocks,
    pooled_curve,
    score_block,
)
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, band, make_limit, missing_limit
from scantling.planning.signal import sample_deviation, signal_limit_of
from scantling.simulation.loss_scores import ROBUST
from scantling.simulation.scores import centre, first_above, penalty_level, risk_curves

LAWS = 25
"""Drawn laws behind the band of a changed design."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Recomputed:
    """What noise and signal allow a changed design."""

    limits: dict[str, Limit]
    """noise and signal."""
    risk: Estimate
    """Break-through risk at all of its columns."""
    draws: int
    """Draws of errors behind the point values."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """A case ready for many blocks of draws."""

    case: Case
    """With columns in the precision they are simulated in."""
    squares: FloatArray | None
    """Of the columns, where loadings are self-normalised."""
    floor: float
    """Ratios at or below it are not kept."""

    @classmethod
    def of(cls, case: Case, floor: float, precision: Any) -> Prepared:
        """The case in a precision."""
        X = np.asarray(case.X, dtype=precision)
        squares = X**2 if case.loadings == "self-normalised" else None
        return cls(case=replace(case, X=X), squares=squares, floor=floor)

    @property
    def robust(self) -> bool:
        """Whether the loss bounds the errors' share in the scores."""
        return self.case.loss in ROBUST

    def scores(self, errors: FloatArray) -> ScoreBlock:
        """Scores under centred draws of errors (n, R)."""
        own = errors.astype(self.case.X.dtype, copy=False)
        return score_block(self.case, own, self.floor, self.squares)


def with_fewer_laws(case: Case) -> Case:
    """The case with the first of its drawn laws."""
    return replace(case, law_draws=case.law_draws[:LAWS])


def recompute(
    cases: Sequence[Case], draws: int, mapper: Mapper, *, bands: bool = True
) -> list[Recomputed]:
    """Noise and signal limits of several cases under the same draws of errors.

    Parameters
    ----------
    cases : sequence of Case
        With the same rows, law, drawn laws and seed.
    draws : int
        Of errors under the fitted law.
    mapper : callable
        Applies a function to units of work.
    bands : bool
        Whether drawn laws are simulated too; without them bands are the point values.
    """
    if not cases:
        return []
    first = cases[0]
    parts = blocks(draws, BLOCK)
    level = float(penalty_level(1, first.target.risk))
    exact = [Prepared.of(case, _floor(case), np.float64) for case in cases]

    def fitted_block(block: int) -> list[ScoreBlock]:
        start, stop = parts[block]
        rng = stream(first.seed, "scores, fitted law", 0, block)
        errors = centre(first.open_errors(stop - start, rng))
        return [each.scores(errors) for each in exact]

    by_block = mapper(fitted_block, range(len(parts)))
    # Single precision is enough for what bands are read off, and takes half the time.
    rough = [Prepared.of(case, level, np.float32) for case in cases] if bands else []

    def drawn_law(k: int) -> list[tuple[FloatArray, float]]:
        law = first.law_draws[k]
        rng = stream(first.seed, "scores, drawn laws", k, 0)
        errors = centre(first.draw_errors(law, min(draws, BLOCK), rng))
        return [
            _under_law(each.case, law, pooled_blocks([each.scores(errors)], robust=each.robust))
            for each in rough
        ]

    by_law = mapper(drawn_law, range(min(LAWS, len(first.law_draws)) if bands else 0))
    return [
        _recomputed(
            case,
            pooled_blocks([done[place] for done in by_block], robust=case.loss in ROBUST),
            [done[place] for done in by_law],
            min(draws, BLOCK),
        )
        for place, case in enumerate(cases)
    ]


def _floor(case: Case) -> float:
    floor = float(penalty_level(1, case.target.risk))
    return floor if case.columns >= MANY_COLUMNS else min(floor, QUANTILE_FLOOR)


def _under_law(case: Case, law: ErrorLaw, sample: ScoreSample) -> tuple[FloatArray, float]:
    """Risk curve (P,) and signal limit under one drawn law."""
    return risk_curves(sample.found, case.target.risk)[0], signal_limit_of(case, law, sample)


def _recomputed(
    case: Case, fitted: ScoreSample, drawn: list[tuple[FloatArray, float]], per_law: int
) -> Recomputed:
    risk = case.target.risk
    curve, signal = _under_law(case, case.law, fitted)
    many, signals = curve[None], [signal]
    if drawn:
        curves = np.array([each for each, _ in drawn])
        curve, many = pooled_curve(case, fitted.found, curves, column_grid(case.columns), per_law)
        signals = [each for _, each in drawn]
    last = float(curve[-1])
    low, high = band(many[:, -1].tolist())
    deviation = sample_deviation(case, case.law, fitted)
    effects = make_limit(signal, signals, case.columns, mode="conditional")
    if not np.isfinite(deviation).all():
        effects = missing_limit("the fitted error law has no variance")
    noise = make_limit(
        first_above(curve, risk), [first_above(each, risk) for each in many], case.columns,
        mode="conditional",
    )  # fmt: skip
    return Recomputed(
        limits={"noise": noise, "signal": effects},
        risk=Estimate(value=last, low=min(low, last), high=max(high, last)),
        draws=fitted.found.draws,
    )
