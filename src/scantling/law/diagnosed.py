"""One response as far as the error law: expanded, the pilot fitted, diagnosed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from scantling.design.expand import Columns, RawExpansion, expand, expand_raw
from scantling.design.spec import Design
from scantling.design.support import named_places
from scantling.design.table import Table
from scantling.diagnostics.battery import Diagnosis, diagnose
from scantling.diagnostics.column_findings import ColumnFindings, column_findings
from scantling.diagnostics.parents import column_parents
from scantling.diagnostics.residuals import Residuals, fit_pilot
from scantling.errors import InputError
from scantling.law.families import ErrorLaw
from scantling.law.fit import error_law

EXACT = 1e-7
"""Residual sd over response sd below which a fit counts as exact."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Shared:
    """What the next response of the same file can use again."""

    raw: RawExpansion
    """The candidates that do not depend on the response."""
    alone: ColumnFindings
    """What they say by themselves."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Diagnosed:
    """One response as far as the error law."""

    columns: Columns
    """The candidates."""
    residuals: Residuals
    """Of the pilot."""
    diagnosis: Diagnosis
    """What the data say."""
    law: ErrorLaw
    """Fitted error law."""
    shared: Shared
    """For the next response."""


def diagnosed(
    design: Design, table: Table, tell: Callable[[str], None], last: Shared | None = None
) -> Diagnosed:
    """Expand, fit the pilot, diagnose and fit the law; `last` is what another response left.

    `tell` is called with the name of each stage. Raises InputError if the data are not usable.
    """
    seed = design.simulation.seed
    raw = expand_raw(design, table, known=None if last is None else last.raw)
    columns = expand(design, table, raw=raw)
    tell("residuals")
    residuals = pilot(design, table, columns)
    tell("diagnose")
    alone = column_findings(
        columns.values,
        dependent=columns.time_ordered,
        raw=int((columns.base >= 0).sum()),
        known=last.alone if last is not None and last.raw is raw else None,
    )
    diagnosis = diagnose(
        columns.values,
        residuals,
        time_ordered=columns.time_ordered,
        seed=seed,
        first_powers=(columns.power == 1) & (columns.base >= 0),
        parents=column_parents(columns),
        columns=alone.group,
        structure=alone.structure,
    )
    tell("law")
    law = error_law(
        residuals.values,
        volatility=diagnosis.volatility,
        autoregression=diagnosis.autoregression,
        seed=seed,
        tail=diagnosis.errors,
    )
    return Diagnosed(
        columns=columns,
        residuals=residuals,
        diagnosis=diagnosis,
        law=law,
        shared=Shared(raw=raw, alone=alone),
    )


def pilot(design: Design, table: Table, columns: Columns) -> Residuals:
    """Residuals of the pilot; refused where nothing is left to diagnose or to tell apart."""
    relevant, asked = design.target.relevant, len(columns.names)
    if relevant >= max(2, asked):
        raise InputError(
            f"{design.path.name}: [target] relevant = {relevant}: the design has {asked} candidate"
            f" columns; a number below {max(2, asked)} is needed"
        )
    named_places(design, columns.names)
    residuals = fit_pilot(
        columns.values,
        columns.response,
        time_ordered=columns.time_ordered,
        seed=design.simulation.seed,
    )
    if residuals.sd <= EXACT * residuals.response_sd:
        raise InputError(
            f"{table.file_name}: the columns explain {table.response_name!r} exactly, so"
            " there are no errors to diagnose; another response or fewer columns are needed"
        )
    return residuals
