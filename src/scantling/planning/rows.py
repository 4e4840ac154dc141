"""How many rows a design needs, and what other rows, effects and supports would allow.

Columns are drawn (generative mode), with the same random streams at every number of rows, so
that what differs between them is the rows' doing.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import stdtrit

from scantling.core.listing import listed
from scantling.core.streams import Mapper
from scantling.diagnostics.moments import Z90
from scantling.planning.breakthrough import ScoreSample
from scantling.planning.case import Case, column_grid
from scantling.planning.generative import Tables, tables_for, tables_of
from scantling.planning.plan import EXACT_COLUMNS, Plan, plan_effect, plan_scores, plan_signal_limit
from scantling.planning.stress import CaseOf, grid_of, limit_of
from scantling.simulation.scores import (
    exceeding_counts,
    first_above,
    penalty_level,
    risk_at,
    risk_curves,
    risks_on_grid,
)

FEWEST_ROWS = 30
SEARCH_DRAWS = 200
PRECISION = 1.05
"""Rows needed are narrowed down to a factor of it; simulation error is larger."""
TIMES_ROWS = (0.5, 1, 2, 4)
"""Rows of the table, times the present ones."""
TABLE_POINTS = 4
"""Numbers of columns that refits of a table are run at."""
LIMITS = ("noise", "signal", "stability")


@dataclass(frozen=True, slots=True, kw_only=True)
class Effort:
    """How much is drawn in a search."""

    tables: Tables
    """Tables drawn at one number of rows."""
    largest: int
    """Rows times columns beyond which no larger number of rows is tried."""
    times: int
    """Largest number of rows tried, times the present ones."""
    refits: int
    """Refits at one number of rows and columns."""
    refit_tables: int
    """Tables they are shared among."""


THOROUGH = Effort(
    tables=Tables(8_000_000, 2), largest=24_000_000, times=64, refits=100, refit_tables=5
)
BRIEF = Effort(
    tables=Tables(1_200_000, 4, 8), largest=1_500_000, times=8, refits=60, refit_tables=2
)
"""Beside a whole vetting, which has ten seconds."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Needed:
    """Fewest rows from which one limit, or all, hold at every larger number tried."""

    rows: int | None
    """None if there are none in the range searched."""
    note: str = ""
    """Why there are none; empty otherwise."""
    low: int | None = None
    """Fewest rows tried from which the risk is within simulation error (90 %) of what is accepted;
    None for limits without such an error, or where there are none."""
    high: int | None = None
    """Fewest rows tried from which the risk is accepted beyond simulation error; None: none."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RowsEntry:
    """What so many rows would allow; point values."""

    rows: int
    """n."""
    noise: int | None
    """Noise limit; the columns asked for if it is not reached."""
    signal: int | None
    """Signal limit, likewise; None where the law has no variance."""
    stability: int | None
    """Stability limit, likewise; None where refits were not run."""
    allowed: int | None
    """Smallest of the three."""
    risk: float
    """Break-through risk at the columns asked for."""
    risk_error: float
    """Its simulation error, 90 %, between tables of columns included."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RowsPlan:
    """Rows needed for the columns asked for, and the table by rows."""

    needed: Needed
    """For all limits together."""
    by_limit: tuple[tuple[str, Needed], ...]
    """noise, signal, stability, each by itself."""
    searched_to: int
    """Largest number of rows tried."""
    table: tuple[RowsEntry, ...]
    """By rows, increasing."""
    falls: bool
    """Whether the noise limit falls somewhere as rows grow."""


