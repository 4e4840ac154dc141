"""All diagnostics of one design, from residuals and columns to one record."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.autoregression import Autoregression, Levels
from scantling.diagnostics.clustering import NEAR_INTEGRATION, Clustering
from scantling.diagnostics.co_movement import CoMovement, column_co_movement
from scantling.diagnostics.column_levels import first_autocorrelations
from scantling.diagnostics.column_sides import ColumnSides, column_sides
from scantling.diagnostics.column_tails import (
    ColumnTails,
    column_tails,
    find_repeats,
    holm_rejections,
)
from scantling.diagnostics.dependence import LEVEL, TestResult
from scantling.diagnostics.error_findings import (
    Finding,
    Worth,
    error_findings,
    heavier_word,
    judged,
)
from scantling.diagnostics.implied_tails import (
    ImpliedTails,
    Parents,
    implied_score_tails,
    reconciled,
    widened,
)
from scantling.diagnostics.moments import (
    MINIMUM_ROWS,
    ORDERS,
    Z90,
    MomentAnswer,
    interval_answers,
)
from scantling.diagnostics.powers import PowerRule, power_rule
from scantling.diagnostics.residuals import Residuals, levelled_residuals, textbook_residuals
from scantling.diagnostics.second_opinion import Opinion
from scantling.diagnostics.signal_shape import SignalShape, signal_shape
from scantling.diagnostics.structure import Structure, column_structure
from scantling.diagnostics.tail_estimators import hill
from scantling.diagnostics.tail_index import (
    TailIndex,
    block_length,
    index_from_gamma,
    one_side,
)
from scantling.diagnostics.variance import (
    CO_MOVEMENT,
    co_movement_test,
    glejser_permutation,
    koenker,
    scale_suspects,
    white,
)
from scantling.diagnostics.volatility import Volatility

ANSWERS = {1: "exists", -1: "missing", 0: "unclear"}
FEW_VALUES = 10
"""A series of fewer distinct values is bounded."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesGroup:
    """Tails and moments of many series: the columns, or their scores."""

    tails: ColumnTails
    """Tail estimates of the P series."""
    moments: dict[int, np.ndarray]
    """Per order, the answer for each series: 1 exists, -1 missing, 0 unclear; shape (P,)."""
    sides: ColumnSides | None = None
    """Left and right tails; None below 500 rows."""
    implied: ImpliedTails | None = None
    """Of scores: their index as column and errors imply it; None where that is unknown."""
    borrowed: np.ndarray | None = None
    """Of scores: which have the errors' tail, the column being bounded or sparse; (P,), bool."""
    doubted: np.ndarray | None = None
    """Of scores: whose variance the score alone denies and its parents do not; (P,), bool."""

    def answer(self, order: int, series: int) -> str:
        """Answer for one series: exists | missing | unclear."""
        return ANSWERS[int(self.moments[order][series])]


@dataclass(frozen=True, slots=True, kw_only=True)
class Diagnosis:
    """What the data say about tails, moments, variance, dependence and geometry."""

    errors: TailIndex | None
    """Tail of the residuals, both sides; None if it could not be assessed."""
    errors_note: str
    """Why it could not be, or what was done to the series."""
    sides: tuple[TailIndex, ...]
    """Left and right tail of the residuals; empty below 500 rows."""
    opinions: tuple[Opinion, ...]
    """Two estimators of other kinds; empty where there is no index."""
    worth: Worth | None
    """Clustering of the largest residuals and effective rows; None without order or index."""
    error_moments: tuple[MomentAnswer, ...]
    """Orders 1, 2, 3, 4."""
    columns: SeriesGroup
    """Tails and moments of the columns."""
    scores: SeriesGroup
    """Tails and moments of the scores x_ij e_i."""
    weight: tuple[str, ...]
    """heavy | sparse | light, for each column."""
    variance: tuple[Finding, ...]
    """Tests of constant variance."""
    dependence: tuple[Finding, ...]
    """Tests of serial dependence; empty where rows have no order."""
    levels: Levels | None
    """Whether the errors' level persists from row to row; None where rows have no order."""
    clustering: Clustering | None
    """Of the errors' size, of their shocks where the level persists; None without order."""
    co_movement: CoMovement
    """Which columns are large where the errors are."""
    signal: SignalShape
    """Evidence on a sparse against a dense signal."""
    powers: PowerRule | None
    """Which powers of the columns keep their scores' moments; None if an index is unknown."""
    structure: Structure
    """Factors, condition and correlations of the columns."""
    column_levels: FloatArray | None
    """First autocorrelation of each column, shape (P,); None where rows have no order."""
    warnings: tuple[str, ...]
    """Sentences: where the sample looks like a law that defeats the estimators."""

    @property
    def autoregression(self) -> Autoregression | None:
        """Of the errors' levels, where they persist."""
        return None if self.levels is None else self.levels.autoregression

    @property
    def volatility(self) -> Volatility | None:
        """Fitted volatility, if any."""
        return None if self.clustering is None else self.clustering.volatility

    def moment(self, order: int) -> str:
        """Answer for the errors at one order."""
        return next(m.answer for m in self.error_moments if m.order == order)

    @property
    def heavier(self) -> str:
        """The side of the errors that is clearly heavier, left or right; empty if neither."""
        return heavier_word(self.errors, self.sides)

    @property
    def scores_without_variance(self) -> tuple[int, ...]:
        """Columns whose own score lacks a variance."""
        return tuple(int(j) for j in np.flatnonzero(self.scores.moments[2] == -1))


