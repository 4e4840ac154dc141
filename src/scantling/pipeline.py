"""The stages in order: from a design file to a report."""

from __future__ import annotations

import math
import platform
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from importlib.metadata import version

import numpy as np

from scantling.core.streams import Mapper, worker_pool
from scantling.design.expand import Columns, expand
from scantling.design.parse import read_design
from scantling.design.series_file import SeriesFile
from scantling.design.spec import Design
from scantling.design.table import Table, read_table
from scantling.diagnostics.battery import Diagnosis, diagnose
from scantling.diagnostics.residuals import Residuals, fit_pilot
from scantling.diagnostics.series import diagnose_series
from scantling.errors import InputError
from scantling.law.extremes_check import extremes_against_law
from scantling.law.families import ErrorLaw
from scantling.law.fit import error_law
from scantling.planning.breakthrough import break_through
from scantling.planning.budget import assemble
from scantling.planning.case import Case, draw_laws
from scantling.planning.ceiling import ceiling
from scantling.planning.limit import Limit, missing_limit
from scantling.planning.remedies import Remedy, remedies
from scantling.planning.signal import signal
from scantling.planning.stress import Stress, stress
from scantling.planning.verdict import variance_missing, verdict
from scantling.report.record import (
    DesignAsRead,
    DesignDiagnosis,
    Receipt,
    Report,
    SeriesReport,
)

LIBRARIES = ("numpy", "scipy", "pandas", "statsmodels", "scikit-learn", "arch")
STAGES = ("read", "residuals", "diagnose", "law", "limits", "stress", "remedies")
EXACT = 1e-7
"""Residual sd over response sd below which a fit counts as exact."""
Progress = Callable[[str], None]
"""Called with the name of each stage as it begins."""


def vet(
    design: Design, *, workers: int = 1, progress: Progress | None = None,
    command: str | None = None,
) -> Report:  # fmt: skip
    """Vet a design: read, diagnose, fit the error law, find the limits, judge.

    Parameters
    ----------
    design : Design
        From `read_design`.
    workers : int
        Threads; the result does not depend on it.
    progress : callable, optional
        Called with each stage's name.
    command : str, optional
        The command line to put in the receipt.

    Raises
    ------
    InputError
        If the data are not usable.
    """
    started = time.monotonic()
    tell: Progress = progress or (lambda stage: None)
    seed = design.simulation.seed
    tell("read")
    table = read_table(design)
    columns = expand(design, table)
    with worker_pool(workers) as mapper:
        tell("residuals")
        residuals = pilot(design, table, columns)
        tell("diagnose")
        diagnosis = diagnose(
            columns.values,
            residuals,
            time_ordered=columns.time_ordered,
            seed=seed,
            first_powers=(columns.power == 1) & (columns.base >= 0),
        )
        tell("law")
        law = error_law(
            residuals.values, volatility=diagnosis.volatility, seed=seed, tail=diagnosis.errors
        )
        case = make_case(design, columns, residuals, law)
        tell("limits")
        noise = break_through(case, mapper)
        tell("stress")
        selection, limits = _selection(case, diagnosis, mapper)
        budget = assemble(
            rows=case.rows,
            asked=case.columns,
            noise=noise,
            signal=signal(case, noise.fitted, noise.drawn),
            stability=limits[0],
            geometry=limits[1],
            ceiling=ceiling(diagnosis, case.rows, case.rule),
        )
        tell("remedies")
        found: tuple[Remedy, ...] = ()
        if diagnosis.moment(2) != "missing":
            found = remedies(design, table, residuals, diagnosis, case, noise, limits[0], mapper)
    return Report(
        design=design,
        read=_as_read(table, columns, residuals),
        diagnosis=diagnosis,
        law=law,
        budget=budget,
        stress=selection,
        remedies=found,
        verdict=verdict(case, diagnosis, budget, selection),
        receipt=_receipt(design, table, command, started),
    )


def diagnose_design(design: Design, *, command: str | None = None) -> DesignDiagnosis:
    """The diagnostics stage alone: read, pilot, diagnosis, error law.

    Raises
    ------
    InputError
        If the data are not usable.
    """
    started = time.monotonic()
    seed = design.simulation.seed
    table = read_table(design)
    columns = expand(design, table)
    with worker_pool(1):
        residuals = pilot(design, table, columns)
        diagnosis = diagnose(
            columns.values,
            residuals,
            time_ordered=columns.time_ordered,
            seed=seed,
            first_powers=(columns.power == 1) & (columns.base >= 0),
        )
        law = error_law(
            residuals.values, volatility=diagnosis.volatility, seed=seed, tail=diagnosis.errors
        )
    return DesignDiagnosis(
        design=design,
        read=_as_read(table, columns, residuals),
        diagnosis=diagnosis,
        law=law,
        receipt=_receipt(
            design, table, command or f"scantling diagnose {design.path.name}", started
        ),
    )


