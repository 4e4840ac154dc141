"""The column law: tables of columns like the user's, of any size, drawn with the errors."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scantling.core.checks import finite_matrix, finite_vector
from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.design.transforms import normal_scores
from scantling.errors import InputError
from scantling.law.column_copula import Copula, fit_copula, unit
from scantling.law.column_draw import Setting, draw_errors, draw_scores, draw_setting, recursion
from scantling.law.column_lineage import Lineage, Origin, base_series, instances, trace
from scantling.law.column_margins import Margins, count_values, fit_margins
from scantling.law.families import ErrorLaw
from scantling.law.shared_scale import exponents

FEWEST_ROWS = 30


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnLaw:
    """Law of a table of P columns that are lags and powers of B series.

    Each series is path^g times a quantile function of a normal score; the scores carry
    correlation, serial dependence and the scale that series share.
    """

    lineage: Lineage
    """Which columns come from which series."""
    margins: Margins
    """Marginal laws of the series, each divided by its power of the path."""
    copula: Copula
    """Dependence of their normal scores."""
    exponent: FloatArray
    """Power of the errors' volatility in each series, shape (B,)."""
    errors: ErrorLaw
    """Law of the errors it was fitted beside."""

    @property
    def columns(self) -> int:
        """P."""
        return int(self.lineage.series.size)

    @property
    def shares_path(self) -> bool:
        """Whether columns depend on the errors' volatility or on past errors."""
        return bool(self.exponent.any() or self.copula.error_share.any())

    def draw(self, rows: int, rng: np.random.Generator, *, pick: Any = None) -> FloatArray:
        """Draw a table of columns.

        Parameters
        ----------
        rows : int
            At least 2.
        rng : Generator
        pick : array-like of int, optional
            Which columns, in that order; default: each once. A column picked again is drawn
            afresh, which is how there can be more columns than the law was fitted to.

        Returns
        -------
        array, shape (rows, len(pick) or P)
            Columns contiguous, mean 0 and mean square 1.
        """
        return draw_joint(self, self.errors, rows, 0, rng, pick=pick)[0]

    def setting(self, error_law: ErrorLaw, rows: int, rng: np.random.Generator) -> Setting:
        """Draw what the columns of one table of so many rows, at least 2, have in common."""
        if rows < 2:
            raise InputError(f"rows: at least 2 are needed; found {rows}")
        lags = int(self.lineage.lag.max())
        return draw_setting(self.copula, error_law, rows, lags, rng)

    def draw_errors(
        self, error_law: ErrorLaw, setting: Setting, draws: int, rng: np.random.Generator
    ) -> FloatArray:
        """Draw errors (rows, draws) that belong to the setting, not centred."""
        return draw_errors(self.copula, error_law, setting, draws, rng, share_path=self.shares_path)

    def draw_columns(
        self, setting: Setting, pick: NDArray[np.int64], rng: np.random.Generator
    ) -> FloatArray:
        """Draw the picked columns, shape (rows, len(pick)), in a setting."""
        series, copies, where = instances(self.lineage, pick)
        scores = draw_scores(self.copula, setting, series, copies, rng)
        values = self.margins.quantile(scores, series, rng)
        moved = self.exponent[series] > 0
        if moved.any():
            values[moved] *= np.exp(self.exponent[series[moved], None] * setting.log_path)
        out = np.empty((pick.size, setting.rows))
        for place, column in enumerate(pick):
            start = setting.lags - int(self.lineage.lag[column])
            row = values[where[place]]
            power = int(self.lineage.power[column])
            if power > 1:
                row = (row - row.mean()) ** power
            out[place] = row[start : start + setting.rows]
            if np.ptp(out[place]) == 0:  # the user's columns vary: the sparsest that does
                out[place, rng.integers(setting.rows)] += 1.0
        out -= out.mean(axis=1, keepdims=True)
        out /= np.sqrt((out**2).mean(axis=1, keepdims=True))
        return out.T


