"""The stages in order: from a design file to a report."""

from __future__ import annotations

import math
import platform
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from datetime import UTC, datetime
from importlib.metadata import version
from shlex import quote

import numpy as np

from scantling.core.streams import Mapper, Work, worker_pool
from scantling.design.expand import Columns, expanded_count
from scantling.design.parse import read_design
from scantling.design.series_file import SeriesFile
from scantling.design.spec import Design
from scantling.design.support import named_places
from scantling.design.table import Table, read_tables
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.series import diagnose_series
from scantling.law.diagnosed import Diagnosed, diagnosed
from scantling.law.extremes_check import extremes_against_law
from scantling.law.families import ErrorLaw
from scantling.law.fit import error_law
from scantling.planning.breakthrough import break_through
from scantling.planning.budget import assemble
from scantling.planning.case import Case, draw_laws
from scantling.planning.ceiling import ceiling
from scantling.planning.limit import Limit, missing_limit
from scantling.planning.outlook import outlook
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
STAGES = ("read", "residuals", "diagnose", "law", "limits", "stress", "rows", "remedies")
Progress = Callable[[str], None]
"""Called with the name of each stage as it begins."""


def vet(
    design: Design, *, workers: int | Work = 1, progress: Progress | None = None,
    command: str | None = None,
) -> Report:  # fmt: skip
    """Vet a design: read, diagnose, fit the error law, find the limits, judge.

    Parameters
    ----------
    design : Design
        From `read_design`.
    workers : int or Work
        Processes, or all about how the work is done; the result does not depend on it.
    progress : callable, optional
        Called with each stage's name.
    command : str, optional
        The command line to put in the receipt.

    Raises
    ------
    InputError
        If the data are not usable.
    """
    commands = None if command is None else (command,)
    return vet_each((design,), workers=workers, progress=progress, commands=commands)[0]


def vet_each(
    designs: Sequence[Design], *, workers: int | Work = 1, progress: Progress | None = None,
    commands: Sequence[str] | None = None,
) -> tuple[Report, ...]:  # fmt: skip
    """Vet one response after another of one design file, with what they share done once.

    Each report is the one `vet` makes of its design. The table is read once; where the raw
    columns and the rows are the same, they are expanded and diagnosed once.

    Parameters
    ----------
    designs : sequence of Design
        From `read_designs`.
    workers, progress
        As in `vet`; with several designs each stage's name is followed by ": " and the response.
    commands : sequence of str, optional
        The command line to put in each receipt.

    Raises
    ------
    InputError
        If the data are not usable for one of them.
    """
    started = time.monotonic()
    tell: Progress = progress or (lambda stage: None)
    tell("read")
    tables = read_tables(designs)
    shared, reports = None, []
    with worker_pool(workers, _largest(designs, tables)) as mapper:
        for place, (design, table) in enumerate(zip(designs, tables, strict=True)):
            named = _naming(tell, design)
            found = diagnosed(design, table, named, shared)
            shared = found.shared
            command = commands[place] if commands else None
            reports.append(_judged(design, table, found, mapper, named, command, started))
            started = time.monotonic()
    return tuple(reports)


def _naming(tell: Progress, design: Design) -> Progress:
    """What is told of a stage also names the response, where the design file lists several."""
    if not design.data.other_responses:
        return tell
    return lambda stage: tell(f"{stage}: {design.data.response}")


def _largest(designs: Sequence[Design], tables: Sequence[Table]) -> int:
    """Bytes of the largest table of columns there will be."""
    return max(
        8 * table.response.size * expanded_count(len(table.names), design.expand)
        for design, table in zip(designs, tables, strict=True)
    )