def diagnose_column(
    source: SeriesFile, *, time_ordered: bool = True, seed: int = 1, command: str = ""
) -> SeriesReport:
    """The diagnostics of one bare series, such as the residuals of a submitted model.

    Parameters
    ----------
    source : SeriesFile
        From `read_series`.
    time_ordered : bool
        Whether its values follow one another in time.
    seed : int
    command : str
        The command line to put in the receipt.
    """
    started = time.monotonic()
    values = np.asarray(source.values)
    with worker_pool(1):
        found = diagnose_series(values, time_ordered=time_ordered, seed=seed)
        volatility = None if found.clustering is None else found.clustering.volatility
        law = error_law(values - values.mean(), volatility=volatility, seed=seed, tail=found.tail)
        extremes = extremes_against_law(values, law, seed=seed)
    return SeriesReport(
        source=source,
        time_ordered=time_ordered,
        diagnosis=found,
        law=law,
        extremes=extremes,
        receipt=_receipt_of(
            seed, 0, ((source.file_name, source.sha256),), command or "scantling diagnose", started
        ),
    )


def pilot(design: Design, table: Table, columns: Columns) -> Residuals:
    """Residuals of the pilot; refused where nothing is left to diagnose or to tell apart."""
    relevant, asked = design.target.relevant, len(columns.names)
    if relevant >= max(2, asked):
        raise InputError(
            f"{design.path.name}: [target] relevant = {relevant}: the design has {asked} candidate"
            f" columns; a number below {max(2, asked)} is needed"
        )
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


def make_case(design: Design, columns: Columns, residuals: Residuals, law: ErrorLaw) -> Case:
    """The design as the simulations see it."""
    return Case(
        X=columns.values,
        law=law,
        law_draws=draw_laws(law, design.simulation.seed),
        response_sd=residuals.response_sd,
        residual_sd=residuals.sd,
        target=design.target,
        rule=design.penalty.rule,
        replicates=design.simulation.replicates,
        seed=design.simulation.seed,
    )


def _selection(
    case: Case, diagnosis: Diagnosis, mapper: Mapper
) -> tuple[Stress | None, tuple[Limit, Limit]]:
    """Stress runs with stability and geometry limits, or the reason there are none."""
    lack = variance_missing(diagnosis)
    if not lack and not math.isfinite(case.law.sd):
        lack = "the fitted error law has no variance"
    if lack:
        return None, (missing_limit(lack), missing_limit(lack))
    done = stress(case, mapper)
    return done, (done.stability, done.geometry)


def _as_read(table: Table, columns: Columns, residuals: Residuals) -> DesignAsRead:
    return DesignAsRead(
        names=columns.names,
        rows=columns.response.size,
        raw_columns=len(table.names),
        rows_dropped=table.rows_dropped,
        rows_lost=columns.rows_lost,
        skipped=table.skipped,
        dropped=columns.dropped,
        time_ordered=columns.time_ordered,
        span=None if columns.time is None else (columns.time[0], columns.time[-1]),
        explained=residuals.explained,
        pilot_columns=tuple(columns.names[j] for j in residuals.selected),
        folds=residuals.folds,
        response_sd=residuals.response_sd,
        residual_sd=residuals.sd,
    )


def _receipt(design: Design, table: Table, command: str | None, started: float) -> Receipt:
    return _receipt_of(
        design.simulation.seed,
        design.simulation.replicates,
        ((design.path.name, design.sha256), (table.file_name, table.sha256)),
        command or f"scantling vet {design.path.name}",
        started,
    )


def _receipt_of(
    seed: int, replicates: int, inputs: tuple[tuple[str, str], ...], command: str, started: float
) -> Receipt:
    return Receipt(
        version=version("scantling"),
        seed=seed,
        replicates=replicates,
        inputs=inputs,
        libraries=(
            ("python", platform.python_version()),
            *((name, version(name)) for name in LIBRARIES),
        ),
        command=command,
        seconds=round(time.monotonic() - started, 2),
        finished=datetime.now(UTC).isoformat(timespec="seconds"),
    )


def with_simulation(
    design: Design, *, seed: int | None = None, replicates: int | None = None
) -> Design:
    """The design with other Monte Carlo settings; None keeps the file's."""
    settings = design.simulation
    if seed is not None:
        settings = replace(settings, seed=seed)
    if replicates is not None:
        settings = replace(settings, replicates=replicates)
    return replace(design, simulation=settings)


__all__ = ["STAGES", "Progress", "read_design", "vet", "with_simulation"]
