"""Which numbers of columns are refitted, and how often, until the limit is decided.

All columns asked for come first: where the criteria are met there, nothing more is to be found.
Else the place where they fail is halved on the grid. Errors are the same at every number of
columns, so that differences are the columns' doing. A run stops as soon as every criterion is
clear of its bar. Searches under several laws go on together, so that workers have enough to do;
what is run next depends on results alone, never on workers.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from scipy.special import stdtrit

from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case, column_grid
from scantling.planning.limit import Limit, make_limit
from scantling.planning.refits import Refits, StressRun, joined, refit, run_of, support_set

SUPPORTS = 5
"""Sets of relevant columns the replicates are shared among."""
GRID_POINTS = 7
CRITERIA = ("stability", "power", "false_share")
FIRST_BATCH = 20
"""Fewest refits of a set before a run may stop: what they are scaled by is a median."""
FIRST_SHARE = 0.25
"""Share of the refits in the first batch; the next bring it to twice that, and so on."""
CLEAR = float(stdtrit(SUPPORTS - 1, 0.995))
"""Standard errors off the bar: ends of a 99 % interval, as the question is put more than once."""
MOST_AT_ONCE = 40
"""Refits of one unit of work: fine enough to share evenly, coarse enough for the batched kernel."""
OUTSIDE = 0.05
"""Share of drawn limits that may lie below the fewest columns examined."""

CaseOf = Callable[[int], Case]
"""The case that a support set is refitted on: the same for all, or one with columns of its own."""


def grid_of(columns: int, relevant: int, points: int = GRID_POINTS) -> list[int]:
    """Numbers of columns the refits may be run at, neighbours at least a fifth apart.

    From one more than the relevant ones: of these alone, always selected, the stability index
    says nothing.
    """
    fewest = min(columns, relevant + 1)
    steps = max(1, int(math.log(columns / fewest) / math.log(1.2)))
    return [int(p) for p in column_grid(columns, fewest=fewest, points=min(points, steps + 1))]


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


def errors_of(run: StressRun) -> FloatArray:
    """Monte Carlo standard errors of the margins, shape (3,)."""
    return np.array([getattr(run, name).error for name in CRITERIA])


def limit_on_grid(grid: Sequence[int], margin: FloatArray) -> float:
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


class LimitSearch:
    """The runs of one case under one law: those done, and what is refitted next.

    Parameters
    ----------
    case : Case
    law : ErrorLaw
    name : str
        Of the law; it names the streams of the errors as well.
    grid : sequence of int
        Numbers of columns that may be examined, increasing.
    case_of : callable, optional
        Generative mode: the case, with drawn columns, of each support set.
    early : bool
        Whether a run stops once every criterion is clear.
    halving : bool
        Whether only what the limit takes is run; otherwise the whole grid.
    band : bool
        Whether the limit's band has to be covered as well.
    """

    def __init__(
        self, case: Case, law: ErrorLaw, name: str, grid: Sequence[int],
        case_of: CaseOf | None = None, *, early: bool = True, halving: bool = True,
        band: bool = True,
    ) -> None:  # fmt: skip
        self.case, self.law, self.name, self.grid = case, law, name, list(grid)
        self.case_of, self.early, self.halving, self.band = case_of, early, halving, band
        self.size = max(2, case.replicates // SUPPORTS)
        self.ends = batch_ends(self.size) if early else [self.size]
        self.effects = np.zeros((len(case.law_draws), len(CRITERIA)))
        """What the drawn laws change about the margins, shape (laws, 3)."""
        self.noise = stream(case.seed, "criteria error").standard_normal(self.effects.shape)
        # Drawn tables have as many columns as the case, so these are their sets as well.
        self.supports = [support_set(case, number) for number in range(SUPPORTS)]
        self._parts: dict[int, list[list[Refits]]] = {}
        self._runs: dict[int, StressRun] = {}
        self._at: int | None = len(self.grid) - 1 if halving else 0

    @property
    def runs(self) -> tuple[StressRun, ...]:
        """What was run, by increasing columns."""
        return tuple(self._runs[p] for p in sorted(self._runs))

    def wanted(self) -> tuple[int, int] | None:
        """Columns and number of the next batch; None if there is nothing left to run."""
        if self._at is None:
            self._at = self._next()
            if self._at is None:
                return None
        p = self.grid[self._at]
        return p, len(self._parts.get(p, [[]])[0])

    def parts(self, place: int) -> list[int]:
        """Refits of each unit that a batch is carried out in."""
        size = self.ends[place] - (self.ends[place - 1] if place else 0)
        return [stop - start for start, stop in blocks(size, MOST_AT_ONCE)]

    def batch(self, p: int, number: int, place: int, part: int) -> Refits:
        """Refits of one part of a batch on one support set."""
        sizes = self.parts(place)
        own = self.case if self.case_of is None else self.case_of(number)
        # The same errors at every p: differences along the grid are then the columns' doing.
        which = (number, place, part) if len(sizes) > 1 else (number, place)
        rng = stream(self.case.seed, f"refits, {self.name}", *which)
        return refit(own, self.supports[number], p, self.law, sizes[part], rng)

    def take(self, p: int, found: Sequence[Refits]) -> None:
        """One batch of every support set."""
        parts = self._parts.setdefault(p, [[] for _ in found])
        for several, one in zip(parts, found, strict=True):
            several.append(one)
        run = run_of(
            self.case, self.name, [joined(several) for several in parts], self.supports,
            SUPPORTS * self.size,
        )  # fmt: skip
        self._runs[p] = run
        if len(parts[0]) == len(self.ends) or is_clear(self.case, run):
            self._at = None

    def limit(self) -> float:
        """The limit by what was run; inf if it is not reached."""
        return limit_on_grid(sorted(self._runs), self._margins())

    def limits(self) -> list[float]:
        """The limit under each drawn law, Monte Carlo error included."""
        margin, grid = self._margins(), sorted(self._runs)
        error = np.array([errors_of(run) for run in self.runs])
        return [
            limit_on_grid(grid, margin + u + z * error)
            for u, z in zip(self.effects, self.noise, strict=True)
        ]

    def found(self) -> Limit:
        """The limit with its band."""
        return make_limit(self.limit(), self.limits(), self.grid[-1], mode=self.case.mode)

    def _margins(self) -> FloatArray:
        return np.array([margins(self.case, run) for run in self.runs])

    def _next(self) -> int | None:
        """Place on the grid to be run next."""
        done = [place for place, p in enumerate(self.grid) if p in self._runs]
        if not self.halving:
            return len(done) if len(done) < len(self.grid) else None
        passing = (self._margins().min(axis=1) >= 0).tolist()
        good = max((place for place, ok in zip(done, passing, strict=True) if ok), default=-1)
        bad = min((place for place in done if place > good), default=len(self.grid))
        if bad - good > 1 and bad < len(self.grid):
            return (good + bad + 1) // 2
        if self.band and done[0] > 0 and np.mean(np.array(self.limits()) == 0) > OUTSIDE:
            return done[0] // 2
        return None


def batch_ends(size: int) -> list[int]:
    """Refits of a support set after each batch; the last is not a small remainder."""
    ends = [max(FIRST_BATCH, round(FIRST_SHARE * size))]
    while ends[-1] < size:
        ends.append(2 * ends[-1])
    return [*(end for end in ends if end <= 0.75 * size), size]


def is_clear(case: Case, run: StressRun) -> bool:
    """Whether every criterion is met or missed beyond doubt."""
    return bool((np.abs(margins(case, run)) > CLEAR * errors_of(run)).all())


def carry_out(searches: Sequence[LimitSearch], mapper: Mapper) -> None:
    """Run what the searches want until none of them wants any more."""

    def one(unit: tuple[int, int, int, int, int]) -> Refits:
        which, p, place, number, part = unit
        return searches[which].batch(p, number, place, part)

    while True:
        wanted = [(k, *next_one) for k, each in enumerate(searches) if (next_one := each.wanted())]
        if not wanted:
            return
        units = [
            (k, p, place, number, part)
            for k, p, place in wanted
            for number in range(SUPPORTS)
            for part in range(len(searches[k].parts(place)))
        ]
        done = iter(mapper(one, units))
        for k, p, place in wanted:
            count = len(searches[k].parts(place))
            several = [[next(done) for _ in range(count)] for _ in range(SUPPORTS)]
            searches[k].take(p, [joined(parts) for parts in several])


def run_law(
    case: Case, law: ErrorLaw, name: str, grid: Sequence[int], mapper: Mapper,
    case_of: CaseOf | None = None,
) -> tuple[StressRun, ...]:  # fmt: skip
    """All refits at every number of columns of a grid, under one law."""
    search = LimitSearch(case, law, name, grid, case_of, early=False, halving=False)
    carry_out([search], mapper)
    return search.runs


def limit_of(
    case: Case, law: ErrorLaw, grid: Sequence[int], mapper: Mapper, case_of: CaseOf | None = None
) -> float:
    """The limit on a grid without its band, with as few refits as decide it; inf: not reached."""
    search = LimitSearch(case, law, "search", grid, case_of, band=False)
    carry_out([search], mapper)
    return search.limit()
