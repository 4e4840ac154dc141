"""What would help, each change carried out and recomputed by the same engine."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from scantling.core.estimate import Estimate
from scantling.core.record import FloatArray
from scantling.core.streams import Mapper, stream
from scantling.design.expand import expand
from scantling.design.spec import Design, ExpandSpec
from scantling.design.table import Table
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.residuals import Residuals
from scantling.errors import InputError
from scantling.planning.breakthrough import BreakThrough, break_through
from scantling.planning.budget import Allowed, combine, standing
from scantling.planning.case import Case, draw_laws
from scantling.planning.limit import Limit
from scantling.planning.signal import signal
from scantling.planning.stress import stress
from scantling.simulation.scores import (
    column_shares,
    exceeding_counts,
    join,
    penalty_level,
)

REFITTED = 3
"""Remedies for which selection is simulated too: the best by noise and signal."""
STRESS_POINTS = 4
DROP_SHARES = (0.01, 0.02, 0.05, 0.1, 0.15, 0.2, 0.25, 0.3, 0.35, 0.4, 0.5)


@dataclass(frozen=True, slots=True, kw_only=True)
class Remedy:
    """A change of the design, and the budget it would have."""

    name: str
    """The change, in words."""
    columns: int
    """Columns of the changed design."""
    answer: str
    """within budget | borderline | over budget: the changed design by its own columns."""
    allowed: Allowed
    """Of the changed design."""
    binding: str | None
    """Limit that binds the changed design; None if none is reached."""
    risk_at_design: Estimate
    """At all of the changed design's columns."""
    draws: int
    """Draws of errors behind its point value."""
    refitted: bool
    """Whether selection was simulated; if not, `allowed` is of noise and signal alone."""
    dropped: tuple[int, ...]
    """Columns of the present design that it drops by name, worst first."""
    price: str
    """What the change costs, in words."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """A changed case, not yet computed."""

    name: str
    """The change, in words."""
    case: Case
    """The changed design, ready for simulation."""
    price: str
    """What it costs, in words."""
    dropped: tuple[int, ...] = ()
    """Columns dropped by name, worst first."""


def changes(
    design: Design, table: Table, residuals: Residuals, diagnosis: Diagnosis, case: Case,
    noise: BreakThrough,
) -> Iterator[Change]:  # fmt: skip
    """Every change that applies to the design, carried out on the data."""
    if case.rule == "plug-in":
        yield Change(
            name="self-normalised loadings",
            case=replace(case, rule="self-normalised"),
            price="a larger penalty where a large x meets a large error, so less power there",
        )
    yield from _expansions(design, table, case)
    yield from _fewer_columns(diagnosis, case, noise)
    if case.law.volatility is not None:
        yield _weighted(case, residuals)


def _expansions(design: Design, table: Table, case: Case) -> Iterator[Change]:
    spec = design.expand
    other: list[tuple[str, ExpandSpec, str]] = []
    if spec.transform != "normal-scores":
        other.append(
            (
                "normal scores of columns",
                replace(spec, transform="normal-scores"),
                "effects are read per normal score of a column, not per unit",
            )
        )
    for powers in range(spec.powers - 1, 0, -1):
        name = "no powers" if powers == 1 else f"powers up to {powers}"
        other.append((name, replace(spec, powers=powers), "higher powers are not searched"))
    if spec.products:
        other.append(("no products", replace(spec, products=False), "no interactions are searched"))
    for name, changed, price in other:
        try:
            columns = expand(replace(design, expand=changed), table)
        except InputError:
            continue  # the change leaves no usable design; there is nothing to compute
        if columns.values.shape == case.X.shape and np.allclose(columns.values, case.X):
            continue  # as with powers of dummies: the design stays as it is
        yield Change(name=name, case=replace(case, X=columns.values), price=price)


def _fewer_columns(diagnosis: Diagnosis, case: Case, noise: BreakThrough) -> Iterator[Change]:
    broken = diagnosis.scores_without_variance
    if broken and 2 * len(broken) <= case.columns:
        kept = np.setdiff1d(np.arange(case.columns), broken)
        yield Change(
            name=f"drop the {_columns(len(broken))} whose scores lack a variance",
            case=_with_columns(case, kept),
            price="these columns are not searched",
            dropped=broken,
        )
    if noise.noise.reached:
        dropped = worst_to_drop(case, noise)
        if dropped.size:
            kept = np.setdiff1d(np.arange(case.columns), dropped)
            yield Change(
                name=f"drop the {dropped.size:,} worst columns"
                if dropped.size > 1
                else "drop the worst column",
                case=_with_columns(case, kept),
                price="the columns that break through most are not searched",
                dropped=tuple(int(j) for j in dropped),
            )


def _columns(count: int) -> str:
    return "column" if count == 1 else f"{count:,} columns"


def _with_columns(case: Case, kept: np.ndarray) -> Case:
    """The case on some of its columns, with fresh draws: the old ones picked the columns."""
    seed = int(stream(case.seed, "fresh draws").integers(2**62))
    return replace(case, X=np.ascontiguousarray(case.X[:, kept]), seed=seed)


def worst_to_drop(case: Case, noise: BreakThrough) -> np.ndarray:
    """Fewest of the worst columns whose removal brings the risk down to the accepted one.

    Ranked by their break-throughs over all drawn laws; up to half of the columns, at a few
    shares; the largest share examined if none suffices.
    """
    found = join([sample.found for sample in noise.drawn]) if noise.drawn else noise.fitted.found
    risk = case.target.risk
    level = float(penalty_level(case.columns, risk))
    order = np.argsort(-column_shares(found, level), kind="stable")
    count = 0
    for share in DROP_SHARES:
        count = max(1, math.ceil(share * case.columns))
        if count >= case.columns:
            return np.empty(0, dtype=int)
        left = ~np.isin(found.column, order[:count])
        remaining = replace(
            found, column=found.column[left], draw=found.draw[left], ratio=found.ratio[left]
        )
        lower = float(penalty_level(case.columns - count, risk))
        if (exceeding_counts(remaining, lower) > 0).mean() <= risk:
            break
    return np.asarray(order[:count])


def _weighted(case: Case, residuals: Residuals) -> Change:
    volatility = case.law.volatility
    assert volatility is not None
    relative = np.asarray(volatility.path) / math.sqrt(float((volatility.path**2).mean()))
    X = standardise(case.X / relative[:, None])
    # About its mean: a constant over sigma_t is not variation to be explained.
    response = (residuals.fitted - residuals.fitted.mean() + residuals.values) / relative
    law = case.law.without_volatility()
    weighted_errors = residuals.values / relative
    return Change(
        name="weight rows by fitted volatility",
        case=replace(
            case,
            X=X,
            law=law,
            law_draws=draw_laws(law, case.seed),
            response_sd=float(response.std()),
            residual_sd=float(weighted_errors.std()),
        ),
        price="the volatility model is believed; effects are those of weighted rows",
    )


def standardise(X: FloatArray) -> FloatArray:
    """Columns with mean 0 and mean square 1; those that became constant are left out."""
    centred = X - X.mean(axis=0)
    scale = np.sqrt((centred**2).mean(axis=0))
    kept = scale > 1e-10
    return np.asarray(centred[:, kept] / scale[kept])


def remedies(
    design: Design, table: Table, residuals: Residuals, diagnosis: Diagnosis, case: Case,
    noise: BreakThrough, stability: Limit, mapper: Mapper,
) -> tuple[Remedy, ...]:  # fmt: skip
    """All remedies, best first: those whose selection was simulated, by allowed columns.

    Noise and signal are recomputed for all; selection for the best three, and where selection
    is what fails for more of them, until three pass.
    """
    computed = [
        (change, *_limits(change.case, mapper))
        for change in changes(design, table, residuals, diagnosis, case, noise)
    ]

    def rank(item: tuple[Change, dict[str, Limit], BreakThrough]) -> tuple[float, float]:
        allowed, _ = combine(item[1], item[0].case.columns)
        return -(allowed.columns or 0), item[2].curve[-1].risk

    out: list[Remedy] = []
    for place, (change, limits, again) in enumerate(sorted(computed, key=rank)):
        passing = sum(remedy.refitted and bool(remedy.allowed.columns) for remedy in out)
        wanted = place < REFITTED or (stability.reached and passing < REFITTED)
        refitted = wanted and math.isfinite(change.case.law.sd)
        if refitted:
            again_fitted = stress(change.case, mapper, twins=False, points=STRESS_POINTS)
            limits = limits | {"stability": again_fitted.stability}
        out.append(_remedy(change, limits, again, refitted))
    return tuple(
        sorted(
            out,
            key=lambda r: (not r.refitted, -(r.allowed.columns or 0), r.risk_at_design.value),
        )
    )


def _remedy(
    change: Change, limits: dict[str, Limit], noise: BreakThrough, refitted: bool
) -> Remedy:
    allowed, binding = combine(limits, change.case.columns)
    last = noise.curve[-1]
    return Remedy(
        name=change.name,
        columns=change.case.columns,
        answer=standing(allowed, change.case.columns),
        allowed=allowed,
        binding=binding,
        risk_at_design=Estimate(value=last.risk, low=last.low, high=last.high),
        draws=noise.fitted.found.draws,
        refitted=refitted,
        dropped=change.dropped,
        price=change.price,
    )


def _limits(case: Case, mapper: Mapper) -> tuple[dict[str, Limit], BreakThrough]:
    noise = break_through(case, mapper)
    found = signal(case, noise.fitted, noise.drawn)
    return {"noise": noise.noise, "signal": found.limit}, noise
