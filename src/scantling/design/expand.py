"""Raw columns multiplied into candidates: transform, powers, products, lags."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import MEMORY_BOUND
from scantling.design.message import file_label, listed, shown
from scantling.design.repeats import repeated_rows
from scantling.design.spec import Design, ExpandSpec
from scantling.design.table import FEWEST_ROWS, Table
from scantling.design.transforms import clipped, normal_scores
from scantling.errors import InputError

_COPIES = 4
# Rounding of a mean is some 1e-16 of the largest value: what varies by less than
# this share of it does not vary.
_CONSTANT = 1e-12


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
class RawExpansion:
    """The candidates that do not depend on the response: all but its own lags."""

    source: FloatArray
    """The raw columns they were made of: `values` of the table, (rows of the table, k)."""
    spec: ExpandSpec
    """How they were made."""
    candidates: tuple[_Candidate, ...]
    """Those kept."""
    values: FloatArray
    """Shape (n, P0), columns contiguous, on the rows that all lags leave; read-only."""
    dropped: tuple[tuple[str, str], ...]
    """(name, reason) of those left out."""

    @property
    def all_names(self) -> tuple[str, ...]:
        """Names of those kept, and of those left out."""
        return (*(c.name for c in self.candidates), *(name for name, _ in self.dropped))


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


def expand(design: Design, table: Table, *, raw: RawExpansion | None = None) -> Columns:
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
    raw : RawExpansion, optional
        From `expand_raw`; by default, or if it is of other columns, it is computed.

    Raises
    ------
    InputError
        If `expand` is out of range, the rows are too few for the lags, the
        candidates would exceed the memory bound, two would bear one name, or
        none is left.
    """
    spec, label = design.expand, file_label(design.path)
    made = expand_raw(design, table, known=raw)
    lost = max(spec.lags, spec.own_lags)
    own = _own_lags(spec, table)
    _check_twice([*made.all_names, *(candidate.name for candidate in own)], label)
    left, stack, dropped = list(made.candidates), made.values.T, made.dropped
    if own:
        added = _lagged_rows([table.response] * len(own), own, lost, len(table.response))
        constant = _standardise(added)
        left += own
        stack = np.concatenate([stack, added])
        idle = np.concatenate([np.zeros(len(made.candidates), dtype=bool), constant])
        stack, left, more = _distinct(stack, idle, left)
        dropped += more
    if not left:
        names = [name for name, _ in dropped]
        raise InputError(
            f"{label}: [expand] leaves no candidate column; all {len(names)} are constant"
            f" or repeated: {listed(names)}"
        )
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
        dropped=dropped,
        rows_lost=lost,
        time_ordered=table.time is not None or lost > 0,
        time=None if table.time is None else table.time[lost:],
    )


def expand_raw(design: Design, table: Table, *, known: RawExpansion | None = None) -> RawExpansion:
    """Return the candidates that do not depend on the response, for `expand`.

    `known`, of another response, is returned as it is where both tables share `values`.
    Errors as in `expand`.
    """
    spec, label = design.expand, file_label(design.path)
    if known is not None and known.source is table.values and known.spec == spec:
        return known
    _check_spec(spec, label)
    lost = max(spec.lags, spec.own_lags)
    rows = len(table.response) - lost
    _check_rows(len(table.response), lost, label)
    _check_size(rows, expanded_count(len(table.names), spec), label)
    candidates = _raw_candidates(spec, table)
    _check_twice([candidate.name for candidate in candidates], label)
    raw = _transformed(table.values, spec.transform)
    columns = (_computed(raw, candidate) for candidate in candidates)
    stack = _lagged_rows(columns, candidates, lost, len(table.response))
    constant = _standardise(stack)
    stack, left, dropped = _distinct(stack, constant, candidates)
    return RawExpansion(
        source=table.values,
        spec=spec,
        candidates=tuple(left),
        values=read_only(stack.T),
        dropped=dropped,
    )


def _lagged_rows(
    columns: Iterable[FloatArray], candidates: Sequence[_Candidate], lost: int, rows: int
) -> FloatArray:
    """Return each candidate, given on all `rows` of the table, on the rows that lags leave."""
    stack = np.empty((len(candidates), rows - lost))
    for place, (column, candidate) in enumerate(zip(columns, candidates, strict=True)):
        stack[place] = column[lost - candidate.lag : rows - candidate.lag]
    return stack


def _distinct(
    stack: FloatArray, constant: NDArray[np.bool_], candidates: list[_Candidate]
) -> tuple[FloatArray, list[_Candidate], tuple[tuple[str, str], ...]]:
    """Return rows and candidates without constants and repeats, and those left out with reasons."""
    reasons = _reasons(stack, constant, candidates)
    kept = [place for place in range(len(candidates)) if place not in reasons]
    dropped = tuple((candidates[place].name, reason) for place, reason in reasons.items())
    if reasons:
        stack = stack[kept]
    return stack, [candidates[place] for place in kept], dropped


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


def _own_lags(spec: ExpandSpec, table: Table) -> list[_Candidate]:
    """Return the lags of the response."""
    return [
        _Candidate(name=f"{table.response_name}.lag{lag}", base=-1, lag=lag)
        for lag in range(1, spec.own_lags + 1)
    ]


def _raw_candidates(spec: ExpandSpec, table: Table) -> list[_Candidate]:
    """Return every other candidate: columns with their powers, then products.

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
    return [
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


def _check_twice(names: list[str], label: str) -> None:
    """Refuse two candidates of one name: a file may hold both x and x^2."""
    seen: set[str] = set()
    for name in names:
        if name in seen:
            raise InputError(
                f"{label}: [expand] makes a column {shown(name)} and there is another of"
                " that name; rename the column in the file"
            )
        seen.add(name)


def _transformed(values: FloatArray, transform: str) -> FloatArray:
    """Return the raw columns (n, k) transformed, on all rows of the table."""
    if transform == "none" or not values.shape[1]:
        return values
    if transform == "normal-scores":
        return normal_scores(values)
    return clipped(values)


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


def _whole(values: list[int]) -> NDArray[np.int64]:
    array = np.asarray(values, dtype=np.int64)
    array.flags.writeable = False
    return array
