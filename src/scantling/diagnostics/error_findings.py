"""What one series of errors says by itself: tails, moments, dependence; shared by the battery
of a design and the diagnosis of a bare series."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.autoregression import Autoregression, Levels
from scantling.diagnostics.clustering import Clustering, find_dependence
from scantling.diagnostics.dependence import (
    LEVEL,
    TestResult,
    arch_lm,
    ljung_box,
    mcleod_li,
    robust_ljung_box,
)
from scantling.diagnostics.extremes import (
    ExtremeClustering,
    effective_rows,
    effective_rows_reference,
    extreme_clustering,
    tail_effective_rows,
    tail_effective_rows_reference,
)
from scantling.diagnostics.moments import ORDERS, MomentAnswer, moment_answer
from scantling.diagnostics.second_opinion import Opinion, second_opinions
from scantling.diagnostics.tail_index import TailIndex, tail_index
from scantling.errors import InputError

ORDINALS = {2: "2nd moment", 4: "4th moment"}
SIDED_ROWS = 500
"""Rows from which left and right tails are told apart."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """A test, and whether the moment it needs is granted."""

    result: TestResult
    """The test's name, statistic and p-value."""
    valid: bool
    """Whether the conditions of the test's p-value are granted by the diagnosis."""
    lacks: str = ""
    """What is not granted; empty if valid."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Worth:
    """What values in time order are worth: extremes that come together count once."""

    extremes: ExtremeClustering | None
    """Clustering of the largest values; None where ties leave too few."""
    rows: float
    """Independent values whose mean would be as exact."""
    tail_rows: float
    """Independent values whose tail index would be as exact."""
    rows_reference: float
    """What 5 % of random orders of the values fall to or below: no loss is shown from there on."""
    tail_rows_reference: float
    """The same for the tail index."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ErrorFindings:
    """Tails, moments and dependence of one series."""

    tail: TailIndex | None
    """Both sides; None if it could not be assessed."""
    note: str
    """Why it could not be, or what was done to the series first."""
    sides: tuple[TailIndex, ...]
    """Left and right; empty below 500 values."""
    opinions: tuple[Opinion, ...]
    """Two estimators of other kinds; empty where there is no index."""
    moments: tuple[MomentAnswer, ...]
    """Orders 1, 2, 3, 4."""
    granted: frozenset[int]
    """Orders found to exist."""
    dependence: tuple[Finding, ...]
    """Tests of dependence; empty where values have no order."""
    levels: Levels | None
    """Whether the level persists from row to row; None where values have no order."""
    clustering: Clustering | None
    """Of the shocks, where the level persists; None where values have no order."""
    worth: Worth | None
    """None where values have no order or no index."""

    @property
    def autoregression(self) -> Autoregression | None:
        """Of the levels, where they persist."""
        return None if self.levels is None else self.levels.autoregression

    @property
    def clustered(self) -> bool:
        """Whether volatility clustering was found."""
        return self.clustering is not None and self.clustering.test.p_value <= LEVEL


def error_findings(values: FloatArray, *, time_ordered: bool, seed: int) -> ErrorFindings:
    """Everything about one series that needs no columns.

    Parameters
    ----------
    values : array, shape (n,), n >= 30
    time_ordered : bool
        Whether they follow one another in time.
    seed : int
        Of permutations and tie-breaking noise.
    """
    centred = values - values.mean()
    tail, sides, note = error_tails(values, seed)
    levels, clustering = find_dependence(centred, seed=seed) if time_ordered else (None, None)
    volatility = None if clustering is None else clustering.volatility
    implied = None if volatility is None else volatility.tail_index
    decisive = None if tail is None else heavier_side(tail, sides)
    moments = error_moments(values, decisive, note, implied, seed)
    granted = frozenset(int(m.order) for m in moments if m.answer == "exists")
    dependence: tuple[Finding, ...] = ()
    if clustering is not None and levels is not None:
        steady = clustering.test.p_value > LEVEL
        results = (*level_tests(centred, levels), *size_tests(levels.shocks(centred), clustering))
        dependence = judged(results, granted, steady=steady)
    return ErrorFindings(
        tail=tail,
        note=note,
        sides=sides,
        opinions=() if tail is None else second_opinions(values, tail),
        moments=moments,
        granted=granted,
        dependence=dependence,
        levels=levels,
        clustering=clustering,
        worth=worth(values, seed=seed) if time_ordered and tail is not None else None,
    )


