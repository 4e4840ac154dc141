"""Refits of the design's own regression to fresh responses: what each of them selects.

One batch is a number of responses on one set of relevant columns; batches of the same set are
joined, and sets are pooled, into one run with its criteria.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case
from scantling.simulation.lasso import solve_batch
from scantling.simulation.rules import LEVEL_RULES, select_batch
from scantling.simulation.scores import centre, penalty_level
from scantling.simulation.selection import (
    Measured,
    SelectionSummary,
    pool_summaries,
    summarise_selection,
)

TOLERANCE = 1e-5
"""Duality gap of the refits, relative; selections no longer change below it."""

IntArray = NDArray[np.int32]


@dataclass(frozen=True, slots=True, kw_only=True)
class SupportSet:
    """One set of relevant columns, nested in the columns taken at every p."""

    order: NDArray[np.int64]
    """All P columns in the order they are taken; the relevant ones come first."""
    signs: FloatArray
    """Signs of the relevant coefficients."""


def support_set(case: Case, number: int) -> SupportSet:
    """Order of the columns and random signs, from their own stream.

    Relevant are columns of `case.relevant_columns`, at random where there are more of them than
    the target's `relevant`, filled up at random where there are fewer.
    """
    rng = stream(case.seed, "support", number)
    relevant = min(case.target.relevant, case.columns)
    order = rng.permutation(case.columns)
    if case.relevant_columns:
        first = order[np.isin(order, case.relevant_columns)][:relevant]
        order = np.concatenate([first, order[~np.isin(order, first)]])
    return SupportSet(order=order, signs=rng.choice([-1.0, 1.0], size=relevant))


@dataclass(frozen=True, slots=True, kw_only=True)
class Refits:
    """What refits on one set of relevant columns select; the relevant columns come first."""

    columns: int
    """p, the candidate columns."""
    relevant: int
    """How many of them matter."""
    replicates: int
    """R, the refits."""
    refit: IntArray
    """Of each column selected: by which refit."""
    column: IntArray
    """And its place among the candidates."""
    wrong: IntArray
    """Relevant columns selected with the wrong sign, shape (R,)."""
    loss: FloatArray
    """Mean squared error of the fitted values about the true mean, shape (R,)."""
    oracle: FloatArray
    """The same of least squares on the relevant columns, shape (R,)."""

    def table(self) -> NDArray[np.bool_]:
        """Selections, shape (R, p)."""
        out = np.zeros((self.replicates, self.columns), dtype=np.bool_)
        out[self.refit, self.column] = True
        return out

    def summary(self) -> SelectionSummary:
        """Criteria of these refits alone."""
        truth = np.arange(self.columns) < self.relevant
        return summarise_selection(
            self.table(), truth, wrong_signs=self.wrong, loss=self.loss, oracle=self.oracle
        )

    def frequencies(self) -> FloatArray:
        """Share of refits that select each relevant column, shape (relevant,)."""
        hits = self.column[self.column < self.relevant]
        return np.bincount(hits, minlength=self.relevant) / self.replicates


def joined(parts: Sequence[Refits]) -> Refits:
    """Batches on the same relevant columns as one."""
    first = parts[0]
    starts = np.cumsum([0, *(part.replicates for part in parts)])
    return Refits(
        columns=first.columns,
        relevant=first.relevant,
        replicates=int(starts[-1]),
        refit=np.concatenate(
            [part.refit + np.int32(start) for part, start in zip(parts, starts, strict=False)]
        ),
        column=np.concatenate([part.column for part in parts]),
        wrong=np.concatenate([part.wrong for part in parts]),
        loss=np.concatenate([part.loss for part in parts]),
        oracle=np.concatenate([part.oracle for part in parts]),
    )


def refit(
    case: Case, chosen: SupportSet, p: int, law: ErrorLaw, size: int, rng: np.random.Generator
) -> Refits:
    """Refit to `size` fresh responses on the first p columns of a support set.

    Errors are scaled to the residual sd; the penalty is the rule's, with loadings from the
    draw itself.
    """
    X, mean = mean_of(case, chosen, p)
    relevant = min(chosen.signs.size, p)
    errors = scaled_errors(case, law, size, rng)
    found = coefficients(case, X, mean[:, None] + errors, errors)
    refits, columns = np.nonzero(found.T)
    wrong = found[:relevant] * chosen.signs[:relevant, None] < 0
    used = np.union1d(columns, np.arange(relevant))
    fitted = X[:, used] @ found[used]
    basis = np.linalg.qr(X[:, :relevant])[0]
    return Refits(
        columns=p,
        relevant=relevant,
        replicates=size,
        refit=refits.astype(np.int32),
        column=columns.astype(np.int32),
        wrong=wrong.sum(axis=0, dtype=np.int32),
        loss=((fitted - mean[:, None]) ** 2).mean(axis=0),
        oracle=((basis.T @ errors) ** 2).sum(axis=0) / case.rows,
    )


def mean_of(case: Case, chosen: SupportSet, p: int) -> tuple[FloatArray, FloatArray]:
    """The first p columns of a support set, and the mean of the responses on them."""
    relevant = min(chosen.signs.size, p)
    X = case.X[:, chosen.order[:p]]
    effect = case.target.smallest_effect * case.response_sd
    return X, X[:, :relevant] @ (effect * chosen.signs[:relevant])


def coefficients(case: Case, X: FloatArray, Y: FloatArray, errors: FloatArray) -> FloatArray:
    """What the design's own rule and loss give for each response, shape (p, R)."""
    if case.rule not in LEVEL_RULES or case.loss != "squared" or case.adaptive:
        return select_batch(
            X, Y, rule=case.rule, loss=case.loss, errors=errors, risk=case.target.risk,
            adaptive=case.adaptive, time_ordered=case.time_ordered, seed=case.seed, tol=TOLERANCE,
        ).coefficients  # fmt: skip
    level = float(penalty_level(X.shape[1], case.target.risk)) / math.sqrt(case.rows)
    if case.rule == "self-normalised":
        weights = level * np.sqrt((X**2).T @ errors**2 / case.rows)
    else:
        weights = level * np.sqrt((errors**2).mean(axis=0))
    return solve_batch(X, Y, weights, tol=TOLERANCE)[0]


