"""A plan: so many rows and columns that are drawn, not given, and what noise and effects allow.

Columns come from a stated law, or from one fitted to the data when other numbers of rows are
asked about. All of it is the generative mode.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtri

from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, stream
from scantling.design.spec import TargetSpec
from scantling.law.families import ErrorLaw
from scantling.planning.breakthrough import CurvePoint, ScoreSample, curve_points, needed_penalty
from scantling.planning.case import LAW_DRAWS, Case, column_grid, loadings_of
from scantling.planning.generative import (
    MODE,
    TABLES,
    ColumnSource,
    Tables,
    generative_scores,
    table_of,
    tables_for,
    tables_of,
    twin_of,
)
from scantling.planning.limit import Limit, last_below, make_limit
from scantling.simulation.loss_scores import ROBUST
from scantling.simulation.scores import (
    Passers,
    Ranked,
    first_above,
    penalty_level,
    ranked,
    risk_at,
    risk_curves,
    risks_on_grid,
)

EXACT_COLUMNS = 5_000
"""Up to so many columns the risk is computed at every p; beyond, on a grid, refined where it
crosses the accepted risk."""
GRID_POINTS = 240
FLOOR = 1.4
"""Ratios kept, or those above L(1) where that is lower."""
PASSER_CELLS = 60_000_000
"""Columns times draws from which on only ratios above L(1) are kept."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """Rows and columns on paper."""

    rows: int
    """n."""
    columns: int
    """p, the columns asked for."""
    source: ColumnSource
    """What draws them."""
    law: ErrorLaw
    """Of the errors."""
    target: TargetSpec
    """What has to be achieved."""
    rule: str
    """Penalty rule of the refits."""
    loss: str
    """squared | huber | absolute | square-root."""
    response_sd: float
    """sd of the response."""
    residual_sd: float
    """sd of the errors; refits are scaled to it."""
    replicates: int
    """Draws of errors in each simulation."""
    seed: int
    """Of every random stream."""
    adaptive: bool = False
    """Whether a second, reweighted lasso follows in the refits."""
    time_ordered: bool = False
    """Whether rows follow one another in time."""
    support: str = "random"
    """Which columns the refits take as relevant, as in a case."""
    relevant_columns: tuple[int, ...] = ()
    """The pilot's or the named ones among columns drawn from their fitted law."""

    def at(self, rows: int) -> Plan:
        """The same with another number of rows."""
        return replace(self, rows=rows)

    @property
    def floor(self) -> float:
        """Ratios at or below it are not kept."""
        level = float(penalty_level(1, self.target.risk))
        return level if self.columns * self.replicates > PASSER_CELLS else min(FLOOR, level)

    def case(self, columns: int, table: int = 0) -> Case:
        """A drawn table of the first columns as a case for refits."""
        return Case(
            X=table_of(
                self.source, rows=self.rows, columns=columns, seed=self.seed, table=table
            ),
            law=self.law, law_draws=(self.law,) * LAW_DRAWS, response_sd=self.response_sd,
            residual_sd=self.residual_sd, target=self.target, rule=self.rule, loss=self.loss,
            replicates=self.replicates, seed=self.seed, mode=MODE,
            adaptive=self.adaptive, time_ordered=self.time_ordered, support=self.support,
            relevant_columns=tuple(j for j in self.relevant_columns if j < columns),
        )  # fmt: skip


def plan_scores(
    plan: Plan, mapper: Mapper, *, draws: int, twin: bool = True, tables: Tables = TABLES
) -> tuple[ScoreSample, ...]:
    """Scores under the plan's law and, if asked for, its Gaussian twin."""
    laws = (plan.law, twin_of(plan.law)) if twin else (plan.law,)
    return generative_scores(
        plan.source, laws, rows=plan.rows, columns=plan.columns, draws=draws,
        rule=loadings_of(plan.rule), loss=plan.loss, floor=plan.floor, seed=plan.seed,
        mapper=mapper, tables=tables_for(plan.source, plan.columns, tables),
    )  # fmt: skip