def worth(values: FloatArray, *, seed: int) -> Worth:
    """Effective rows of a series in time order, for means, for its tail, and of its extremes.

    Parameters
    ----------
    values : array, shape (n,), n >= 30
        A series that has a tail index.
    seed : int
        Of the tie-breaking noise.
    """
    try:
        extremes = extreme_clustering(values)
    except InputError:
        extremes = None  # ties at the threshold: nothing lies strictly beyond it
    return Worth(
        extremes=extremes,
        rows=effective_rows(values),
        tail_rows=tail_effective_rows(values, seed=seed),
        rows_reference=effective_rows_reference(values, seed=seed),
        tail_rows_reference=tail_effective_rows_reference(values, seed=seed),
    )


def error_tails(e: FloatArray, seed: int) -> tuple[TailIndex | None, tuple[TailIndex, ...], str]:
    """Tail of a series on both sides, left and right from 500 rows on, and what was done to it."""
    try:
        errors = tail_index(e, seed=seed)
    except InputError as reason:
        return None, (), str(reason).removeprefix("values: ")
    if e.size < SIDED_ROWS:
        return errors, (), errors.note
    sides = tuple(tail_index(e, side=side, seed=seed) for side in ("left", "right"))
    return errors, sides, errors.note


def error_moments(
    e: FloatArray, errors: TailIndex | None, note: str, implied: float | None, seed: int
) -> tuple[MomentAnswer, ...]:
    """Moment answers at orders 1 to 4; all unclear where there is no tail index."""
    if errors is None:
        return tuple(MomentAnswer(order=q, answer="unclear", reason=note) for q in ORDERS)
    return tuple(
        moment_answer(e, errors, order, seed=seed, volatility_index=implied) for order in ORDERS
    )


def level_tests(e: FloatArray, levels: Levels) -> tuple[TestResult, ...]:
    """Every test of dependence of the level, the one that decides first."""
    return (levels.test, robust_ljung_box(e), ljung_box(e))


def size_tests(shocks: FloatArray, clustering: Clustering) -> tuple[TestResult, ...]:
    """Every test of dependence of the size, the one that decides first."""
    return (clustering.test, arch_lm(shocks), mcleod_li(shocks))


def judged(
    results: tuple[TestResult, ...], granted: frozenset[int], *, steady: bool = True,
    independent: bool = True,
) -> tuple[Finding, ...]:  # fmt: skip
    """Hold each test's conditions against the diagnosis.

    `steady`: no clustering was found; `independent`: nor errors whose level persists, which
    tests of the variance against columns need.
    """

    def lacks(result: TestResult) -> str:
        if result.method == "permutation":
            return ""
        if not independent:
            return "independent errors"
        if result.needs_moment not in granted:
            return ORDINALS.get(result.needs_moment, f"moment {result.needs_moment}")
        if result.test == "Ljung-Box" and not steady:
            return "constant variance"
        return ""

    return tuple(Finding(result=r, valid=not lacks(r), lacks=lacks(r)) for r in results)


def heavier_side(both: TailIndex, sides: tuple[TailIndex, ...]) -> TailIndex:
    """The tail that decides which moments exist: the heavier one if the two differ.

    They differ if their gammas are more than two joint standard errors apart.
    """
    if len(sides) != 2:
        return both
    left, right = sides
    apart = abs(left.gamma - right.gamma) > 2 * np.hypot(left.gamma_error, right.gamma_error)
    return max(sides, key=lambda side: side.gamma) if apart else both


def heavier_word(both: TailIndex | None, sides: tuple[TailIndex, ...]) -> str:
    """left or right where that side decides; empty where the two are not told apart."""
    if both is None:
        return ""
    side = heavier_side(both, sides).side
    return "" if side == "both" else side
