"""The whole result of one vetting, as one frozen record."""

from __future__ import annotations

from dataclasses import dataclass

from scantling.design.spec import Design
from scantling.diagnostics.battery import Diagnosis
from scantling.law.families import ErrorLaw
from scantling.planning.budget import Budget
from scantling.planning.remedies import Remedy
from scantling.planning.stress import Stress
from scantling.planning.verdict import Verdict

SCHEMA = "scantling-report/1"


@dataclass(frozen=True, slots=True, kw_only=True)
class DesignAsRead:
    """What reading and expanding made of the design."""

    names: tuple[str, ...]
    """The P candidate columns."""
    rows: int
    """Rows used."""
    raw_columns: int
    """Columns of the table that were taken."""
    rows_dropped: int
    """Rows left out for missing values."""
    rows_lost: int
    """Rows at the start that have no lags."""
    skipped: tuple[str, ...]
    """Columns of the table without any number."""
    dropped: tuple[tuple[str, str], ...]
    """Candidates the expansion made constant or made twice, with the reason."""
    time_ordered: bool
    span: tuple[str, str] | None
    """First and last time label used."""
    explained: float
    """Share of the response's variance the pilot explains out of fold."""
    pilot_columns: tuple[str, ...]
    """Columns of the pilot on all rows."""
    folds: str
    response_sd: float
    residual_sd: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Receipt:
    """What is needed to run it again and compare."""

    version: str
    seed: int
    replicates: int
    inputs: tuple[tuple[str, str], ...]
    """Base name and sha-256 of each file read."""
    libraries: tuple[tuple[str, str], ...]
    """Name and version."""
    command: str
    seconds: float
    """Wall-clock time of the run; volatile."""
    finished: str
    """When it ended, UTC; volatile."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Report:
    """One design, vetted."""

    design: Design
    read: DesignAsRead
    diagnosis: Diagnosis
    law: ErrorLaw
    budget: Budget
    stress: Stress | None
    """None where selection could not be simulated; the reason is the stability limit's note."""
    remedies: tuple[Remedy, ...]
    verdict: Verdict
    receipt: Receipt

    def to_json(self) -> str:
        """The JSON twin of the text report: schema scantling-report/1, keys stable."""
        from scantling.report.document import report_json

        return report_json(self)
