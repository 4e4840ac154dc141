"""The whole result of one vetting, as one frozen record."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from scantling.design.series_file import SeriesFile
from scantling.design.spec import Design, TargetSpec
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.series import SeriesDiagnosis
from scantling.law.families import ErrorLaw
from scantling.planning.budget import Budget
from scantling.planning.plan import Plan
from scantling.planning.remedies import Remedy
from scantling.planning.stress import Stress
from scantling.planning.verdict import Verdict


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
    """Whether rows follow one another in time."""
    span: tuple[str, str] | None
    """First and last time label used."""
    explained: float
    """Share of the response's variance the pilot explains out of fold."""
    pilot_columns: tuple[str, ...]
    """Columns of the pilot on all rows."""
    folds: str
    """contiguous | random."""
    response_sd: float
    """Standard deviation of the response, in its units."""
    residual_sd: float
    """Standard deviation of the pilot's residuals, in units of the response."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Receipt:
    """What is needed to run it again and compare."""

    version: str
    """Of this package."""
    seed: int
    """Of every stream of the run."""
    replicates: int
    """Monte Carlo replicates."""
    inputs: tuple[tuple[str, str], ...]
    """Base name and sha-256 of each file read."""
    libraries: tuple[tuple[str, str], ...]
    """Name and version."""
    command: str
    """Command line that repeats the run; without what does not change the result."""
    seconds: float
    """Wall-clock time of the run; volatile."""
    finished: str
    """When it ended, UTC; volatile."""


class HasLaw(Protocol):
    """What the section on the error law needs."""

    @property
    def law(self) -> ErrorLaw:
        """Fitted error law."""


class Diagnosed(Protocol):
    """What the sections on design, tails, moments and law need."""

    @property
    def design(self) -> Design:
        """The design file."""

    @property
    def read(self) -> DesignAsRead:
        """What reading and expanding made of it."""

    @property
    def diagnosis(self) -> Diagnosis:
        """What the data say."""

    @property
    def law(self) -> ErrorLaw:
        """Fitted error law."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DesignDiagnosis:
    """The diagnostics of one design, without a budget."""

    design: Design
    """The design file."""
    read: DesignAsRead
    """What reading and expanding made of it."""
    diagnosis: Diagnosis
    """What the data say."""
    law: ErrorLaw
    """Fitted error law."""
    receipt: Receipt
    """What is needed to run it again."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesReport:
    """The diagnostics of one bare series."""

    source: SeriesFile
    """Where it comes from."""
    time_ordered: bool
    """Whether its values follow one another in time."""
    diagnosis: SeriesDiagnosis
    """What it says."""
    law: ErrorLaw
    """Law fitted to it."""
    extremes: tuple[tuple[int, float, float, float], ...]
    """Rank, observed size, the law's median and 95 % point there."""
    receipt: Receipt
    """What is needed to run it again."""


class Budgeted(Protocol):
    """What the first screen and the sections on limits, selection and rows need."""

    @property
    def title(self) -> str:
        """Shown first."""

    @property
    def target(self) -> TargetSpec:
        """What has to be achieved."""

    @property
    def budget(self) -> Budget:
        """All limits."""

    @property
    def stress(self) -> Stress | None:
        """Refits."""

    @property
    def remedies(self) -> tuple[Remedy, ...]:
        """What would help."""

    @property
    def verdict(self) -> Verdict:
        """The judgement."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanReport:
    """The budget of a design on paper."""

    title: str
    """Shown first."""
    plan: Plan
    """What was stated."""
    facts: tuple[str, ...]
    """The statement in sentences, for the reader."""
    budget: Budget
    """All limits, and what they allow."""
    stress: Stress | None
    """None where selection was not simulated."""
    verdict: Verdict
    """What the report says first."""
    receipt: Receipt
    """What repeats the run."""

    @property
    def target(self) -> TargetSpec:
        """What the design has to achieve."""
        return self.plan.target

    @property
    def remedies(self) -> tuple[Remedy, ...]:
        """None are computed for columns on paper."""
        return ()

    def to_json(self) -> str:
        """The JSON twin: schema scantling-budget/1."""
        from scantling.report.budget_document import plan_json

        return plan_json(self)


@dataclass(frozen=True, slots=True, kw_only=True)
class Report:
    """One design, vetted."""

    design: Design
    """As asked for."""
    read: DesignAsRead
    """As found in the data."""
    diagnosis: Diagnosis
    """Tails, moments, variance, dependence, geometry."""
    law: ErrorLaw
    """Fitted to the residuals."""
    budget: Budget
    """All limits, and what they allow."""
    stress: Stress | None
    """None where selection could not be simulated; the reason is the stability limit's note."""
    remedies: tuple[Remedy, ...]
    """Best first; empty where none applies."""
    verdict: Verdict
    """What the report says first."""
    receipt: Receipt
    """What repeats the run."""

    @property
    def title(self) -> str:
        """Of the design."""
        return self.design.title

    @property
    def target(self) -> TargetSpec:
        """What the design has to achieve."""
        return self.design.target

    def to_json(self) -> str:
        """The JSON twin of the text report: schema scantling-report/1, keys stable."""
        from scantling.report.document import report_json

        return report_json(self)
