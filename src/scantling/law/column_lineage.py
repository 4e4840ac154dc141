"""Which columns are lags and powers of one series, and the series behind them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.design.expand import Columns
from scantling.errors import InputError

SAME = 0.99
"""Least correlation of a column with the series it is said to be a lag of."""

Origin = tuple[int, int] | tuple[int, int, int]
"""(base, lag) or (base, lag, power) of one column."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Lineage:
    """P columns as lags and powers of B series."""

    series: NDArray[np.int64]
    """Series of each column, shape (P,)."""
    lag: NDArray[np.int64]
    """Rows by which the column is lagged, shape (P,)."""
    power: NDArray[np.int64]
    """Power of the series less its mean, shape (P,)."""
    source: NDArray[np.int64]
    """The least lagged column of power 1 of each series, shape (B,)."""

    @property
    def first_lag(self) -> NDArray[np.int64]:
        """Least lag at which each series is seen, shape (B,)."""
        return self.lag[self.source]


def origins(columns: Columns) -> list[Origin]:
    """(base, lag, power) of every column of a design; a product is a base of its own."""
    names: dict[str, int] = {}
    out: list[Origin] = []
    for place, name in enumerate(columns.names):
        base, lag, power = (int(a[place]) for a in (columns.base, columns.lag, columns.power))
        if columns.is_product[place]:
            base, power = -2 - names.setdefault(name.removesuffix(f".lag{lag}"), len(names)), 1
        out.append((base, lag, power))
    return out


def trace(X: FloatArray, given: Sequence[Origin] | None) -> Lineage:
    """Sort the columns of X (n, P) by the series they come from.

    A power whose base is not among the columns is taken for a series of its own. Without
    `given` every column is one.

    Raises
    ------
    InputError
        If `given` has another length, a lag or power out of range, the same entry twice, or a
        column is no lag of its base.
    """
    n, p = X.shape
    if given is None:
        every = np.arange(p)
        return Lineage(series=every, lag=0 * every, power=0 * every + 1, source=every)
    if len(given) != p:
        raise InputError(f"lag_groups: one entry a column is needed; found {len(given)} for {p}")
    triples = [(int(g[0]), int(g[1]), int(g[2]) if len(g) > 2 else 1) for g in given]
    if len(set(triples)) < p:
        twice = next(t for place, t in enumerate(triples) if t in triples[:place])
        raise InputError(f"lag_groups: distinct entries are needed; {twice} comes twice")
    for place, (_, lag, power) in enumerate(triples):
        if not 0 <= lag < n / 2 or power < 1:
            raise InputError(
                f"lag_groups: lags from 0 to half of {n} rows and powers of at least 1 are"
                f" needed; column {place + 1} has lag {lag}, power {power}"
            )
    plain = {base for base, _, power in triples if power == 1}
    keys = [(base, 1 if base in plain else power) for base, _, power in triples]
    numbers = {key: number for number, key in enumerate(dict.fromkeys(keys))}
    series = np.array([numbers[key] for key in keys])
    lags = np.array([lag for _, lag, _ in triples])
    powers = np.array([power if base in plain else 1 for base, _, power in triples])
    source = np.full(len(numbers), -1)
    for place in np.lexsort((-lags, -powers)):  # the least lag of power 1 comes last
        source[series[place]] = place
    found = Lineage(series=series, lag=lags, power=powers, source=source)
    _check_lags(X, found)
    return found


def _check_lags(X: FloatArray, lineage: Lineage) -> None:
    n = len(X)
    for place in np.flatnonzero(lineage.power == 1):
        source = int(lineage.source[lineage.series[place]])
        shift = int(lineage.lag[place] - lineage.lag[source])
        if shift == 0:
            continue
        one, two = X[shift:, place], X[: n - shift, source]
        one, two = one - one.mean(), two - two.mean()
        size = np.sqrt(float(one @ one) * float(two @ two))
        if float(one @ two) < SAME * size:
            raise InputError(
                f"lag_groups: column {place + 1} is not column {source + 1} lagged by {shift}"
            )


def base_series(X: FloatArray, lineage: Lineage) -> FloatArray:
    """The B series side by side in their own time, shape (n - largest first lag, B).

    Row t holds each series at time t, which its source column shows first_lag rows later.
    """
    first = lineage.first_lag
    rows = len(X) - int(first.max())
    return np.column_stack(
        [X[lag : lag + rows, place] for lag, place in zip(first, lineage.source, strict=True)]
    )


def instances(
    lineage: Lineage, pick: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Series to be drawn for the picked columns, each column once for every time it is picked.

    Returns the series and the copy number of every drawn series, shape (I,) each, and the
    place of the drawn series behind every picked column, shape (len(pick),).
    """
    order = np.argsort(pick, kind="stable")
    ordered = pick[order]
    copy = np.empty(pick.size, dtype=np.int64)
    copy[order] = np.arange(pick.size) - np.searchsorted(ordered, ordered)
    count = lineage.source.size
    keys, where = np.unique(copy * count + lineage.series[pick], return_inverse=True)
    return keys % count, keys // count, where
