"""The budget of a design that exists only on paper: rows, columns and laws, no data."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from scipy.stats import norm

from scantling.core.checks import between
from scantling.core.estimate import Estimate
from scantling.core.record import FloatArray
from scantling.core.streams import MEMORY_BOUND, Mapper, blocks, stream, worker_pool
from scantling.errors import InputError
from scantling.law.families import ErrorLaw, normal_law
from scantling.law.notation import parse_law
from scantling.planning.breakthrough import CurvePoint, curve_points, needed_penalty
from scantling.planning.budget import ASSURED_NOTE, Budget, combine
from scantling.planning.case import LAW_DRAWS, column_grid
from scantling.planning.ceiling import rate_by_regime
from scantling.planning.limit import Limit, last_below, make_limit, missing_limit
from scantling.planning.signal import MOST_TIMES_ROWS
from scantling.simulation.scores import (
    RULES,
    Passers,
    centre,
    first_above,
    join,
    largest_quantile,
    passers,
    penalty_level,
    ranked,
    risk_curves,
    score_ratios,
)

MODE = "generative"
CELLS = 40_000_000
"""Most values drawn for columns: beyond it several errors share a table of columns."""
FEWEST_TABLES = 8
FLOOR = 1.4
"""Ratios kept, or those above L(1) where that is lower."""
NOT_SIMULATED = "selection is not simulated for a design on paper in this version"


def budget(
    *,
    rows: int,
    columns: int,
    law: ErrorLaw | str,
    column_law: ErrorLaw | str | None = None,
    rule: str = "plug-in",
    risk: float = 0.05,
    smallest_effect: float = 0.15,
    power: float = 0.80,
    explained: float = 0.0,
    replicates: int = 400,
    seed: int = 1,
    workers: int = 1,
) -> Budget:
    """How many columns so many rows can carry, for independent columns of a named law.

    Parameters
    ----------
    rows, columns : int
        n (at least 30) and the p asked for.
    law : ErrorLaw or str
        Of the errors: 'normal', 'student-t:df=3', or a fitted law.
    column_law : ErrorLaw or str, optional
        Of the columns; default: that of the errors, as lags of the response would have.
    rule : {'plug-in', 'self-normalised'}
    risk : float
        Accepted break-through risk.
    smallest_effect : float
        To be detected, sd of the response per sd of a column.
    power : float
    explained : float
        Share of the response's variance that the relevant columns explain.
    replicates : int
        Draws of errors, each with fresh columns where that is affordable.
    seed, workers : int

    Returns
    -------
    Budget
        Mode 'generative'. Allowed columns are the smaller of noise and signal limit; stability
        and geometry are null with a note. Bands hold simulation error only: the law is stated.

    Raises
    ------
    InputError
        If an argument is out of range, or the table would exceed the memory bound.
    """
    rows, columns = _whole(rows, "rows", 30), _whole(columns, "columns", 1)
    replicates = _whole(replicates, "replicates", 50)
    seed, workers = _whole(seed, "seed", 0), _whole(workers, "workers", 1)
    risk = between(risk, "risk", 0, 0.5)
    power = between(power, "power", 0, 1)
    explained = between(explained, "explained", 0, 1 - 1e-9, closed=True)
    smallest_effect = between(smallest_effect, "smallest_effect", 0, 5)
    if rule not in RULES:
        raise InputError(f"rule: one of {', '.join(RULES)} is needed; found {rule!r}")
    table = _table_bytes(rows, columns, replicates)
    errors = _law(law, "law")
    drawn = errors if column_law is None else _law(column_law, "column_law")
    floor = min(FLOOR, float(penalty_level(1, risk)))
    twin = normal_law(errors.sd if math.isfinite(errors.sd) else 1.0)
    # Each worker holds a table: no more of them than the bound allows.
    with worker_pool(min(workers, MEMORY_BOUND // table)) as mapper:
        (found, loading), (alike, twin_loading) = simulate(
            rows, columns, (errors, twin), drawn, rule, replicates, seed, mapper, floor
        )
    noise, curve = _noise(found, together(rows, columns, replicates), risk, seed)
    ratio = _ratio(found, alike, columns, risk, rule, loading / twin_loading)
    signal, detectable, needed, note = _signal(
        found, rows, columns, errors, loading, risk, smallest_effect, power, explained
    )
    allowed, binding = combine({"noise": noise, "signal": signal}, columns)
    last = curve[-1]
    tails = (min(errors.tail_index, drawn.tail_index),) * 3
    return Budget(
        asked=columns,
        rows=rows,
        noise=noise,
        signal=signal,
        stability=missing_limit(NOT_SIMULATED, mode=MODE),
        geometry=missing_limit(NOT_SIMULATED, mode=MODE),
        assured=missing_limit(ASSURED_NOTE, mode=MODE),
        ceiling=rate_by_regime(
            rows=rows,
            rule=rule,
            heavy_share=float(math.isfinite(drawn.tail_index)),
            errors=(errors.tail_index,) * 3,
            scores=tails,
        ),
        allowed=allowed,
        binding=binding,
        risk_at_design=Estimate(value=last.risk, low=last.low, high=last.high),
        draws=found.draws,
        curve=curve,
        penalty_ratio=ratio,
        equivalent_rows=None if ratio is None else int(rows / max(1.0, ratio) ** 2),
        rows_needed=needed,
        rows_note=note,
        detectable=detectable,
        detectable_worst=detectable,
        worst_columns=(),
        worst_shares=(),
    )


def _whole(value: Any, name: str, least: int) -> int:
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
        raise InputError(f"{name}: a whole number of at least {least} is needed; found {value!r}")
    return int(value)


def _law(law: Any, name: str) -> ErrorLaw:
    if isinstance(law, str):
        return parse_law(law, name)
    if not isinstance(law, ErrorLaw):
        raise InputError(
            f"{name}: a fitted law, or text such as 'student-t:df=3', is needed; found {law!r}"
        )
    return law


def _table_bytes(rows: int, columns: int, replicates: int) -> int:
    """Bytes one worker needs for a table of columns with the ratios kept; refused above the bound.

    Four copies of the table, and of two samples the share of ratios above the floor.
    """
    size = 32 * rows * columns + 8 * columns * replicates
    if size > MEMORY_BOUND:
        raise InputError(
            f"columns: {columns:,} columns of {rows:,} rows and {replicates:,} replicates need"
            f" {size / 2**30:.1f} GiB; the bound is {MEMORY_BOUND / 2**30:.0f} GiB"
        )
    return size


def together(rows: int, columns: int, replicates: int) -> int:
    """How many draws of errors share one table of columns: 1 where fresh ones are affordable."""
    affordable = CELLS // (rows * columns)
    return math.ceil(replicates / min(replicates, max(FEWEST_TABLES, affordable)))


def simulate(
    rows: int, columns: int, laws: tuple[ErrorLaw, ...], drawn: ErrorLaw, rule: str,
    replicates: int, seed: int, mapper: Mapper, floor: float,
) -> list[tuple[Passers, float]]:  # fmt: skip
    """Score ratios above the floor and the typical loading, for errors of each law.

    Columns are fresh, and the same for all laws.
    """
    parts = blocks(replicates, together(rows, columns, replicates))

    def one(unit: int) -> list[tuple[Passers, FloatArray]]:
        start, stop = parts[unit]
        X = drawn.draw((rows, columns), stream(seed, "stated columns", unit))
        X -= X.mean(axis=0)
        X /= np.sqrt((X**2).mean(axis=0))
        out = []
        for law in laws:
            e = law.draw((rows, stop - start), stream(seed, "stated errors", unit))
            ratios, loadings = score_ratios(X, centre(e), rule)
            out.append((passers(ratios, floor), np.median(loadings, axis=0)))
        return out

    by_law = zip(*mapper(one, range(len(parts))), strict=True)
    return [
        (
            join([found for found, _ in done]),
            float(np.median(np.concatenate([loadings for _, loadings in done]))),
        )
        for done in by_law
    ]


def _noise(
    found: Passers, shared: int, risk: float, seed: int
) -> tuple[Limit, tuple[CurvePoint, ...]]:
    """Noise limit and risk curve; bands by resampling tables, each with the draws that share it."""
    table = np.arange(found.draws) // shared
    tables = int(table[-1]) + 1
    rng = stream(seed, "resampled draws")
    picks = np.array(
        [np.bincount(rng.integers(tables, size=tables), minlength=tables) for _ in range(LAW_DRAWS)]
    )
    weights = picks[:, table].astype(np.float64)
    weights *= found.draws / weights.sum(axis=1, keepdims=True)
    curve, many = risk_curves(found, risk)[0], risk_curves(found, risk, weights)
    noise = make_limit(
        first_above(curve, risk), [first_above(each, risk) for each in many], found.columns,
        mode=MODE,
    )  # fmt: skip
    return noise, curve_points(curve, many, column_grid(found.columns))


def _ratio(
    found: Passers, twin: Passers, columns: int, risk: float, rule: str, loadings: float
) -> float | None:
    if rule == "self-normalised":
        needed = [needed_penalty(sample, columns, risk) for sample in (found, twin)]
        return needed[0] / needed[1] * loadings
    quantiles = [largest_quantile(sample, columns, 1 - risk) for sample in (found, twin)]
    if quantiles[0] is None or quantiles[1] is None:
        return None
    return quantiles[0] / quantiles[1]


def _signal(
    found: Passers, rows: int, columns: int, errors: ErrorLaw, loading: float, risk: float,
    smallest_effect: float, power: float, explained: float,
) -> tuple[Limit, float | None, int | None, str]:  # fmt: skip
    """Signal limit, detectable effect at the columns asked for, rows needed and their note."""
    if not math.isfinite(errors.sd):
        reason = "the error law has no variance"
        return missing_limit(reason, mode=MODE), None, None, reason
    response_sd = errors.sd / math.sqrt(1 - explained)
    added = float(norm.ppf(power)) * errors.sd

    table = ranked(found)

    def effect(p: int) -> float:
        needed = needed_penalty(table, p, risk)
        return (needed * loading + added) / (math.sqrt(rows) * response_sd)

    detectable = effect(columns)
    if detectable <= smallest_effect:
        point = math.inf
    elif effect(1) > smallest_effect:
        point = 0.0
    else:
        point = float(last_below(lambda p: effect(p) <= smallest_effect, 1, columns))
    level = float(penalty_level(columns, risk))
    needed = math.ceil(max(rows * (detectable / smallest_effect) ** 2, 4 * level**2))
    note = ""
    if needed > MOST_TIMES_ROWS * rows:
        note = f"not within {MOST_TIMES_ROWS} times the present rows, at the present penalty"
    limit = make_limit(point, [point] * LAW_DRAWS, columns, mode=MODE)
    return limit, detectable, None if note else needed, note
