"""The budget: all limits together, what they allow, and which of them binds."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

from scantling.core.estimate import Estimate
from scantling.design.spec import TargetSpec
from scantling.planning.breakthrough import BreakThrough, CurvePoint
from scantling.planning.ceiling import Ceiling
from scantling.planning.effects import EffectEntry
from scantling.planning.limit import AT_LEAST, Limit, band
from scantling.planning.rows import RowsEntry, RowsPlan
from scantling.planning.signal import Signal
from scantling.simulation.scores import penalty_level


@dataclass(frozen=True, slots=True, kw_only=True)
class Allowed:
    """Columns allowed: the smallest of the noise, signal and stability limits."""

    columns: int | None
    """None if one of the limits could not be computed."""
    low: int | None
    """5 % point of the smallest limit over draws of the law."""
    high: int | None
    """None if beyond the largest number examined."""
    note: str = ""
    """'at least' if no limit was reached; the reason if it could not be computed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """How many columns the rows can carry."""

    asked: int
    """Columns the design asks for."""
    rows: int
    """n."""
    noise: Limit
    """Limit by break-through risk."""
    signal: Limit
    """Limit by the smallest detectable effect."""
    stability: Limit
    """Limit by refits under fresh errors."""
    geometry: Limit
    """The stability limit under the Gaussian twin."""
    assured: Limit
    """Columns proved, or why none are given."""
    ceiling: Ceiling
    """Rate that theory covers."""
    allowed: Allowed
    """The smallest of noise, signal and stability limit."""
    binding: str | None
    """noise | signal | stability; None if no limit is reached or one is missing."""
    level: float
    """L(p) at the columns asked for, in root mean squares of the errors over the root of n."""
    risk_at_design: Estimate
    """Break-through risk at the columns asked for."""
    draws: int
    """Draws of errors behind its point value."""
    curve: tuple[CurvePoint, ...] = field(repr=False)
    """Break-through risk over p."""
    penalty_ratio: float | None
    """Needed penalty over the Gaussian twin's; None if no quantile was found."""
    equivalent_rows: int | None
    """n / penalty ratio squared, never above n."""
    rows_needed: int | None
    """Fewest rows from which `asked` columns are allowed by every limit, at all larger tried."""
    rows_range: tuple[int, int | None] | None = None
    """Rows needed within and beyond simulation error; an open end is None; None: not known."""
    rows_note: str
    """Why `rows_needed` is None; empty otherwise."""
    rows_plan: RowsPlan | None = None
    """Rows needed by limit and allowed columns by rows; None where they were not computed."""
    effects: tuple[EffectEntry, ...] = ()
    """Allowed columns by smallest effect and relevant columns; empty where not computed."""
    detectable: float | None
    """Smallest detectable effect, median column, sd of the response."""
    detectable_worst: float | None
    """The same for the worst tenth of columns."""
    worst_columns: tuple[int, ...]
    """Columns by share of the break-throughs, largest first."""
    worst_shares: tuple[float, ...]
    """Those shares."""


WITHIN = "within budget"
BORDERLINE = "borderline"
OVER = "over budget"


def standing(allowed: Allowed, asked: int) -> str:
    """within budget if asked lies at or below the band, over budget above it, else borderline."""
    if allowed.low is not None and asked <= allowed.low:
        return WITHIN
    if allowed.high is not None and asked > allowed.high:
        return OVER
    return BORDERLINE


def combine(limits: dict[str, Limit], most: int) -> tuple[Allowed, str | None]:
    """Smallest of the limits with its band, and the name of the one that attains it.

    The band is that of the smallest limit under each draw of the law, all limits being taken
    under the same draw.
    """
    for name, limit in limits.items():
        if limit.columns is None:
            return Allowed(columns=None, low=None, high=None, note=f"{name}: {limit.note}"), None
    draws = [min(values) for values in zip(*(x.draws for x in limits.values()), strict=True)]
    low, high = band(draws)
    columns = min(limit.columns for limit in limits.values() if limit.columns is not None)
    low, high = min(low, columns), max(high, columns)  # a band contains its point
    reached = {name: limit for name, limit in limits.items() if limit.reached}
    binding = min(reached, key=lambda name: reached[name].columns or 0) if reached else None
    allowed = Allowed(
        columns=columns,
        low=most if math.isinf(low) else int(low),
        high=None if math.isinf(high) or not binding else int(high),
        note="" if binding else AT_LEAST,
    )
    return allowed, binding


def assemble(
    *, rows: int, asked: int, noise: BreakThrough, signal: Signal, stability: Limit,
    geometry: Limit, ceiling: Ceiling, assured: Limit, target: TargetSpec,
    plan: RowsPlan | None = None,
    effects: tuple[EffectEntry, ...] = (), refits: bool = True,
) -> Budget:  # fmt: skip
    """Put the limits together; without refits asked for, noise and signal are all there is."""
    limits = {"noise": noise.noise, "signal": signal.limit}
    if plan is not None and noise.noise.mode == "generative":
        own = (noise.noise, signal.limit, stability)
        table = tuple(_answered(entry, rows, own, noise.curve[-1].risk) for entry in plan.table)
        plan = replace(plan, table=table)
    allowed, binding = combine(limits | ({"stability": stability} if refits else {}), asked)
    last = noise.curve[-1]
    return Budget(
        asked=asked,
        rows=rows,
        noise=noise.noise,
        signal=signal.limit,
        stability=stability,
        geometry=geometry,
        assured=assured,
        ceiling=ceiling,
        allowed=allowed,
        binding=binding,
        level=float(penalty_level(asked, target.risk)),
        risk_at_design=Estimate(value=last.risk, low=last.low, high=last.high),
        draws=noise.fitted.found.draws,
        curve=noise.curve,
        penalty_ratio=noise.penalty_ratio,
        equivalent_rows=noise.equivalent_rows,
        rows_needed=None if plan is None else plan.needed.rows,
        rows_range=None
        if plan is None or plan.needed.low is None
        else (plan.needed.low, plan.needed.high),
        rows_note="rows needed were not searched" if plan is None else plan.needed.note,
        rows_plan=plan,
        effects=tuple(_agreeing(entry, target, allowed, binding) for entry in effects),
        detectable=signal.detectable,
        detectable_worst=signal.detectable_worst,
        worst_columns=noise.worst_columns,
        worst_shares=noise.worst_shares,
    )


def _agreeing(
    entry: EffectEntry, target: TargetSpec, allowed: Allowed, binding: str | None
) -> EffectEntry:
    """The entry; at the target asked for the answer itself, with more refits behind it."""
    same = entry.relevant == target.relevant and math.isclose(
        entry.smallest_effect, target.smallest_effect, abs_tol=1e-4
    )
    if not same or allowed.columns is None or entry.allowed is None:
        return entry
    return replace(entry, allowed=allowed.columns, binding=binding)


def _answered(
    entry: RowsEntry, rows: int, limits: tuple[Limit, Limit, Limit], risk: float
) -> RowsEntry:
    """The table's entry; at the present rows the limits themselves, with more draws behind them."""
    if entry.rows != rows:
        return entry
    noise, signal, stability = (limit.columns for limit in limits)
    known = [value for value in (noise, signal, stability) if value is not None]
    return replace(
        entry,
        noise=noise,
        signal=signal,
        stability=stability,
        allowed=min(known) if len(known) == len(limits) else None,
        risk=risk,
    )