class RowSearch:
    """Scores and refits of one plan at any number of rows, each computed once.

    Parameters
    ----------
    plan : Plan
    mapper : callable
    refits : bool
        Whether selection is simulated.
    effort : Effort
    """

    def __init__(self, plan: Plan, mapper: Mapper, *, refits: bool, effort: Effort) -> None:
        self.plan = plan
        self.mapper = mapper
        self.refits = refits and math.isfinite(plan.law.sd)
        self.effort = effort
        self._scores: dict[int, ScoreSample] = {}
        self._stable: dict[int, bool] = {}

    def scores(self, rows: int) -> ScoreSample:
        """Score ratios of the plan's columns at so many rows."""
        if rows not in self._scores:
            self._scores[rows] = plan_scores(
                self.plan.at(rows), self.mapper, draws=SEARCH_DRAWS, twin=False,
                tables=self.effort.tables,
            )[0]  # fmt: skip
        return self._scores[rows]

    def risk(self, rows: int) -> float:
        """Largest break-through risk at any number of columns up to those asked for."""
        found, risk = self.scores(rows).found, self.plan.target.risk
        if found.columns <= EXACT_COLUMNS:
            return float(risk_curves(found, risk)[0].max())
        return float(risks_on_grid(found, risk, column_grid(found.columns))[0].max())

    def risk_at_all(self, rows: int) -> float:
        """Break-through risk at the columns asked for."""
        p, risk = self.plan.columns, self.plan.target.risk
        return risk_at(self.scores(rows).found, p, float(penalty_level(p, risk)))[0]

    def risk_error(self, rows: int) -> float:
        """Simulation error of the risk, 90 %: that of the draws, or, if larger, between tables.

        Draws on the same columns are alike: where a few large values of them decide, as many
        draws say little more than one.
        """
        found = self.scores(rows).found
        level = float(penalty_level(self.plan.columns, self.plan.target.risk))
        broken = exceeding_counts(found, level) > 0
        risk = max(float(broken.mean()), 1 / broken.size)
        alone = Z90 * math.sqrt(risk * (1 - risk) / broken.size)
        at = self.plan.at(rows)
        wanted = tables_for(at.source, at.columns, self.effort.tables)
        parts = tables_of(rows, at.columns, broken.size, wanted)
        if len(parts) < 2:
            return alone
        means = [float(broken[start:stop].mean()) for start, stop in parts]
        spread = float(np.std(means, ddof=1)) / math.sqrt(len(means))
        return max(alone, float(stdtrit(len(means) - 1, 0.95)) * spread)

    def noise_range(self) -> tuple[int | None, int | None]:
        """Fewest rows tried from which the risk is, within and beyond its error, accepted."""
        accepted = self.plan.target.risk
        found: list[int | None] = []
        for side in (-1, 1):
            rows: int | None = None
            for n in sorted(self._scores, reverse=True):
                if self.risk_at_all(n) + side * self.risk_error(n) > accepted:
                    break
                rows = n
            found.append(rows)
        return found[0], found[1]

    def holds(self, limit: str, rows: int) -> bool:
        """Whether the columns asked for are allowed by one limit."""
        if limit == "noise":
            return self.risk(rows) <= self.plan.target.risk
        if limit == "signal":
            effect = plan_effect(self.plan.at(rows), self.scores(rows), self.plan.columns)
            return effect <= self.plan.target.smallest_effect
        if rows not in self._stable:
            plan = self.plan.at(rows)
            found = stability_limit(plan, self.mapper, [plan.columns], self.effort)
            self._stable[rows] = math.isinf(found)
        return self._stable[rows]

    def entry(self, rows: int) -> RowsEntry:
        """All limits at so many rows."""
        plan, sample = self.plan.at(rows), self.scores(rows)
        curve = risk_curves(sample.found, plan.target.risk)[0]
        found: dict[str, float | None] = {
            "noise": first_above(curve, plan.target.risk), "signal": None, "stability": None,
        }  # fmt: skip
        if math.isfinite(plan.law.sd):
            found["signal"] = plan_signal_limit(plan, sample)
        if self.refits:
            found["stability"] = stability_limit(plan, self.mapper, table_grid(plan), self.effort)
        whole = {
            name: None if value is None else int(min(value, plan.columns))
            for name, value in found.items()
        }
        wanted = LIMITS if self.refits else LIMITS[:2]
        values = [whole[name] for name in wanted]
        known = [value for value in values if value is not None]
        return RowsEntry(
            rows=rows,
            noise=whole["noise"],
            signal=whole["signal"],
            stability=whole["stability"],
            allowed=min(known) if len(known) == len(values) else None,
            risk=float(curve[-1]),
            risk_error=self.risk_error(rows),
        )


def table_grid(plan: Plan) -> list[int]:
    """Numbers of columns the refits of a table are run at."""
    return grid_of(plan.columns, plan.target.relevant, TABLE_POINTS)


def stability_limit(plan: Plan, mapper: Mapper, grid: list[int], effort: Effort) -> float:
    """Stability limit among the numbers of columns of a grid; inf if it is not reached."""
    case_of = plan_cases(plan, grid[-1], effort.refit_tables)
    case = replace(case_of(0), replicates=effort.refits)
    return limit_of(case, plan.law, grid, mapper, case_of)


def plan_cases(plan: Plan, columns: int, tables: int) -> CaseOf:
    """The drawn case of each support set, made once; so many tables are shared among them."""
    made: dict[int, Case] = {}

    def case_of(number: int) -> Case:
        table = number % tables
        if table not in made:
            made[table] = plan.case(columns, table)
        return made[table]

    return case_of


def fewest_rows(holds: Callable[[int], bool], steps: list[int]) -> int | None:
    """Fewest rows from which `holds` at every larger step; None if it fails at the last.

    From the largest step down to the first that fails; between that and the next the place is
    narrowed down to PRECISION.
    """
    passing: int | None = None
    for rows in reversed(steps):
        if not holds(rows):
            break
        passing = rows
    if passing is None or passing == steps[0]:
        return passing
    failing = steps[steps.index(passing) - 1]
    while passing > PRECISION * failing and passing - failing > 1:
        middle = round(math.sqrt(passing * failing))
        if middle in (passing, failing):
            break
        if holds(middle):
            passing = middle
        else:
            failing = middle
    return passing


