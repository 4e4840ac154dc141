"""The planning stage alone: from a stated design to its budget."""

from __future__ import annotations

import time
from collections.abc import Mapping
from typing import Any

from scantling.core.streams import Work, worker_pool
from scantling.design.stated import Statement, written_law
from scantling.errors import InputError
from scantling.pipeline import Progress, receipt_of
from scantling.planning.paper import stated_ceiling, stated_plan, target_of
from scantling.planning.plan import Plan
from scantling.planning.stated import budget_of
from scantling.planning.verdict import stated_verdict
from scantling.report.record import PlanReport

DEFAULTS: Mapping[str, Any] = {
    "column_law": None, "correlation": 0.0, "rule": "plug-in", "loss": "squared",
    "relevant": 10, "smallest_effect": 0.15, "risk": 0.05, "power": 0.80, "stability": 0.75,
    "false_share": 0.20, "explained": None, "replicates": 400, "seed": 1,
}  # fmt: skip
TARGET = ("relevant", "smallest_effect", "risk", "power", "stability", "false_share")
PLAN = (
    "rows", "columns", "correlation", "rule", "loss", "explained", "replicates", "seed",
)  # fmt: skip
NEEDED = {"rows": "--rows", "columns": "--columns", "law": "--law"}


def plan_design(
    statement: Statement, *, workers: int | Work = 1, progress: Progress | None = None,
    command: str = "scantling budget",
) -> PlanReport:  # fmt: skip
    """The budget of a stated design, with its verdict.

    Parameters
    ----------
    statement : Statement
        What is said; what is not takes the defaults of a design file.
    workers : int or Work
    progress : callable, optional
        Called with each stage's name.
    command : str
        The command line to put in the receipt.

    Raises
    ------
    InputError
        If rows, columns or law are not said, or a value is out of range.
    """
    started = time.monotonic()
    tell: Progress = progress or (lambda stage: None)
    plan, facts = plan_of(statement)
    tell("limits")
    with worker_pool(workers) as mapper:
        done = budget_of(plan, stated_ceiling(plan), mapper)
    return PlanReport(
        title=statement.title,
        plan=plan,
        facts=facts,
        budget=done.budget,
        stress=done.stress,
        verdict=stated_verdict(plan, done.budget, done.stress),
        receipt=receipt_of(plan.seed, plan.replicates, statement.inputs, command, started),
    )


def plan_of(statement: Statement) -> tuple[Plan, tuple[str, ...]]:
    """The plan that a statement makes, and the statement in sentences.

    Raises
    ------
    InputError
        If rows, columns or law are not said, or a value is out of range.
    """
    for name, flag in NEEDED.items():
        if name not in statement.values:
            raise InputError(f"{name}: not stated; {flag}, a stated design or a report says it")
    values = {**DEFAULTS, **statement.values}
    laws = {"law": written_law(values["law"])}
    laws["column_law"] = laws["law"] if values["column_law"] is None else written_law(
        values["column_law"]
    )  # fmt: skip
    try:
        target = target_of(**{key: values[key] for key in TARGET})
        plan = stated_plan(
            **{key: values[key] for key in PLAN}, target=target, **laws,
            named=_target_places(statement),
        )  # fmt: skip
    except InputError as fault:
        raise InputError(statement.placed(str(fault))) from fault
    return plan, (*_facts(values, laws), *statement.facts)


def _target_places(statement: Statement) -> tuple[str, str]:
    """Where relevant columns and effect stand; what they have in common is named once."""
    relevant, effect = (statement.places.get(key, key) for key in ("relevant", "smallest_effect"))
    shared, _, last = effect.rpartition(" ")
    return relevant, last if shared and relevant.startswith(f"{shared} ") else effect


def _facts(values: Mapping[str, Any], laws: Mapping[str, str]) -> tuple[str, ...]:
    """The statement in sentences."""
    alike = laws["law"] == laws["column_law"]
    errors, drawn = (laws[key].replace(",", ", ") for key in ("law", "column_law"))  # to be wrapped
    columns = "of the same law" if alike else f"each {drawn}"
    tie = f", correlation {values['correlation']:g} between all" if values["correlation"] else (
        ", independent"
    )  # fmt: skip
    return (
        f"{values['rows']:,} rows; errors {errors}; {values['columns']:,} columns {columns}{tie}.",
        f"Asked for: {values['relevant']} relevant columns of effect"
        f" {values['smallest_effect']:g}, risk {values['risk']:g}, power {values['power']:g},"
        f" stability {values['stability']:g}, false share {values['false_share']:g};"
        f" {values['loss']} loss, {values['rule']} penalty.",
    )