def plan_noise(
    plan: Plan, found: Passers, *, tables: Tables = TABLES
) -> tuple[Limit, tuple[CurvePoint, ...]]:
    """Noise limit and risk curve; bands by resampling tables, each with the draws sharing it."""
    risk = plan.target.risk
    weights = table_weights(plan, found.draws, tables)
    grid = column_grid(found.columns)
    if found.columns <= EXACT_COLUMNS:
        curve, many = risk_curves(found, risk)[0], risk_curves(found, risk, weights)
        points = curve_points(curve, many, grid)
        limit = first_above(curve, risk)
        limits = [first_above(each, risk) for each in many]
    else:
        fine = np.unique(np.concatenate([grid, column_grid(found.columns, points=GRID_POINTS)]))
        curve, many = risks_on_grid(found, risk, fine)[0], risks_on_grid(found, risk, fine, weights)
        kept = np.searchsorted(fine, grid)
        points = curve_points(curve[kept], many[:, kept], grid, at=np.arange(grid.size))
        limit = _crossing(found, risk, fine, curve)
        limits = [_between(fine, each, risk) for each in many]
    return make_limit(limit, limits, found.columns, mode=MODE), points


def table_weights(plan: Plan, draws: int, tables: Tables = TABLES) -> FloatArray:
    """Bootstrap weights of the draws, whole tables at a time: shape (LAW_DRAWS, draws)."""
    parts = tables_of(plan.rows, plan.columns, draws, tables_for(plan.source, plan.columns, tables))
    if len(parts) == 1:  # so many independent columns that only the errors vary
        parts = [(k, k + 1) for k in range(draws)]
    table = np.repeat(np.arange(len(parts)), [stop - start for start, stop in parts])
    rng = stream(plan.seed, "resampled draws")
    picks = np.array(
        [
            np.bincount(rng.integers(len(parts), size=len(parts)), minlength=len(parts))
            for _ in range(LAW_DRAWS)
        ]
    )
    weights = picks[:, table].astype(np.float64)
    return np.asarray(weights * draws / weights.sum(axis=1, keepdims=True))


def _crossing(found: Passers, risk: float, grid: np.ndarray, curve: FloatArray) -> float:
    """Largest p up to which the risk is accepted; exact between two points of the grid."""
    over = np.flatnonzero(curve > risk)
    if not over.size:
        return math.inf
    if over[0] == 0:
        return 0.0

    def accepted(p: int) -> bool:
        return risk_at(found, p, float(penalty_level(p, risk)))[0] <= risk

    return float(last_below(accepted, int(grid[over[0] - 1]), int(grid[over[0]])))


def _between(grid: np.ndarray, curve: FloatArray, risk: float) -> float:
    """The same by interpolation in log p."""
    over = np.flatnonzero(curve > risk)
    if not over.size:
        return math.inf
    k = int(over[0])
    if k == 0:
        return 0.0
    share = (risk - curve[k - 1]) / (curve[k] - curve[k - 1])
    logs = np.log(grid[[k - 1, k]])
    return math.floor(math.exp(logs[0] + share * (logs[1] - logs[0])))


def score_size(plan: Plan, sample: ScoreSample) -> float:
    """sd of a score: of the errors in a typical draw, or of a robust loss's score."""
    if plan.loss in ROBUST and sample.row_squares is not None:
        return math.sqrt(float(sample.row_squares.mean()))
    return float(sample.typical_sd or plan.law.sd)


def plan_effect(plan: Plan, sample: ScoreSample, p: int, table: Ranked | None = None) -> float:
    """Smallest detectable effect of a column among p, in sd of the response per sd of a column.

    b(p) = (lambda*(p) v + Phi^-1(power) tau) / (sqrt(n) sd(y) slope).
    """
    needed = needed_penalty(table or sample.found, p, plan.target.risk)
    added = float(ndtri(plan.target.power)) * score_size(plan, sample)
    size = float(sample.loadings[0]) * needed + added
    return size / (math.sqrt(plan.rows) * plan.response_sd * sample.slope)


def plan_signal_limit(plan: Plan, sample: ScoreSample) -> float:
    """Largest p at which the smallest effect is detectable; inf if at all of them."""
    table = ranked(sample.found)
    effect = plan.target.smallest_effect

    def detects(p: int) -> bool:
        return plan_effect(plan, sample, p, table) <= effect

    if detects(plan.columns):
        return math.inf
    if not detects(1):
        return 0.0
    return float(last_below(detects, 1, plan.columns))
