"""A design's data file checked, and reduced to the columns the design names."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from hashlib import sha256

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray, read_only
from scantling.design.cells import blank
from scantling.design.clock import disorder
from scantling.design.header import check_names, check_roles, choose_columns
from scantling.design.message import counted, file_label, listed, shown
from scantling.design.source import RawColumns, file_sha256, read_columns, read_header
from scantling.design.spec import DataSpec, Design
from scantling.errors import InputError

FEWEST_ROWS = 30
"""Rows below which nothing is said about tails; common practice, no source."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """The rows and raw columns of a design, all of them finite."""

    names: tuple[str, ...]
    """Names of the k raw candidate columns, in file order."""
    values: FloatArray
    """Shape (n, k), as in the file; read-only."""
    response_name: str
    """Name of the response."""
    response: FloatArray
    """Shape (n,), as in the file; read-only."""
    time_name: str | None
    """Name of the column that orders the rows; None: rows have no order."""
    time: tuple[str, ...] | None
    """The n labels of the time column, as in the file."""
    rows_dropped: int
    """Rows left out under missing = "drop-rows"."""
    skipped: tuple[str, ...]
    """Columns without any numeric value that a glob pattern matched."""
    sha256: str
    """Of the data file's bytes."""
    file_name: str
    """Base name of the data file."""


def read_table(design: Design) -> Table:
    """Return the table a design names, every value checked.

    Rows with a missing or infinite value in a column that is used (time and
    response included) are refused, or dropped under missing = "drop-rows";
    what has to hold of whole columns and of the time is asked of the rows
    that are left.

    Raises
    ------
    InputError
        One line with the file, and the column, row or value at fault: a file
        that cannot be read or is not a table; names that are empty or given
        twice; a column that is absent; values that are not numbers, missing or
        infinite; constant or identical columns; a time that does not increase;
        fewer than 30 rows.
    """
    return read_tables((design,))[0]


def read_tables(designs: Sequence[Design]) -> tuple[Table, ...]:
    """Return the tables of the designs of one file, one for each response, the data read once.

    Each is what `read_table` makes of it: under missing = "drop-rows" a gap in
    one response costs the others no row. Tables with the same columns on the
    same rows share one array of `values`. Errors as in `read_table`, and two
    responses that are identical.
    """
    data, label = designs[0].data, file_label(designs[0].data.file)
    names = read_header(data.file)
    check_names(names, label)
    wanted, outright = [], []
    for design in designs:
        check_roles(names, design.data, label)
        chosen, named = choose_columns(names, design.data, label)
        wanted.append([*chosen, names.index(design.data.response)])
        outright.append(named)
    places = list(dict.fromkeys(place for some in wanted for place in some))
    raw = read_columns(
        data.file, places, labels=() if data.time is None else (names.index(data.time),)
    )
    if not len(raw.numbers):
        raise InputError(f"{label}: a header and no rows; at least {FEWEST_ROWS} rows are needed")
    _check_responses(raw, [design.data.response for design in designs], label)
    digest = file_sha256(data.file)
    tables: list[Table] = []
    for design, some, named in zip(designs, wanted, outright, strict=True):
        part = _part(raw, [places.index(place) for place in some])
        table = _table(design, part, named, digest)
        same = (t.values for t in tables if t.names == table.names)
        shared = next((v for v in same if np.array_equal(v, table.values)), table.values)
        tables.append(replace(table, values=shared))
    return tuple(tables)


def _part(raw: RawColumns, places: list[int]) -> RawColumns:
    """Return some of the columns that were read, in the order of `places`."""
    if places == list(range(len(raw.names))):
        return raw
    return replace(
        raw,
        names=tuple(raw.names[place] for place in places),
        numbers=raw.numbers[:, places],
        faults=tuple(raw.faults[place] for place in places),
    )


def _check_responses(raw: RawColumns, responses: list[str], label: str) -> None:
    """Refuse two responses that are one column twice."""
    places = [raw.names.index(name) for name in responses]
    # A column of words is all nan here: it is refused for that, and is no copy of another.
    places = [place for place in places if not np.isnan(raw.numbers[:, place]).all()]
    for first, later in identical_columns(raw.numbers[:, places]):
        one, two = (shown(raw.names[places[place]]) for place in (first, later))
        raise InputError(
            f"{label}: the responses {one} and {two} are identical; leave one out of"
            " [data] response"
        )


def _table(design: Design, raw: RawColumns, outright: frozenset[str], digest: str) -> Table:
    """Return the table of one design from its candidate columns and, last, its response."""
    data, label = design.data, file_label(design.data.file)
    chosen = raw.names[:-1]
    usable, skipped = _usable(raw, {*outright, data.response}, label)
    if not usable and not design.expand.own_lags:
        left = f" (without any number: {listed(skipped)})" if skipped else ""
        raise InputError(
            f"{label}: no candidate columns besides the response and the time{left}; at least one"
            " numeric column, or [expand] own_lags, is needed"
        )
    used = raw.numbers[:, [*usable, len(chosen)]]
    used_names = [*(raw.names[place] for place in usable), data.response]
    labels = None if data.time is None else raw.labels[data.time]
    kept = _kept_rows(raw, used, used_names, labels, data, label)
    used = used[kept]
    check_constants(used, used_names, label)
    check_copies(used, used_names, label)
    times = None if labels is None else tuple(labels[row] for row in kept)
    if times is not None:
        check_time(times, [raw.where(int(row)) for row in kept], data.time or "", label)
    return Table(
        names=tuple(used_names[:-1]),
        values=read_only(np.ascontiguousarray(used[:, :-1])),
        response_name=data.response,
        response=read_only(used[:, -1].copy()),
        time_name=data.time,
        time=times,
        rows_dropped=len(raw.numbers) - len(kept),
        skipped=skipped,
        sha256=digest,
        file_name=label,
    )


