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
from scantling.planning.breakthrough import CurvePoint, needed_penalty
from scantling.planning.budget import ASSURED_NOTE, Budget, combine
from scantling.planning.case import LAW_DRAWS, column_grid
from scantling.planning.ceiling import rate_by_regime
from scantling.planning.limit import Limit, band, last_below, make_limit, missing_limit
from scantling.planning.signal import MOST_TIMES_ROWS
from scantling.simulation.scores import (
    RULES,
    Passers,
    centre,
    exceeding_counts,
    join,
    largest_quantile,
    none_taken,
    passers,
    penalty_level,
    score_ratios,
)

MODE = "generative"
CELLS = 40_000_000
"""Most values drawn for columns: beyond it several errors share a table of columns."""
FEWEST_TABLES = 8
FLOOR = 1.4
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
    between(risk, "risk", 0, 0.5)
    between(power, "power", 0, 1)
    between(explained, "explained", 0, 1 - 1e-9, closed=True)
    between(smallest_effect, "smallest_effect", 0, 5)
    if rule not in RULES:
        raise InputError(f"rule: one of {', '.join(RULES)} is needed; found {rule!r}")
    if rows * columns * 32 > MEMORY_BOUND:
        raise InputError(
            f"columns: {columns:,} columns of {rows:,} rows need {rows * columns * 32 / 2**30:.1f}"
            f" GiB; the bound is {MEMORY_BOUND / 2**30:.0f} GiB"
        )
    errors = parse_law(law) if isinstance(law, str) else law
    if column_law is None:
        drawn = errors
    else:
        drawn = parse_law(column_law, "column_law") if isinstance(column_law, str) else column_law
    with worker_pool(workers) as mapper:
        found, loading = simulate(rows, columns, errors, drawn, rule, replicates, seed, mapper)
        twin = normal_law(errors.sd if math.isfinite(errors.sd) else 1.0)
        alike, twin_loading = simulate(rows, columns, twin, drawn, rule, replicates, seed, mapper)
    noise, curve = _noise(found, columns, risk, seed)
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


def simulate(
    rows: int, columns: int, errors: ErrorLaw, drawn: ErrorLaw, rule: str, replicates: int,
    seed: int, mapper: Mapper,
) -> tuple[Passers, float]:  # fmt: skip
    """Score ratios over fresh columns and errors, and the typical loading."""
    affordable = CELLS // (rows * columns)
    tables = replicates if affordable >= replicates else max(FEWEST_TABLES, affordable)
    parts = blocks(replicates, math.ceil(replicates / tables))

    def one(unit: int) -> tuple[Passers, FloatArray]:
        start, stop = parts[unit]
        X = drawn.draw((rows, columns), stream(seed, "stated columns", unit))
        X -= X.mean(axis=0)
        X /= np.sqrt((X**2).mean(axis=0))
        e = errors.draw((rows, stop - start), stream(seed, "stated errors", unit))
        ratios, loadings = score_ratios(X, centre(e), rule)
        return passers(ratios, FLOOR), np.median(loadings, axis=0)

    done = mapper(one, range(len(parts)))
    typical = float(np.median(np.concatenate([loadings for _, loadings in done])))
    return join([found for found, _ in done]), typical


def _noise(
    found: Passers, columns: int, risk: float, seed: int
) -> tuple[Limit, tuple[CurvePoint, ...]]:
    """Noise limit and risk curve; their bands by resampling the draws."""
    grid = column_grid(columns)

    def broken_at(p: int) -> FloatArray:
        level = float(penalty_level(p, risk))
        return 1 - none_taken(exceeding_counts(found, level), found.columns, p)

    broken = np.array([broken_at(int(p)) for p in grid])
    rng = stream(seed, "resampled draws")
    picks = [rng.integers(found.draws, size=found.draws) for _ in range(LAW_DRAWS)]

    def limit(pick: np.ndarray) -> float:
        over = np.flatnonzero(broken[:, pick].mean(axis=1) > risk)
        if not over.size:
            return math.inf
        first = int(over[0])
        if first == 0:
            return float(grid[0]) - 1
        good, bad = int(grid[first - 1]), int(grid[first])
        return float(last_below(lambda p: broken_at(p)[pick].mean() <= risk, good, bad))

    every = np.arange(found.draws)
    noise = make_limit(limit(every), [limit(pick) for pick in picks], columns, mode=MODE)
    means = np.array([broken[:, pick].mean(axis=1) for pick in picks])
    ends = [band(means[:, k].tolist()) for k in range(grid.size)]
    return noise, tuple(
        CurvePoint(p=int(p), risk=float(r), low=low, high=high)
        for p, r, (low, high) in zip(grid, broken.mean(axis=1), ends, strict=True)
    )


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

    def effect(p: int) -> float:
        needed = needed_penalty(found, p, risk)
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
        note = f"more than {MOST_TIMES_ROWS} times the present rows"
    limit = make_limit(point, [point] * LAW_DRAWS, columns, mode=MODE)
    return limit, detectable, None if note else needed, note