def series_group(series: FloatArray, *, dependent: bool) -> SeriesGroup:
    """Tails and moment answers of every column of `series` (n, P)."""
    repeats = find_repeats(series)
    tails = column_tails(series, dependent=dependent, repeats=repeats)
    width = series.shape[1]
    moments = {order: np.zeros(width, dtype=int) for order in ORDERS}
    known = tails.assessed
    if series.shape[0] >= MINIMUM_ROWS and known.any():
        for order in ORDERS:
            moments[order][known] = interval_answers(
                order,
                *(
                    values[known]
                    for values in (
                        tails.gamma, tails.error, tails.hill_gamma, tails.hill_error,
                        tails.p_value,
                    )
                ),
            )  # fmt: skip
    # A series that takes few values is bounded: all its moments exist.
    for j, reason in tails.refused:
        if "discrete" in reason or np.unique(series[:, j]).size < FEW_VALUES:
            for order in ORDERS:
                moments[order][j] = 1
    return SeriesGroup(
        tails=tails,
        moments=moments,
        sides=column_sides(series, dependent=dependent, repeats=repeats),
    )


def _scores(
    X: FloatArray,
    e: FloatArray,
    columns: ColumnTails,
    errors: TailIndex | None,
    error_moments: tuple[MomentAnswer, ...],
    together: np.ndarray,
    parents: Parents | None,
    *,
    dependent: bool,
) -> SeriesGroup:
    """Tails and moments of x_ij e_i.

    A column that takes few values or is active on few rows is bounded there, so its score has
    the errors' tail, undiluted: it takes the errors' estimates. (Estimated on all rows, the jump
    between active and idle rows would pass for a heavy tail.) The others are held against what
    column and errors imply.
    """
    group = series_group(X * e[:, None], dependent=dependent)
    bounded = columns.sparse.copy()
    bounded[[j for j, _ in columns.refused]] = True
    if errors is None:
        return group
    implied = implied_score_tails(X, columns, errors, together, parents)
    judged_by_both = group.tails.assessed & ~bounded
    tails = widened(group.tails, implied, judged_by_both)
    moments = reconciled(group.moments, implied, judged_by_both)
    own = {
        "gamma": errors.gamma,
        "error": errors.gamma_error,
        "gamma_low": 0.0 if np.isinf(errors.high) else 1 / errors.high,
        "gamma_high": 1 / errors.low,
        "hill_gamma": errors.hill_gamma,
        "hill_error": errors.hill_error,
        "p_value": errors.p_value,
    }
    changed: dict[str, Any] = {}
    for name, value in own.items():
        changed[name] = read_only(np.where(bounded, value, getattr(tails, name)))
    codes = {answer: code for code, answer in ANSWERS.items()}
    for answer in error_moments:
        moments[int(answer.order)][bounded] = codes[answer.answer]
    refused = tuple((j, reason) for j, reason in tails.refused if not bounded[j])
    return replace(
        group,
        tails=replace(tails, refused=refused, **changed),
        moments=moments,
        implied=implied,
        borrowed=bounded,
        doubted=(group.moments[2] == -1) & (moments[2] == 0) & judged_by_both,
    )


def column_weights(columns: ColumnTails) -> tuple[str, ...]:
    """heavy, sparse or light: Holm over the thin-tail tests; sparse counts as heavy later."""
    rejected = holm_rejections(np.asarray(columns.p_value))
    sparse = columns.sparse
    return tuple(
        "sparse" if s else "heavy" if r else "light" for s, r in zip(sparse, rejected, strict=True)
    )