def fit_column_law(
    X: Any, residuals: Any, law: ErrorLaw, *, time_ordered: bool,
    lag_groups: Sequence[Origin] | None = None,
) -> ColumnLaw:  # fmt: skip
    """Fit the law of the columns at hand. Nothing is random in it.

    Parameters
    ----------
    X : array-like, shape (n, P), n >= 30
        Columns of mean 0 and mean square 1, none constant.
    residuals : array-like, shape (n,)
        Errors of the same rows.
    law : ErrorLaw
        Fitted to them, so that its volatility path, if any, covers the n rows; or stated.
    time_ordered : bool
        Whether rows have an order: only then is serial dependence fitted.
    lag_groups : sequence of (base, lag) or (base, lag, power), optional
        Of each column, as `column_lineage.origins` gives; lags imply an order. Default: no
        column is a lag or power of another.

    Raises
    ------
    InputError
        If shapes do not agree, rows are too few, a column is constant, or the lags are not so.
    """
    columns = finite_matrix(X, "X")
    n = len(columns)
    if n < FEWEST_ROWS:
        raise InputError(f"X: at least {FEWEST_ROWS} rows are needed; found {n}")
    errors = finite_vector(residuals, "residuals", minimum=n)
    whole_path = _path(law, errors)
    for name, size in (("residuals", errors.size), ("law", whole_path.size)):
        if size != n:
            raise InputError(f"{name}: one value for each of {n} rows is needed; found {size}")
    flat = np.flatnonzero(np.ptp(columns, axis=0) == 0)
    if flat.size:
        raise InputError(f"X: columns that vary are needed; column {flat[0] + 1} is constant")
    lineage = trace(columns, lag_groups)
    series = base_series(columns, lineage)
    m = len(series)
    path = whole_path[:m]
    shocks = errors if law.autoregression is None else law.autoregression.shocks(errors)
    fresh = shocks[:m] / path
    kinds = count_values(series)
    # Deviations from a repeated value scale with the path, so that it stays one value.
    series = series - np.where(kinds.repeats, kinds.mode, 0.0)
    smooth = ~kinds.stepped
    lagged = lineage.first_lag > 0
    exponent = np.zeros(series.shape[1])
    if law.volatility is not None:
        exponent[smooth] = exponents(series[:, smooth], path)
        exponent = _with_errors(exponent, series, fresh * path, lagged)
    relative = np.log(path) - np.log(path).mean()
    rest = series / np.exp(relative[:, None] * exponent)
    copula = fit_copula(
        unit(rest),
        unit(normal_scores(rest)),
        unit(normal_scores(fresh[:, None]))[:, 0],
        smooth & ~kinds.repeats,
        kinds.active,
        lagged,
        ordered=time_ordered or bool(lineage.lag.any()),
    )
    return ColumnLaw(
        lineage=lineage,
        margins=fit_margins(rest, kinds),
        copula=copula,
        exponent=read_only(exponent),
        errors=law,
    )


def _path(law: ErrorLaw, errors: FloatArray) -> FloatArray:
    """The fitted volatility path, the one these errors give a stated volatility, or ones."""
    volatility = law.volatility
    if volatility is None:
        return np.ones(errors.size)
    return volatility.path if volatility.path.size > 1 else recursion(volatility, errors**2, errors)


def _with_errors(
    exponent: FloatArray, series: FloatArray, errors: FloatArray, lagged: NDArray[np.bool_]
) -> FloatArray:
    """Give series that hold the errors, as the response's own lags do, these errors' exponent.

    It is 1 for the share of the series that they explain: squared correlation, where clear.
    """
    m = len(errors)
    shares = (unit(errors[:, None])[:, 0] @ unit(series) / m) ** 2
    shares[(shares < 16 / m) | ~lagged] = 0.0
    return np.asarray(shares + (1 - shares) * exponent)


def draw_joint(
    column_law: ColumnLaw, error_law: ErrorLaw, rows: int, draws: int,
    rng: np.random.Generator, pick: Any = None,
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Draw a table of columns and errors that belong to it.

    All draws of the errors share the columns and, where columns depend on it, one path of
    their volatility. Where columns hold past errors, as the response's own lags do, the first
    draw is the one whose past they hold; the others ride on its path with fresh innovations.

    Returns
    -------
    X : array, shape (rows, len(pick) or P)
    E : array, shape (rows, draws)
        Not centred.

    Raises
    ------
    InputError
        If `rows` is below 2 or `pick` names no column.
    """
    chosen = _picked(column_law, pick)
    setting = column_law.setting(error_law, rows, rng)
    return (
        column_law.draw_columns(setting, chosen, rng),
        column_law.draw_errors(error_law, setting, draws, rng),
    )


def draw_blocks(
    column_law: ColumnLaw, setting: Setting, columns: int, seed: int, *, size: int = 4096
) -> Iterator[FloatArray]:
    """Yield blocks (rows, `size` or a few more) of so many columns of one table.

    The columns at hand are gone through again and again; columns of one series stand in one
    block. A block depends on the setting, the seed, `size` and its number alone.
    """
    order = np.argsort(column_law.lineage.series, kind="stable")
    ends = np.cumsum(np.bincount(column_law.lineage.series))
    done = number = 0
    while done < columns:
        rounds, part = divmod(done + size, order.size)
        whole = int(ends[np.searchsorted(ends, part)]) if part else 0
        stop = min(rounds * order.size + whole, columns)
        number += 1
        places = order[np.arange(done, stop) % order.size]
        yield column_law.draw_columns(setting, places, stream(seed, "column blocks", number))
        done = stop


def _picked(law: ColumnLaw, pick: Any) -> NDArray[np.int64]:
    if pick is None:
        return np.arange(law.columns)
    chosen = np.asarray(pick)
    if chosen.ndim != 1 or not chosen.size or chosen.dtype.kind not in "iu":
        raise InputError("pick: whole numbers in one dimension, at least one, are needed")
    if chosen.min() < 0 or chosen.max() >= law.columns:
        raise InputError(
            f"pick: columns from 0 to {law.columns - 1} are needed; found"
            f" {chosen.min()} to {chosen.max()}"
        )
    return chosen.astype(np.int64)
