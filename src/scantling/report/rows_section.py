"""Other rows and other targets: what would have to change for the columns to be allowed."""

from __future__ import annotations

from scantling.planning.budget import Budget
from scantling.planning.rows import RowsEntry
from scantling.planning.verdict import chance
from scantling.report.record import Budgeted
from scantling.report.sections import heading
from scantling.report.wording import about, count, many, paragraph, table

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
        f" (generative){_beside(budget)}. Limits below are point values; risks are of"
        f" {RISK_DRAWS} draws, with their 90 % simulation error.",
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
        if any(entry.allowed is None for entry in budget.effects):
            lines += paragraph(
                "A dash: so many columns of such an effect would explain all of the response's"
                " variance or more, which no response allows.",
                width,
            )
    return lines


def _needed(budget: Budget) -> str:
    if not budget.rows_needed:
        return budget.rows_note or "unknown"
    return about(budget.rows_needed, budget.rows_range)


def _beside(budget: Budget) -> str:
    """Why the present rows need not give the limits above."""
    if budget.noise.mode == "generative":
        return ""
    return ", while the limits above take the columns as they are"


def _by_rows(entries: tuple[RowsEntry, ...], budget: Budget) -> list[str]:
    cells = [["Rows", "noise", "signal", "stability", "allowed", "risk at all", "+-"]]
    for entry in entries:
        values = (entry.noise, entry.signal, entry.stability, entry.allowed)
        cells.append(
            [
                f"{entry.rows:,}",
                *("-" if value is None else _most(value, budget.asked) for value in values),
                chance(entry.risk, RISK_DRAWS),
                f"{entry.risk_error:.3f}",
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
            [f"{relevant:,}", *(_target_cell(found[effect], report.budget) for effect in effects)]
        )
    return table(cells)


def _target_cell(allowed: int | None, budget: Budget) -> str:
    """Allowed columns, or that no response allows the target."""
    return "-" if allowed is None else _most(allowed, budget.asked)


def _most(value: int, asked: int) -> str:
    return "all" if value >= asked else f"{value:,}"