def row_steps(plan: Plan, effort: Effort) -> list[int]:
    """Numbers of rows tried: doubling from 4 L(p)^2, the present ones among them."""
    level = float(penalty_level(plan.columns, plan.target.risk))
    start = max(FEWEST_ROWS, math.ceil(4 * level**2))
    most = min(
        effort.times * plan.rows,
        max(effort.largest // plan.columns, round(max(TIMES_ROWS) * plan.rows)),
    )
    steps = {round(plan.rows * 2.0**k) for k in range(-12, 7)}
    return sorted(rows for rows in {start, *steps} if start <= rows <= max(most, start))


def rows_plan(plan: Plan, mapper: Mapper, *, refits: bool, effort: Effort = THOROUGH) -> RowsPlan:
    """Rows needed, each limit and jointly, and the table by rows."""
    search = RowSearch(plan, mapper, refits=refits, effort=effort)
    steps = row_steps(plan, effort)
    by_limit: dict[str, Needed] = {}
    for name in LIMITS:
        by_limit[name] = _needed(search, name, steps, by_limit)
    wanted = LIMITS if search.refits else LIMITS[:2]
    missing = [name for name in wanted if by_limit[name].rows is None]
    joint = Needed(rows=None, note=_joint_note(plan, steps, [by_limit[k].note for k in missing]))
    if not missing:
        rows = max(by_limit[name].rows or 0 for name in wanted)
        others = max(by_limit[name].rows or 0 for name in wanted if name != "noise")
        low, high = by_limit["noise"].low, by_limit["noise"].high
        joint = Needed(
            rows=rows,
            low=max(others, low or rows),
            high=None if high is None else max(others, high),
        )
    fewest = max(FEWEST_ROWS, plan.target.relevant + 2)
    lines = sorted({max(fewest, round(times * plan.rows)) for times in TIMES_ROWS})
    table = tuple(search.entry(n) for n in lines)
    return RowsPlan(
        needed=joint,
        by_limit=tuple(by_limit.items()),
        searched_to=steps[-1],
        table=table,
        falls=any(_falls(earlier, later) for earlier, later in itertools.pairwise(table)),
    )


def _falls(earlier: RowsEntry, later: RowsEntry) -> bool:
    """Whether more rows carry fewer columns, beyond simulation error."""
    error = math.sqrt(2 * later.risk * (1 - later.risk) / SEARCH_DRAWS)
    return (later.noise or 0) < (earlier.noise or 0) and later.risk - earlier.risk > 3 * error


def _needed(search: RowSearch, name: str, steps: list[int], found: dict[str, Needed]) -> Needed:
    """Fewest rows for one limit."""
    if name != "noise" and not math.isfinite(search.plan.law.sd):
        return Needed(rows=None, note="the error law has no variance")
    if name == "stability":
        if not search.refits:
            return Needed(rows=None, note="selection was not simulated")
        # Refits cost most: only from where the effects are detectable, with which power comes.
        signal = found["signal"].rows
        if signal is None:
            return Needed(rows=None, note=found["signal"].note)
        first = next((rows for rows in steps if rows >= signal and search.holds(name, rows)), None)
        if first is None:
            return Needed(rows=None, note=_none_in_range(search.plan, steps, name))
        before = [rows for rows in steps if rows < first]
        return Needed(rows=fewest_rows(
            lambda rows: search.holds(name, rows), [*before[-1:], first]
        ))  # fmt: skip
    rows = fewest_rows(lambda n: search.holds(name, n), steps)
    low, high = search.noise_range() if name == "noise" and rows else (None, None)
    return Needed(
        rows=rows, note="" if rows else _none_in_range(search.plan, steps, name), low=low, high=high
    )


def _none_in_range(plan: Plan, steps: list[int], *names: str) -> str:
    times = steps[-1] / plan.rows
    limits = f"{listed(names)} limit{'s' if len(names) > 1 else ''}"
    return f"{times:.3g} times as many are not enough for the {limits}"


def _joint_note(plan: Plan, steps: list[int], notes: list[str]) -> str:
    """Why there are none for all limits: each reason once, limits not lifted in one sentence."""
    alone = {_none_in_range(plan, steps, name): name for name in LIMITS}
    fixed = [name for note, name in alone.items() if note in notes]
    said = [_none_in_range(plan, steps, *fixed)] if fixed else []
    return "; ".join([*said, *dict.fromkeys(note for note in notes if note not in alone)])