def _judged(
    design: Design, table: Table, found: Diagnosed, mapper: Mapper, tell: Progress,
    command: str | None, started: float,
) -> Report:  # fmt: skip
    """Limits, refits, remedies and the verdict on what was found."""
    residuals, diagnosis = found.residuals, found.diagnosis
    case = make_case(design, found.columns, residuals, found.law)
    tell("limits")
    noise = break_through(case, mapper)
    tell("stress")
    selection, limits = _selection(case, diagnosis, mapper)
    tell("rows")
    ahead = outlook(
        design, case, found.columns, residuals, diagnosis, noise, mapper,
        refits=selection is not None,
    )  # fmt: skip
    budget = assemble(
        target=case.target,
        rows=case.rows,
        asked=case.columns,
        noise=noise,
        signal=signal(case, noise.fitted, noise.drawn),
        stability=limits[0],
        geometry=limits[1],
        ceiling=ceiling(diagnosis, case.rows, case.loadings, case.loss),
        assured=ahead.assured,
        plan=ahead.rows,
        effects=ahead.effects,
    )
    tell("remedies")
    helpful: tuple[Remedy, ...] = ()
    if diagnosis.moment(2) != "missing":
        longer = () if ahead.rows is None else ahead.rows.table
        helpful = remedies(
            design, table, residuals, diagnosis, case, noise, limits[0], mapper, longer
        )
    return Report(
        design=design,
        read=_as_read(table, found.columns, residuals),
        diagnosis=diagnosis,
        law=found.law,
        budget=budget,
        stress=selection,
        remedies=helpful,
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
    return diagnose_each((design,), commands=None if command is None else (command,))[0]


def diagnose_each(
    designs: Sequence[Design], *, commands: Sequence[str] | None = None
) -> tuple[DesignDiagnosis, ...]:
    """The diagnostics of one response after another, with what they share done once.

    Parameters and errors as in `vet_each`.
    """
    started = time.monotonic()
    tables = read_tables(designs)
    shared, out = None, []
    with worker_pool(1):
        for place, (design, table) in enumerate(zip(designs, tables, strict=True)):
            found = diagnosed(design, table, lambda stage: None, shared)
            shared = found.shared
            command = commands[place] if commands else repeating("diagnose", design)
            out.append(
                DesignDiagnosis(
                    design=design,
                    read=_as_read(table, found.columns, found.residuals),
                    diagnosis=found.diagnosis,
                    law=found.law,
                    receipt=_receipt(design, table, command, started),
                )
            )
            started = time.monotonic()
    return tuple(out)


def repeating(command: str, design: Design, *options: str) -> str:
    """The command line that computes a design's one response again."""
    words = ["scantling", command, quote(design.path.name)]
    if design.data.other_responses:
        words += ["--response", quote(design.data.response)]
    return " ".join([*words, *options])


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
        law = error_law(
            values - values.mean(), volatility=volatility, autoregression=found.autoregression,
            seed=seed, tail=found.tail,
        )  # fmt: skip
        extremes = extremes_against_law(values, law, seed=seed)
    return SeriesReport(
        source=source,
        time_ordered=time_ordered,
        diagnosis=found,
        law=law,
        extremes=extremes,
        receipt=receipt_of(
            seed, 0, ((source.file_name, source.sha256),), command or "scantling diagnose", started
        ),
    )


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
        loss=design.penalty.loss,
        adaptive=design.penalty.adaptive,
        time_ordered=columns.time_ordered,
        replicates=design.simulation.replicates,
        seed=design.simulation.seed,
        support=design.target.support if isinstance(design.target.support, str) else "named",
        relevant_columns=residuals.selected
        if design.target.support == "pilot"
        else named_places(design, columns.names),
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
    return receipt_of(
        design.simulation.seed,
        design.simulation.replicates,
        ((design.path.name, design.sha256), (table.file_name, table.sha256)),
        command or repeating("vet", design),
        started,
    )


def receipt_of(
    seed: int, replicates: int, inputs: tuple[tuple[str, str], ...], command: str, started: float
) -> Receipt:
    """What repeats a run that began at a monotonic time."""
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