def diagnose(
    X: FloatArray,
    residuals: Residuals,
    *,
    time_ordered: bool,
    seed: int,
    first_powers: np.ndarray | None = None,
    parents: Parents | None = None,
    columns: SeriesGroup | None = None,
    structure: Structure | None = None,
) -> Diagnosis:
    """Run every diagnostic.

    Parameters
    ----------
    X : array, shape (n, P)
        Standardised columns.
    residuals : Residuals
        Of the pilot on the same rows.
    time_ordered : bool
        Whether rows follow one another in time.
    seed : int
        Of permutations and bootstraps.
    first_powers : array of bool, shape (P,), optional
        Which columns are raw ones, neither powers nor products; default: all.
    parents : sequence of tuples of int, optional
        For each column, those whose product it is; default: every column is a raw one.
    columns : SeriesGroup, optional
        Tails and moments of the columns, where they are known already.
    structure : Structure, optional
        Geometry of the columns, where it is known already.
    """
    e = np.asarray(residuals.values)
    own = error_findings(e, time_ordered=time_ordered, seed=seed)
    errors = own.tail
    columns = columns or series_group(X, dependent=time_ordered)
    persistent = own.autoregression is not None
    block = block_length(e.size) if own.clustered or persistent else None
    level = levelled_residuals(X, residuals)
    together = column_co_movement(
        X, level, columns.tails.sparse | ~columns.tails.assessed, seed=seed, block=block
    )
    scores = _scores(
        X,
        e,
        columns.tails,
        errors,
        own.moments,
        np.asarray(together.p_value <= LEVEL),
        parents,
        dependent=time_ordered,
    )
    variance = _variance_tests(X, residuals, level, block, seed)
    return Diagnosis(
        errors=errors,
        errors_note=own.note,
        sides=own.sides,
        opinions=own.opinions,
        worth=own.worth,
        error_moments=own.moments,
        columns=columns,
        scores=scores,
        weight=column_weights(columns.tails),
        variance=judged(variance, own.granted, independent=not persistent),
        dependence=own.dependence,
        levels=own.levels,
        clustering=own.clustering,
        co_movement=together,
        signal=signal_shape(
            X,
            residuals.fitted + e,
            sparse_fitted=residuals.fitted,
            time_ordered=time_ordered,
            seed=seed,
        ),
        powers=_power_rule(columns.tails, errors, variance, first_powers),
        structure=structure or column_structure(X),
        column_levels=first_autocorrelations(X) if time_ordered else None,
        warnings=sample_warnings(
            e, errors, None if own.clustering is None else own.clustering.volatility
        ),
    )


def _power_rule(
    columns: ColumnTails,
    errors: TailIndex | None,
    variance: tuple[TestResult, ...],
    first_powers: np.ndarray | None,
) -> PowerRule | None:
    """The rule for the median column before powers; sizes that move together share volatility."""
    raw = columns.assessed if first_powers is None else columns.assessed & first_powers
    if errors is None or not raw.any():
        return None
    middle = float(np.median(columns.gamma[raw]))
    together = next(test for test in variance if test.test == CO_MOVEMENT)
    return power_rule(
        index_from_gamma(middle), errors.index, shared_volatility=together.p_value <= LEVEL
    )


def _variance_tests(
    X: FloatArray, residuals: Residuals, level: FloatArray, block: int | None, seed: int
) -> tuple[TestResult, ...]:
    e, squares = np.asarray(residuals.values), textbook_residuals(X, residuals)
    suspects = scale_suspects(X, residuals.fitted, residuals.selected)
    return (
        glejser_permutation(e, suspects, seed=seed, block=block),
        co_movement_test(X, level, seed, block=block),
        koenker(squares, suspects),
        white(squares, suspects),
    )


def sample_warnings(
    e: FloatArray, errors: TailIndex | None, volatility: Volatility | None
) -> tuple[str, ...]:
    """Where the sample looks like a law that defeats the estimators: one sentence each."""
    out = []
    if errors is not None:
        # Hill further out, at k = sqrt(n): stable laws look lighter in range than they are.
        k = max(2, int(e.size**0.5))
        outer = float(hill(one_side(e, "both"), k))
        # Neither interval is widened for bias: widened, the warning missed half of them.
        if outer * (1 - Z90 / k**0.5) > errors.gamma + Z90 * errors.gamma_error:
            out.append(
                f"the errors look heavier further out (index {1 / outer:.1f} on the largest"
                f" {k} values): infinite variance is not excluded"
            )
    if volatility is not None and volatility.persistence > NEAR_INTEGRATION:
        out.append(
            f"volatility is nearly integrated (alpha + beta = {volatility.persistence:.3f}):"
            f" tail intervals from the data are too short; the fitted volatility implies index"
            f" {volatility.tail_index:.1f}"
        )
    return tuple(out)
