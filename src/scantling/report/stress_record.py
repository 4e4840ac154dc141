"""The result of the stress stage alone, as one frozen record."""

from __future__ import annotations

from dataclasses import dataclass

from scantling.design.spec import TargetSpec
from scantling.law.families import ErrorLaw
from scantling.planning.refits import StressRun
from scantling.planning.stress_verdict import Judgement
from scantling.report.record import Receipt


@dataclass(frozen=True, slots=True, kw_only=True)
class StressReport:
    """Selection at chosen rows and columns, with one penalty rule or two."""

    title: str
    """Shown first."""
    rows: int
    """n of the refits."""
    columns: int
    """p of the refits."""
    rule: str
    """Penalty rule that is judged."""
    compare: str | None
    """A second one on the same draws."""
    loss: str
    """squared | huber | absolute | square-root."""
    facts: tuple[str, ...]
    """What is refitted, in sentences."""
    target: TargetSpec
    """What has to be achieved."""
    law: ErrorLaw
    """Of the errors."""
    names: tuple[str, ...]
    """Of the columns; empty on paper."""
    runs: tuple[StressRun, ...]
    """By law, the judged rule first; empty where the law has no variance."""
    judgement: Judgement
    """Whether the criteria are met."""
    compared: Judgement | None
    """The same of the rule that is compared; None where there is none, or no run."""
    receipt: Receipt
    """What repeats the run."""

    def to_json(self) -> str:
        """The JSON twin: schema scantling-stress/1."""
        from scantling.report.stress_document import stress_json

        return stress_json(self)
