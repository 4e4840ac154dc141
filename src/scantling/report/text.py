"""The text report: a record in, plain text out, byte for byte the same each time."""

from __future__ import annotations

from scantling.report import (
    dependence_section,
    limits_section,
    rows_section,
    sections,
    tails_section,
)
from scantling.report.first_screen import first_screen
from scantling.report.record import PlanReport, Report
from scantling.report.wording import PLAN_CAUTIONS, paragraph

NARROWEST = 80


def render(report: Report, width: int = 80) -> str:
    """Return the report as plain text.

    Parameters
    ----------
    report : Report
    width : int
        Columns of the page; at least 80, which the tables need.
    """
    width = max(width, NARROWEST)
    lines = first_screen(report, width)
    for section in (
        limits_section.reasons,
        sections.design,
        tails_section.tails,
        tails_section.worst_columns,
        tails_section.moments,
        dependence_section.variance,
        sections.structure,
        sections.signal,
        sections.law,
        limits_section.limits,
        limits_section.selection,
        rows_section.rows,
        limits_section.remedies,
        limits_section.cautions,
        sections.receipt,
    ):
        lines += section(report, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"


def render_plan(report: PlanReport, width: int = 80) -> str:
    """Return the budget of a design on paper as plain text, like `render`."""
    width = max(width, NARROWEST)
    lines = first_screen(report, width)
    lines += ["", "The design as stated"]
    for fact in report.facts:
        lines += paragraph(fact, width)
    for section in (
        limits_section.reasons,
        limits_section.limits,
        limits_section.selection,
        rows_section.rows,
    ):
        lines += section(report, width)
    lines += sections.heading("Cautions")
    for caution in PLAN_CAUTIONS:
        lines += paragraph(caution, width)
    lines += sections.receipt_lines(report.receipt, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"