def scaled_errors(case: Case, law: ErrorLaw, size: int, rng: np.random.Generator) -> FloatArray:
    """Centred errors as loud as the residuals, in a typical draw; of a stated law at its own sd.

    A fitted law's own sd would not do: near two moments it is ruled by errors that hardly any
    sample has. A stated one says what its sd is, whatever most samples show of it.
    """
    errors = centre(case.draw_errors(law, size, rng))
    if case.law.spread is None and math.isfinite(law.sd):
        return errors * (case.residual_sd / law.sd)
    return np.asarray(errors * (case.residual_sd / np.median(np.sqrt((errors**2).mean(axis=0)))))


@dataclass(frozen=True, slots=True, kw_only=True)
class StressRun:
    """Selection statistics at one number of columns under one law; intervals of 90 %."""

    rows: int
    """n."""
    columns: int
    """Candidate columns of the refits."""
    law: str
    """fitted | twin | normal-volatility."""
    rule: str
    """Penalty rule of the refits."""
    mode: str
    """conditional | generative."""
    support: str
    """Which columns are relevant: random | pilot | named."""
    replicates: int
    """Refits."""
    replicates_asked: int
    """Refits there might have been: fewer were run where every criterion was clear before."""
    stability: Measured
    """Stability index; 0 if nothing is ever selected, 1 if everything always is."""
    power: Measured
    """Mean share of relevant columns selected."""
    false_share: Measured
    """Mean share of false columns among the selected."""
    exact: Measured
    """Share of refits that select exactly the relevant columns."""
    sign_errors: Measured
    """Mean share of relevant columns selected with the wrong sign."""
    size: Measured
    """Columns selected on average."""
    prediction_loss: Measured | None
    """Mean squared error of the refits' fitted values over that of least squares on the relevant
    columns; None where that has none."""
    inclusion: tuple[tuple[int, float], ...]
    """Of each column relevant in some set: its number, and the share of refits that select it."""

    @property
    def inclusion_range(self) -> tuple[float, float, float]:
        """Smallest, median and largest share of refits that select a relevant column."""
        shares = [share for _, share in self.inclusion]
        return min(shares), float(np.median(shares)), max(shares)


def run_of(
    case: Case, name: str, parts: Sequence[Refits], supports: Sequence[SupportSet], asked: int
) -> StressRun:
    """Refits of every support set as one run."""
    summary = pool_summaries([part.summary() for part in parts])
    shares: dict[int, list[float]] = {}
    for part, chosen in zip(parts, supports, strict=True):
        for column, share in zip(chosen.order, part.frequencies(), strict=False):
            shares.setdefault(int(column), []).append(float(share))
    return StressRun(
        rows=case.rows,
        columns=parts[0].columns,
        law=name,
        rule=case.rule,
        mode=case.mode,
        support=case.support,
        replicates=summary.replicates,
        replicates_asked=asked,
        stability=stability_of(summary),
        power=summary.power,
        false_share=summary.false_share,
        exact=summary.exact,
        sign_errors=summary.sign_errors,
        size=summary.size,
        prediction_loss=summary.prediction_loss,
        inclusion=tuple((j, sum(shares[j]) / len(shares[j])) for j in sorted(shares)),
    )


def stability_of(summary: SelectionSummary) -> Measured:
    """The stability index, also where it is not defined.

    Where nothing is ever selected it counts as 0, where every column always is as 1: it is the
    same selection each time.
    """
    if summary.stability is not None:
        return summary.stability
    constant = float(summary.size.value > 0)
    return Measured(value=constant, low=constant, high=constant, error=0.0)
