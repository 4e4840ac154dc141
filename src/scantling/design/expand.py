"""Raw columns multiplied into candidates: transform, powers, products, lags."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import MEMORY_BOUND, stream
from scantling.design.message import file_label, listed, shown
from scantling.design.spec import Design, ExpandSpec
from scantling.design.table import FEWEST_ROWS, Table
from scantling.errors import InputError

CLIP_AT = 5.0
"""Clipping point in robust standard deviations; METHODS 7: at 5 MADs or more."""
MAD_TO_SD = 1.4826
"""1 / Phi^-1(3/4): a normal column's standard deviation over its MAD."""
_COPIES = 4
# Rounding of a mean is some 1e-16 of the largest value: what varies by less than
# this share of it does not vary.
_CONSTANT = 1e-12
_SAME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Columns:
    """The P candidate columns of a design, on the rows that lags leave."""

    names: tuple[str, ...]
    """Names of the candidates: x, x^2, x*z, x.lag1, response.lag1."""
    values: FloatArray
    """Shape (n, P), columns contiguous: mean 0 and mean square 1 on these rows; read-only."""
    response: FloatArray
    """Shape (n,), as in the file; read-only."""
    base: NDArray[np.int64]
    """Shape (P,): position of the raw column in the table (of a product: the first); -1 for
    lags of the response."""
    power: NDArray[np.int64]
    """Shape (P,): power of the raw column; 2 for a product."""
    is_product: NDArray[np.bool_]
    """Shape (P,): whether the candidate is a product of two raw columns."""
    lag: NDArray[np.int64]
    """Shape (P,): rows by which the candidate is lagged."""
    dropped: tuple[tuple[str, str], ...]
    """(name, reason) of candidates that the expansion made constant or made twice."""
    rows_lost: int
    """Rows at the start that have no lags."""
    time_ordered: bool
    """Whether rows have an order: a time is given, or lags are used."""
    time: tuple[str, ...] | None
    """The n labels of the time column."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Candidate:
    """One candidate before it is computed."""

    name: str
    """As in the report: x, x^2, x*z, x.lag1."""
    base: int
    """Position of the raw column in the table; -1 for the response."""
    power: int = 1
    """Power of the raw column."""
    partner: int = -1
    """Position of the second raw column of a product; -1: no product."""
    lag: int = 0
    """Rows by which it is lagged."""


def expand(design: Design, table: Table) -> Columns:
    """Return the candidate columns of a design, standardised on the rows they share.

    In this order. The raw columns are transformed on all rows of the table:
    normal scores Phi^-1((rank - 1/2)/n), ties at their average rank; or clipped
    at the median plus and minus 5 * 1.4826 MAD (a column whose MAD is 0, such as
    a sparse dummy, at its mean plus and minus 5 sd). Powers are of the column
    less its mean, since powers of a column far from 0 are all but collinear.
    Products are of the columns as they stand, as a regression would hold them.
    Lags are of all of these; `own_lags` are of the response as in the file, and
    the first max(lags, own_lags) rows are lost. Last, candidates that do not
    vary, or repeat an earlier one up to sign and scale, are dropped and listed.

    Parameters
    ----------
    design : Design
        Only `expand` (and the file name, for messages) is used: a design with
        another `expand` may be given with the same table.
    table : Table
        The checked raw columns.

    Raises
    ------
    InputError
        If `expand` is out of range, the rows are too few for the lags, the
        candidates would exceed the memory bound, two would bear one name, or
        none is left.
    """
    spec, label = design.expand, file_label(design.path)
    _check_spec(spec, label)
    lost = max(spec.lags, spec.own_lags)
    rows = len(table.response) - lost
    _check_rows(len(table.response), lost, label)
    _check_size(rows, expanded_count(len(table.names), spec), label)
    candidates = _candidates(spec, table)
    _check_twice(candidates, label)
    raw = _transformed(table.values, spec.transform)
    stack = np.empty((len(candidates), rows))
    for place, candidate in enumerate(candidates):
        source = table.response if candidate.base < 0 else _computed(raw, candidate)
        stack[place] = source[lost - candidate.lag : lost - candidate.lag + rows]
    constant = _standardise(stack)
    reasons = _reasons(stack, constant, candidates)
    kept = [place for place in range(len(candidates)) if place not in reasons]
    if not kept:
        raise InputError(
            f"{label}: [expand] leaves no candidate column; all {len(candidates)} are constant"
            f" or repeated: {listed(candidate.name for candidate in candidates)}"
        )
    if reasons:
        stack = stack[kept]
    left = [candidates[place] for place in kept]
    products = np.array([candidate.partner >= 0 for candidate in left])
    products.flags.writeable = False
    return Columns(
        names=tuple(candidate.name for candidate in left),
        values=read_only(stack.T),
        response=read_only(table.response[lost:]),
        base=_whole([candidate.base for candidate in left]),
        power=_whole([candidate.power for candidate in left]),
        is_product=products,
        lag=_whole([candidate.lag for candidate in left]),
        dropped=tuple((candidates[place].name, reason) for place, reason in reasons.items()),
        rows_lost=lost,
        time_ordered=table.time is not None or lost > 0,
        time=None if table.time is None else table.time[lost:],
    )


def expanded_count(columns: int, spec: ExpandSpec) -> int:
    """Return how many candidates `columns` raw columns make, before any is dropped.

    (k m + k(k-1)/2) (L + c) + own lags, for powers up to m, with products, L
    lags and c = 1 with lag 0; without lags L + c is 1.
    """
    products = columns * (columns - 1) // 2 if spec.products else 0
    lags = spec.lags + spec.contemporaneous if spec.lags else 1
    return (columns * spec.powers + products) * lags + spec.own_lags


def _check_spec(spec: ExpandSpec, label: str) -> None:
    """Refuse what a design file could not hold but a record made in Python can."""
    if spec.transform not in ("none", "normal-scores", "clip"):
        raise InputError(
            f"{label}: [expand] transform = {shown(spec.transform)}: not accepted; one of none,"
            " normal-scores, clip is needed"
        )
    if spec.powers < 1 or spec.lags < 0 or spec.own_lags < 0:
        raise InputError(
            f"{label}: [expand] powers = {spec.powers}, lags = {spec.lags}, own_lags ="
            f" {spec.own_lags}: powers of at least 1 and lags of at least 0 are needed"
        )


def _check_rows(rows: int, lost: int, label: str) -> None:
    if rows <= lost:
        raise InputError(
            f"{label}: [expand] {lost} lags need more than {lost} rows; the table has {rows}"
        )
    if rows - lost < FEWEST_ROWS:
        raise InputError(
            f"{label}: [expand] {lost} lags leave {rows - lost} of {rows} rows; at least"
            f" {FEWEST_ROWS} rows are needed"
        )


def _check_size(rows: int, candidates: int, label: str) -> None:
    if not candidates:
        raise InputError(f"{label}: [expand] leaves no candidate column; the table has none")
    size = _COPIES * rows * candidates * 8
    if size > MEMORY_BOUND:
        raise InputError(
            f"{label}: [expand] makes {candidates} columns of {rows} rows,"
            f" {size / 1024**3:.1f} GiB in {_COPIES} copies; at most"
            f" {MEMORY_BOUND / 1024**3:g} GiB are held; lower powers or lags, or leave out products"
        )


def _candidates(spec: ExpandSpec, table: Table) -> list[_Candidate]:
    """Return every candidate: columns with their powers, products, then lags of the response.

    Lags of one column stand together; lag 0 bears the plain name.
    """
    count = len(table.names)
    plain = [
        _Candidate(name=name if power == 1 else f"{name}^{power}", base=base, power=power)
        for base, name in enumerate(table.names)
        for power in range(1, spec.powers + 1)
    ]
    if spec.products:
        plain += [
            _Candidate(
                name=f"{table.names[one]}*{table.names[two]}", base=one, power=2, partner=two
            )
            for one in range(count)
            for two in range(one + 1, count)
        ]
    first = 0 if spec.contemporaneous or not spec.lags else 1
    lagged = [
        _Candidate(
            name=f"{entry.name}.lag{lag}" if lag else entry.name,
            base=entry.base,
            power=entry.power,
            partner=entry.partner,
            lag=lag,
        )
        for entry in plain
        for lag in range(first, spec.lags + 1)
    ]
    own = [
        _Candidate(name=f"{table.response_name}.lag{lag}", base=-1, lag=lag)
        for lag in range(1, spec.own_lags + 1)
    ]
    return lagged + own


def _check_twice(candidates: list[_Candidate], label: str) -> None:
    """Refuse two candidates of one name: a file may hold both x and x^2."""
    seen: set[str] = set()
    for candidate in candidates:
        if candidate.name in seen:
            raise InputError(
                f"{label}: [expand] makes a column {shown(candidate.name)} and there is another of"
                " that name; rename the column in the file"
            )
        seen.add(candidate.name)


def _transformed(values: FloatArray, transform: str) -> FloatArray:
    """Return the raw columns (n, k) transformed, on all rows of the table."""
    if transform == "none" or not values.shape[1]:
        return values
    if transform == "normal-scores":
        return normal_scores(values)
    return clipped(values)


def normal_scores(values: FloatArray) -> FloatArray:
    """Return Phi^-1((rank - 1/2)/n) of each column of `values` (n, k), ties at average ranks."""
    from scipy.special import ndtri
    from scipy.stats import rankdata

    scores: FloatArray = ndtri((rankdata(values, axis=0) - 0.5) / len(values))
    return scores


def clipped(values: FloatArray) -> FloatArray:
    """Return each column of `values` (n, k) clipped at its median +- 5 * 1.4826 MAD.

    A column whose MAD is 0 is clipped at its mean +- 5 sd instead: around a
    median that half of the values share, every other value would be an outlier.
    """
    scale = np.abs(values).max(axis=0)
    scale = np.where(scale > 0, scale, 1.0)
    unit = values / scale
    centre = np.median(unit, axis=0)
    spread = MAD_TO_SD * np.median(np.abs(unit - centre), axis=0)
    sparse = spread == 0
    centre = np.where(sparse, unit.mean(axis=0), centre)
    spread = np.where(sparse, unit.std(axis=0), spread)
    return np.clip(unit, centre - CLIP_AT * spread, centre + CLIP_AT * spread) * scale


def _computed(raw: FloatArray, candidate: _Candidate) -> FloatArray:
    """Return one candidate on all rows, up to scale; scaled first, so that nothing overflows."""
    column = _unit(raw[:, candidate.base])
    if candidate.partner >= 0:
        return column * _unit(raw[:, candidate.partner])
    if candidate.power == 1:
        return column
    return np.asarray(_unit(column - column.mean()) ** candidate.power)


def _unit(column: FloatArray) -> FloatArray:
    largest = np.abs(column).max()
    return column / largest if largest > 0 else column


def _standardise(stack: FloatArray) -> NDArray[np.bool_]:
    """Bring each row of `stack` (P, n) to mean 0, mean square 1; return which do not vary.

    Rows that do not vary are left at 0. In place, row by row: no second stack is held.
    """
    constant = np.zeros(len(stack), dtype=bool)
    for place, row in enumerate(stack):
        unit = _unit(row)
        centred = unit - unit.mean()
        largest = np.abs(centred).max()
        constant[place] = largest <= _CONSTANT
        if constant[place]:
            row[:] = 0.0
            continue
        centred /= largest
        centred -= centred.mean()
        row[:] = centred / np.sqrt(np.mean(centred**2))
    return constant


def _reasons(
    stack: FloatArray, constant: NDArray[np.bool_], candidates: list[_Candidate]
) -> dict[int, str]:
    """Return why candidates are dropped, by position, in order."""
    reasons = {int(place): "does not vary on the rows used" for place in np.flatnonzero(constant)}
    for place, first in repeated_rows(stack, constant).items():
        reasons[place] = f"the same as {candidates[first].name} up to sign and scale"
    return dict(sorted(reasons.items()))


def repeated_rows(stack: FloatArray, ignored: NDArray[np.bool_]) -> dict[int, int]:
    """Return, for each row of `stack` (P, n) that equals an earlier one up to sign, that one.

    Rows are compared in full only where their absolute projections on one
    random direction agree, which takes O(n P) and cannot part equal rows, as
    rounding each value before a comparison would.
    """
    direction = stream(0, "repeated-rows").standard_normal(stack.shape[1])
    projected = np.abs(stack @ direction)
    order = [int(place) for place in np.argsort(projected, kind="stable") if not ignored[place]]
    tolerance = _SAME * stack.shape[1]
    found: dict[int, int] = {}
    start = 0
    for stop in range(1, len(order) + 1):
        if stop < len(order) and projected[order[stop]] - projected[order[stop - 1]] <= tolerance:
            continue
        firsts: list[int] = []
        for place in sorted(order[start:stop]):
            match = next((first for first in firsts if _same(stack[first], stack[place])), None)
            if match is None:
                firsts.append(place)
            else:
                found[place] = match
        start = stop
    return found


def _same(one: FloatArray, two: FloatArray) -> bool:
    sign = 1.0 if float(one @ two) > 0 else -1.0
    return bool(np.abs(one - sign * two).max() <= _SAME)


def _whole(values: list[int]) -> NDArray[np.int64]:
    array = np.asarray(values, dtype=np.int64)
    array.flags.writeable = False
    return array
