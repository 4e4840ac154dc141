"""Selection under fresh errors: stability and geometry limits by simulated refits."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from scantling.core.estimate import Estimate
from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, make_limit
from scantling.simulation.lasso import solve_batch
from scantling.simulation.loadings import BoolArray
from scantling.simulation.rules import LEVEL_RULES, select_batch
from scantling.simulation.scores import centre, penalty_level
from scantling.simulation.selection import (
    SelectionSummary,
    pool_summaries,
    summarise_selection,
)

SUPPORTS = 5
"""Sets of relevant columns the replicates are shared among."""
GRID_POINTS = 7
TOLERANCE = 1e-5
"""Duality gap of the refits, relative; selections no longer change below it."""
REFITS_PER_LAW = 20
"""Refits under each drawn law, from which the laws' effect on the criteria is estimated."""
CRITERIA = ("stability", "power", "false_share")


@dataclass(frozen=True, slots=True, kw_only=True)
class StressRun:
    """Selection statistics at one number of columns under one law."""

    rows: int
    """n."""
    columns: int
    """Candidate columns of the refits."""
    law: str
    """fitted | twin | normal-volatility."""
    mode: str
    """conditional | generative."""
    replicates: int
    """Refits."""
    stability: Estimate
    """Stability index, 90 % interval; 0 if nothing is ever selected, 1 if everything always is."""
    power: Estimate
    """Mean share of relevant columns selected."""
    false_share: Estimate
    """Mean share of false columns among the selected."""
    exact: float
    """Share of refits that select exactly the relevant columns."""
    mean_size: float
    """Columns selected on average."""
    errors: tuple[float, float, float]
    """Monte Carlo standard errors of stability, power and false share."""


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


@dataclass(frozen=True, slots=True, kw_only=True)
class SupportSet:
    """One set of relevant columns, nested in the columns taken at every p."""

    order: np.ndarray
    """All P columns in the order they are taken; the relevant ones come first."""
    signs: FloatArray
    """Signs of the relevant coefficients."""


def support_set(case: Case, number: int) -> SupportSet:
    """Random order of the columns and random signs, from their own stream."""
    rng = stream(case.seed, "support", number)
    relevant = min(case.target.relevant, case.columns)
    return SupportSet(
        order=rng.permutation(case.columns), signs=rng.choice([-1.0, 1.0], size=relevant)
    )


def refit(
    case: Case, chosen: SupportSet, p: int, law: ErrorLaw, size: int, rng: np.random.Generator
) -> SelectionSummary:
    """Refit the lasso to `size` fresh responses on the first p columns of a support set."""
    return refits(case, chosen, p, ((law, rng),), size)[0]


def refits(
    case: Case, chosen: SupportSet, p: int, laws: Sequence[tuple[ErrorLaw, np.random.Generator]],
    size: int,
) -> list[SelectionSummary]:  # fmt: skip
    """Refit to `size` fresh responses under each law, on the first p columns of a support set.

    Errors are scaled to the residual sd; the penalty is the rule's, with loadings from the
    draw itself. Laws are refitted together, as what is done once for the columns costs most.
    """
    relevant = min(chosen.signs.size, p)
    X = case.X[:, chosen.order[:p]]
    effect = case.target.smallest_effect * case.response_sd
    mean = X[:, :relevant] @ (effect * chosen.signs[:relevant])
    errors = np.concatenate([_scaled_errors(case, law, size, rng) for law, rng in laws], axis=1)
    truth = np.zeros(p, dtype=bool)
    truth[:relevant] = True
    selected = _selected(case, X, mean[:, None] + errors, errors)
    return [
        summarise_selection(selected[start:stop], truth)
        for start, stop in blocks(len(selected), size)
    ]


def _selected(case: Case, X: FloatArray, Y: FloatArray, errors: FloatArray) -> BoolArray:
    """Columns the design's own rule and loss select for each response, shape (R, p)."""
    if case.rule not in LEVEL_RULES or case.loss != "squared" or case.adaptive:
        found = select_batch(
            X, Y, rule=case.rule, loss=case.loss, errors=errors, risk=case.target.risk,
            adaptive=case.adaptive, time_ordered=case.time_ordered, seed=case.seed, tol=TOLERANCE,
        )  # fmt: skip
        return np.asarray(found.selected.T)
    level = float(penalty_level(X.shape[1], case.target.risk)) / math.sqrt(case.rows)
    if case.rule == "self-normalised":
        weights = level * np.sqrt((X**2).T @ errors**2 / case.rows)
    else:
        weights = level * np.sqrt((errors**2).mean(axis=0))
    return np.asarray(solve_batch(X, Y, weights, tol=TOLERANCE)[0] != 0).T