def _usable(
    raw: RawColumns, outright: Iterable[str], label: str
) -> tuple[list[int], tuple[str, ...]]:
    """Return the positions in `raw` of the columns of numbers, and the names skipped."""
    usable, skipped = [], []
    empty: NDArray[np.bool_] = np.asarray(np.isnan(raw.numbers).all(axis=0))
    for place, (name, fault) in enumerate(zip(raw.names, raw.faults, strict=True)):
        if empty[place] and name not in outright:
            skipped.append(name)
            continue
        if fault is not None:
            raise InputError(
                f"{label}: column {shown(name)}, {raw.where(fault.row)}: {shown(fault.text)} is not"
                " a number; plain numbers, True or False are needed"
            )
        if empty[place]:
            raise InputError(f"{label}: column {shown(name)} holds no value; numbers are needed")
        usable.append(place)
    return [place for place in usable if place < len(raw.names) - 1], tuple(skipped)


def _kept_rows(
    raw: RawColumns,
    used: FloatArray,
    names: Sequence[str],
    labels: Sequence[str] | None,
    data: DataSpec,
    label: str,
) -> NDArray[np.intp]:
    """Return the rows to keep, after refusing what the design does not drop."""
    untimed = np.zeros(len(used), dtype=bool)
    if labels is not None:
        untimed = np.array([blank(text) for text in labels])
    if data.missing == "refuse":
        if untimed.any():
            where = raw.where(int(np.flatnonzero(untimed)[0]))
            raise InputError(
                f"{label}: time column {shown(data.time)} has {int(untimed.sum())} missing values,"
                f' first in {where}; mend them or set [data] missing = "drop-rows"'
            )
        checks: tuple[tuple[str, NDArray[np.bool_]], ...] = (
            ("missing", np.isnan(used)),
            ("infinite", np.isinf(used)),
        )
        for what, found in checks:
            if found.any():
                row, column = np.argwhere(found)[0]
                raise InputError(
                    f"{label}: {int(found.sum())} {what} values, first in column"
                    f" {shown(names[column])}, {raw.where(int(row))}; mend them or set [data]"
                    ' missing = "drop-rows"'
                )
    kept = np.flatnonzero(np.isfinite(used).all(axis=1) & ~untimed)
    if len(kept) < FEWEST_ROWS:
        dropped = len(used) - len(kept)
        after = f" after {dropped} with missing or infinite values were dropped" if dropped else ""
        raise InputError(
            f"{label}: {counted(len(kept), 'row')}{after}; at least {FEWEST_ROWS} rows are needed"
        )
    return kept


def constant_columns(values: FloatArray) -> NDArray[np.intp]:
    """Return the positions of the columns of `values` (n, k) that hold one value only."""
    return np.flatnonzero((values == values[:1]).all(axis=0))


def identical_columns(values: FloatArray) -> list[tuple[int, int]]:
    """Return (first, later) for every column of `values` (n, k) that repeats an earlier one."""
    first: dict[bytes, int] = {}
    pairs = []
    for place in range(values.shape[1]):
        # Adding 0 turns -0 into 0: equal values then have equal bytes.
        content = sha256((values[:, place] + 0.0).tobytes()).digest()
        if content in first:
            pairs.append((first[content], place))
        else:
            first[content] = place
    return pairs


def check_constants(values: FloatArray, names: Sequence[str], label: str) -> None:
    """Refuse constant columns; the last one is the response.

    Raises
    ------
    InputError
        With the names and the value.
    """
    constant = constant_columns(values)
    if not constant.size:
        return
    value = values[0, constant[-1]]
    if constant[-1] == len(names) - 1:
        raise InputError(
            f"{label}: the response {shown(names[-1])} is constant ({value:g}); there is nothing to"
            " explain"
        )
    raise InputError(
        f"{label}: constant columns: {listed(names[place] for place in constant)}; leave them out"
        " of [data] columns"
    )


def check_copies(values: FloatArray, names: Sequence[str], label: str) -> None:
    """Refuse columns identical to an earlier one; the last one is the response.

    Raises
    ------
    InputError
        With both names.
    """
    pairs = identical_columns(values)
    if not pairs:
        return
    first, later = pairs[0]
    if pairs[-1][1] == len(names) - 1:
        first, later = pairs[-1]
        raise InputError(
            f"{label}: the response {shown(names[later])} is identical to column"
            f" {shown(names[first])}; leave that column out of [data] columns"
        )
    more = f" ({len(pairs)} such pairs)" if len(pairs) > 1 else ""
    raise InputError(
        f"{label}: columns {shown(names[first])} and {shown(names[later])} are identical{more};"
        " leave one out of [data] columns"
    )


def check_time(times: Sequence[str], where: Sequence[str], name: str, label: str) -> None:
    """Refuse a time that is not one, or does not increase from row to row.

    Raises
    ------
    InputError
        With the row and the value, or both values.
    """
    fault = disorder(times)
    if fault is None:
        return
    row, value = where[fault.position], shown(times[fault.position])
    if fault.unreadable:
        raise InputError(
            f"{label}: time column {shown(name)}, {row}: {value} is not {fault.kind}; times are"
            " all ISO dates (2020-03-31, 2020-03-31 16:00) or all numbers"
        )
    before = shown(times[fault.position - 1])
    same = times[fault.position].strip() == times[fault.position - 1].strip()
    word = "repeats" if same else "follows"
    raise InputError(
        f"{label}: time column {shown(name)}, {row}: {value} {word} {before}; times must be unique"
        " and increasing"
    )
