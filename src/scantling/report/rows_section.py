"""Other rows and other targets: what would have to change for the columns to be allowed."""

from __future__ import annotations

from scantling.planning.budget import Budget
from scantling.planning.rows import RowsEntry
from scantling.planning.verdict import chance
from scantling.report.record import Budgeted
from scantling.report.sections import heading
from scantling.report.wording import count, many, paragraph, table

RISK_DRAWS = 200
"""Draws behind a risk in the table; no finer probability is shown."""


def rows(report: Budgeted, width: int) -> list[str]:
    """Rows needed by limit, allowed columns by rows, and by effect and relevant columns."""
    budget = report.budget
    lines = heading("Other rows and targets")
    plan = budget.rows_plan
    if plan is None:
        return lines + paragraph(f"Not computed: {budget.rows_note or 'not asked for'}.", width)
    lines += paragraph(f"Rows needed for {many(budget.asked, 'column')}: {_needed(budget)}.", width)
    parts = [
        f"{name} {count(needed.rows)}" for name, needed in plan.by_limit if needed.rows is not None
    ]
    if parts:
        lines += paragraph(f"By limit: {', '.join(parts)}.", width)
    lines += paragraph(
        f"Searched up to {count(plan.searched_to)} rows, columns and errors drawn afresh"
        " (generative); point values, to about 5 % in rows.",
        width,
    )
    lines += ["", *_by_rows(plan.table, budget)]
    if plan.falls:
        lines += paragraph(
            "The noise limit falls in places as rows grow: a standardised column cannot exceed"
            " the root of the rows, so very small samples cap large scores.",
            width,
        )
    if budget.effects:
        lines += ["", *_by_target(report)]
        lines += paragraph(
            f"Allowed columns at the present {budget.rows:,} rows, for other smallest effects (sd"
            " of the response per sd of a column) and other numbers of columns that matter.",
            width,
        )
    return lines


def _needed(budget: Budget) -> str:
    return count(budget.rows_needed) if budget.rows_needed else budget.rows_note or "unknown"


def _by_rows(entries: tuple[RowsEntry, ...], budget: Budget) -> list[str]:
    cells = [["Rows", "noise", "signal", "stability", "allowed", "risk at all"]]
    for entry in entries:
        values = (entry.noise, entry.signal, entry.stability, entry.allowed)
        cells.append(
            [
                f"{entry.rows:,}",
                *("-" if value is None else _most(value, budget.asked) for value in values),
                chance(entry.risk, RISK_DRAWS),
            ]
        )
    return table(cells)


def _by_target(report: Budgeted) -> list[str]:
    entries = report.budget.effects
    effects = sorted({entry.smallest_effect for entry in entries})
    cells = [["Relevant", *(f"effect {effect:.3g}" for effect in effects)]]
    for relevant in sorted({entry.relevant for entry in entries}):
        found = {e.smallest_effect: e.allowed for e in entries if e.relevant == relevant}
        cells.append(
            [f"{relevant:,}", *(_most(found[effect], report.budget.asked) for effect in effects)]
        )
    return table(cells)


def _most(value: int, asked: int) -> str:
    return "all" if value >= asked else f"{value:,}"