def _scaled_errors(case: Case, law: ErrorLaw, size: int, rng: np.random.Generator) -> FloatArray:
    """Centred errors whose typical draw is as loud as the residuals.

    The law's own sd would not do: near two moments it is ruled by errors that hardly any sample
    has.
    """
    errors = centre(case.draw_errors(law, size, rng))
    return np.asarray(errors * (case.residual_sd / np.median(np.sqrt((errors**2).mean(axis=0)))))


def grid_of(columns: int, relevant: int, points: int = GRID_POINTS) -> list[int]:
    """Numbers of columns the refits are run at, neighbours at least a fifth apart.

    From one more than the relevant ones: of these alone, always selected, the stability index
    says nothing.
    """
    fewest = min(columns, relevant + 1)
    steps = max(1, int(math.log(columns / fewest) / math.log(1.2)))
    return [int(p) for p in column_grid(columns, fewest=fewest, points=min(points, steps + 1))]


CaseOf = Callable[[int], Case]
"""The case that a support set is refitted on: the same for all, or one with columns of its own."""


def run_law(
    case: Case, law: ErrorLaw, name: str, grid: list[int], mapper: Mapper, case_of: CaseOf | None
) -> tuple[StressRun, ...]:
    """Refits on the grid under one law, the replicates shared among the support sets."""
    size = max(2, case.replicates // SUPPORTS)
    units = [(p, number) for p in grid for number in range(SUPPORTS)]

    def one(unit: tuple[int, int]) -> SelectionSummary:
        p, number = unit
        # The same errors at every p: differences along the grid are then the columns' doing.
        rng = stream(case.seed, f"refits, {name}", number)
        own = case if case_of is None else case_of(number)
        return refit(own, support_set(own, number), p, law, size, rng)

    done = mapper(one, units)
    return tuple(
        _run(case, p, name, pool_summaries(done[k * SUPPORTS : (k + 1) * SUPPORTS]))
        for k, p in enumerate(grid)
    )


def _run(case: Case, p: int, name: str, summary: SelectionSummary) -> StressRun:
    return StressRun(
        rows=case.rows,
        columns=p,
        law=name,
        mode=case.mode,
        replicates=summary.replicates,
        stability=_estimate(summary, "stability"),
        power=_estimate(summary, "power"),
        false_share=_estimate(summary, "false_share"),
        exact=summary.exact,
        mean_size=summary.mean_size,
        errors=(
            summary.stability_error or 0.0, summary.power_error, summary.false_share_error,
        ),
    )  # fmt: skip


def _estimate(summary: SelectionSummary, name: str) -> Estimate:
    """A criterion with its interval.

    The stability index is not defined where nothing is ever selected, which counts as 0, or
    where every column always is, which counts as 1: it is the same selection each time.
    """
    value, low, high = (getattr(summary, name + end) for end in ("", "_low", "_high"))
    if value is None:
        constant = float(summary.mean_size > 0)
        return Estimate(value=constant, low=constant, high=constant)
    return Estimate(value=value, low=low, high=high)


def _criteria(summary: SelectionSummary) -> list[float]:
    """Stability, power and false share."""
    return [_estimate(summary, name).value for name in CRITERIA]


def margins(case: Case, run: StressRun) -> FloatArray:
    """How far each criterion is met (positive) or missed, shape (3,)."""
    target = case.target
    return np.array(
        [
            run.stability.value - target.stability,
            run.power.value - target.power,
            target.false_share - run.false_share.value,
        ]
    )


def limit_on_grid(grid: list[int], margin: FloatArray) -> float:
    """Largest p whose smallest margin is not negative; inf if that is all columns.

    Between a number of columns that passes and the next on the grid that fails the margin is
    interpolated in log p. 0 if none passes. `margin` is (grid, 3).
    """
    worst = margin.min(axis=1)
    passing = np.flatnonzero(worst >= 0)
    if not passing.size:
        return 0.0
    last = int(passing[-1])
    if last == len(grid) - 1:
        return math.inf
    share = worst[last] / (worst[last] - worst[last + 1])
    logs = np.log(grid)
    return math.floor(math.exp(logs[last] + share * (logs[last + 1] - logs[last])) + 1e-9)


def law_effects(case: Case, p: int, mapper: Mapper) -> FloatArray:
    """Effect of each drawn law on the three criteria at p columns, shape (laws, 3).

    Each drawn law has a few refits; their means vary by law and by chance. The part due to
    chance is taken out by shrinking towards the mean, by the ratio of variance components
    (the usual random-effects predictor).
    """

    groups = np.arange(len(case.law_draws)) % SUPPORTS

    def one(group: int) -> list[list[float]]:
        laws = [
            (case.law_draws[k], stream(case.seed, "refits, drawn laws", int(k)))
            for k in np.flatnonzero(groups == group)
        ]
        found = refits(case, support_set(case, group), p, laws, REFITS_PER_LAW)
        return [_criteria(summary) for summary in found]

    values = np.empty((len(groups), len(CRITERIA)))
    for group, found in enumerate(mapper(one, range(SUPPORTS))):
        values[groups == group] = found
    for group in range(SUPPORTS):
        values[groups == group] -= values[groups == group].mean(axis=0)
    values[:, 2] *= -1  # as margins: a larger false share is worse
    total = values.var(axis=0, ddof=SUPPORTS)
    return np.asarray(values * _law_share(case, p, total, mapper))


def _law_share(case: Case, p: int, total: FloatArray, mapper: Mapper) -> FloatArray:
    """Share of the criteria's variance that the laws explain, each in [0, 1]."""

    def one(group: int) -> list[list[float]]:
        twice = [
            (case.law, stream(case.seed, "refits, fitted law again", k))
            for k in (group, group + SUPPORTS)
        ]
        found = refits(case, support_set(case, group), p, twice, REFITS_PER_LAW)
        return [_criteria(summary) for summary in found]

    pairs = np.array(mapper(one, range(SUPPORTS)))
    within = ((pairs[:, 0] - pairs[:, 1]) ** 2 / 2).mean(axis=0)
    return np.asarray(np.clip(1 - within / np.maximum(total, 1e-12), 0, 1))


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
        Numbers of columns examined.
    case_of : callable, optional
        Generative mode: the case, with drawn columns, of each support set.
    """
    grid = grid_of(case.columns, case.target.relevant, points)
    fitted = run_law(case, case.law, "fitted", grid, mapper, case_of)
    stability = _limit(case, grid, fitted, mapper, drawn=True)
    runs, geometry = fitted, stability
    if twins:
        twin = run_law(case, case.twin, "twin", grid, mapper, case_of)
        geometry = _limit(case, grid, twin, mapper, drawn=False)
        runs += twin
        if case.law.volatility is not None:
            runs += run_law(
                case, case.law.normal_innovations(), "normal-volatility", grid[-1:], mapper,
                case_of,
            )  # fmt: skip
    missed = margins(case, fitted[-1]) < 0
    return Stress(
        runs=runs,
        stability=stability,
        geometry=geometry,
        failing=tuple(name for name, miss in zip(CRITERIA, missed, strict=True) if miss),
    )


def _limit(
    case: Case, grid: list[int], runs: tuple[StressRun, ...], mapper: Mapper, *, drawn: bool
) -> Limit:
    """Limit with its band: the criteria's Monte Carlo error, and the drawn laws' effect."""
    margin = np.array([margins(case, run) for run in runs])
    point = limit_on_grid(grid, margin)
    error = np.array([run.errors for run in runs])
    effects = np.zeros((len(case.law_draws), 3))
    if drawn and case.law.spread is not None:
        near = grid[-1] if math.isinf(point) else min(grid, key=lambda p: abs(p - point))
        effects = law_effects(case, near, mapper)
    noise = stream(case.seed, "criteria error").standard_normal((len(case.law_draws), 3))
    draws = [
        limit_on_grid(grid, margin + u + z * error) for u, z in zip(effects, noise, strict=True)
    ]
    return make_limit(point, draws, grid[-1], mode=case.mode)
