"""The budget of a plan: every limit for columns that are drawn, not given."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from scipy.stats import norm

from scantling.core.streams import MEMORY_BOUND, Mapper
from scantling.errors import InputError
from scantling.planning.assured import assured
from scantling.planning.breakthrough import BreakThrough, ScoreSample, needed_penalty
from scantling.planning.budget import Budget, assemble
from scantling.planning.case import LAW_DRAWS, loadings_of
from scantling.planning.ceiling import Ceiling
from scantling.planning.effects import EffectEntry, effects_table
from scantling.planning.generative import MODE, pieces_of, tables_for, tables_of
from scantling.planning.limit import Limit, make_limit, missing_limit
from scantling.planning.plan import (
    Plan,
    plan_effect,
    plan_noise,
    plan_scores,
    plan_signal_limit,
    score_size,
)
from scantling.planning.rows import plan_cases, rows_plan
from scantling.planning.signal import Signal
from scantling.planning.stress import SUPPORTS, Stress, stress
from scantling.simulation.scores import largest_quantile

MOST_TIMES_DRAWS = 10
"""Draws beyond the replicates, times them, where they cost little."""
PRODUCTS = 400_000_000
"""Rows times columns times draws up to which more draws are taken than asked; tables are shared
among them where fresh ones would cost more."""
SEARCHED_CELLS = 40_000_000
"""Rows times columns beyond which rows needed and tables are not computed: minutes, not seconds."""
REFIT_CELLS = 4_000_000
"""Rows times columns of the largest table that is refitted."""
REFIT_COLUMNS = 5_000
ASSURED_CELLS = 4_000_000
"""Values of the table on which assured columns are computed."""
KEPT = 1.5
"""Ratios kept, at most, times those that normal scores would have above the floor."""
NO_VARIANCE = "the error law has no variance"


@dataclass(frozen=True, slots=True, kw_only=True)
class Planned:
    """A budget on paper with what it was read off."""

    budget: Budget
    """All limits."""
    stress: Stress | None
    """Refits; None where there were none."""


def draws_of(plan: Plan) -> int:
    """Draws of errors: more than asked where they cost little, as the risk is a small number."""
    affordable = PRODUCTS // (plan.rows * plan.columns)
    return max(plan.replicates, min(affordable, MOST_TIMES_DRAWS * plan.replicates))


def refuse_too_large(plan: Plan) -> None:
    """Refuse before anything is drawn what would exceed the memory bound.

    Raises
    ------
    InputError
    """
    draws = draws_of(plan)
    start, stop = tables_of(
        plan.rows, plan.columns, draws, tables_for(plan.source, plan.columns)
    )[0]  # fmt: skip
    width = max(b - a for a, b in pieces_of(plan.source, plan.rows, plan.columns))
    # A block with its products under two laws, the ratios kept of all columns, and the errors.
    block = 24 * plan.rows * width + 32 * (stop - start) * width
    kept = int(KEPT * 2 * norm.sf(plan.floor) * 2 * 40 * plan.columns * draws)
    size = block + kept + 48 * plan.rows * (stop - start)
    if size > MEMORY_BOUND:
        raise InputError(
            f"columns: {plan.columns:,} columns of {plan.rows:,} rows and {draws:,} replicates"
            f" need {size / 2**30:.1f} GiB; the bound is {MEMORY_BOUND / 2**30:.0f} GiB"
        )


def budget_of(
    plan: Plan, ceiling: Ceiling, mapper: Mapper, *, refits: bool = True, tables: bool = True
) -> Planned:
    """Every limit of a plan; bands hold simulation error only, the law being stated.

    Parameters
    ----------
    plan : Plan
    ceiling : Ceiling
        The rate that applies to it.
    mapper : callable
    refits : bool
        Whether stability and geometry are simulated.
    tables : bool
        Whether rows needed and the tables by rows and effects are computed.

    Raises
    ------
    InputError
        If it would exceed the memory bound.
    """
    refuse_too_large(plan)
    fitted, twin = plan_scores(plan, mapper, draws=draws_of(plan))
    noise, curve = plan_noise(plan, fitted.found)
    ratio = _ratio(plan, fitted, twin)
    broken = BreakThrough(
        noise=noise, curve=curve, penalty_ratio=ratio,
        equivalent_rows=None if ratio is None else int(plan.rows / max(1.0, ratio) ** 2),
        worst_columns=(), worst_shares=(), fitted=fitted, drawn=(),
    )  # fmt: skip
    stability, geometry, done = _refitted(plan, mapper, refits)
    tables = tables and plan.rows * plan.columns <= SEARCHED_CELLS
    rows = rows_plan(plan, mapper, refits=done is not None) if tables else None
    effects: tuple[EffectEntry, ...] = ()
    if tables and done is not None:
        effects = _effects(plan, fitted, noise, mapper)
    budget = assemble(
        target=plan.target,
        rows=plan.rows, asked=plan.columns, noise=broken, signal=_signal(plan, fitted),
        stability=stability, geometry=geometry, ceiling=ceiling, assured=_assured(plan),
        plan=rows, effects=effects, refits=refits,
    )  # fmt: skip
    return Planned(budget=budget, stress=done)


def _ratio(plan: Plan, fitted: ScoreSample, twin: ScoreSample) -> float | None:
    p, risk = plan.columns, plan.target.risk
    if loadings_of(plan.rule) == "self-normalised":
        needed = [
            needed_penalty(s.found, p, risk) * float(s.loadings[0]) / score_size(plan, s)
            for s in (fitted, twin)
        ]
        return needed[0] / needed[1]
    quantiles = [largest_quantile(s.found, p, 1 - risk) for s in (fitted, twin)]
    if quantiles[0] is None or quantiles[1] is None:
        return None
    return quantiles[0] / quantiles[1]


def _signal(plan: Plan, sample: ScoreSample) -> Signal:
    if not math.isfinite(plan.law.sd):
        return Signal(
            limit=missing_limit(NO_VARIANCE, mode=MODE), detectable=None, detectable_worst=None
        )
    point = plan_signal_limit(plan, sample)
    effect = plan_effect(plan, sample, plan.columns)
    return Signal(
        limit=make_limit(point, [point] * LAW_DRAWS, plan.columns, mode=MODE),
        detectable=effect,
        detectable_worst=effect,
    )


def _refitted(plan: Plan, mapper: Mapper, refits: bool) -> tuple[Limit, Limit, Stress | None]:
    """Stability and geometry limits, on as many columns as refits can take."""
    reason = "" if refits else "selection was not simulated"
    if not math.isfinite(plan.law.sd):
        reason = NO_VARIANCE
    if plan.target.relevant >= plan.columns:
        reason = f"{plan.target.relevant} relevant columns leave none over"
    if reason:
        missing = missing_limit(reason, mode=MODE)
        return missing, missing, None
    columns = min(plan.columns, REFIT_COLUMNS, max(50, REFIT_CELLS // plan.rows))
    case_of = plan_cases(plan, columns, SUPPORTS)
    done = stress(case_of(0), mapper, case_of=case_of)
    return (
        _as_far_as(done.stability, columns, plan.columns),
        _as_far_as(done.geometry, columns, plan.columns),
        done,
    )


def _as_far_as(limit: Limit, examined: int, asked: int) -> Limit:
    """A limit not reached among fewer columns than asked for says no more than their number."""
    if examined >= asked:
        return limit
    return replace(
        limit,
        draws=tuple(min(draw, float(examined)) for draw in limit.draws),
        note=limit.note if limit.reached else f"at least; refits took {examined:,} columns",
    )


def _assured(plan: Plan) -> Limit:
    columns = min(plan.columns, max(1, ASSURED_CELLS // plan.rows))
    case = plan.case(columns, table=0)
    found = assured(
        case.X, plan.law, (), target=plan.target, response_sd=plan.response_sd,
        loss=plan.loss, mode=MODE, most=plan.columns,
    )  # fmt: skip
    return found


def _effects(
    plan: Plan, fitted: ScoreSample, noise: Limit, mapper: Mapper
) -> tuple[EffectEntry, ...]:
    columns = min(plan.columns, REFIT_COLUMNS, max(50, REFIT_CELLS // plan.rows))
    case_of = plan_cases(plan, columns, SUPPORTS)
    return effects_table(
        case_of(0),
        float(noise.columns or 0) if noise.reached else math.inf,
        lambda target: plan_signal_limit(replace(plan, target=target), fitted),
        mapper,
        columns=plan.columns,
        case_of=case_of,
    )
