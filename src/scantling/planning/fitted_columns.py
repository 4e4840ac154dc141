"""The user's columns at other numbers of rows: drawn from the law fitted to them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.design.expand import Columns
from scantling.diagnostics.residuals import Residuals
from scantling.law.column_draw import Setting
from scantling.law.column_law import ColumnLaw, fit_column_law
from scantling.law.column_lineage import origins
from scantling.law.families import ErrorLaw
from scantling.planning.case import Case
from scantling.planning.generative import FEW_TABLES
from scantling.planning.plan import Plan


@dataclass(frozen=True, slots=True, kw_only=True)
class FittedColumns:
    """Columns and errors drawn together from laws fitted to the data."""

    law: ColumnLaw
    """Of the columns."""
    errors_law: ErrorLaw
    """Of the errors, with which columns may share a volatility path."""

    @property
    def independent(self) -> bool:
        """Never taken for granted."""
        return False

    @property
    def most_tables(self) -> int:
        """Few: each has its path, factors and quantiles to set up."""
        return FEW_TABLES

    @property
    def divisible(self) -> bool:
        """No: lags of one series are drawn together."""
        return False

    def _setting(self, rows: int, seed: int, table: int) -> Setting:
        return self.law.setting(self.errors_law, rows, stream(seed, "column setting", table))

    def errors(self, law: ErrorLaw, rows: int, draws: int, seed: int, table: int) -> FloatArray:
        """Errors of the fitted law ride on the table's path; those of another do not."""
        rng = stream(seed, "generated errors", table)
        if law is not self.errors_law:
            return law.draw((rows, draws), rng)
        return self.law.draw_errors(law, self._setting(rows, seed, table), draws, rng)

    def errors_at_once(self, law: ErrorLaw, rows: int, draws: int, seed: int) -> FloatArray | None:
        """Never: they belong to a table."""
        return None

    def columns(self, rows: int, start: int, stop: int, seed: int, table: int) -> FloatArray:
        """Columns start..stop, beyond those at hand gone through again with fresh draws."""
        pick = np.arange(start, stop) % self.law.columns
        rng = stream(seed, "generated columns", table, start)
        return self.law.draw_columns(self._setting(rows, seed, table), pick, rng).T


def fitted_plan(case: Case, columns: Columns, residuals: Residuals) -> Plan:
    """The case at hand as a plan, its columns drawn from their fitted law."""
    column_law = fit_column_law(
        case.X,
        residuals.values,
        case.law,
        time_ordered=columns.time_ordered,
        lag_groups=origins(columns),
    )
    return Plan(
        rows=case.rows, columns=case.columns,
        source=FittedColumns(law=column_law, errors_law=case.law), law=case.law,
        target=case.target, rule=case.rule, loss=case.loss, response_sd=case.response_sd,
        residual_sd=case.residual_sd, replicates=case.replicates, seed=case.seed,
        adaptive=case.adaptive, time_ordered=case.time_ordered, support=case.support,
        relevant_columns=case.relevant_columns,
    )  # fmt: skip
