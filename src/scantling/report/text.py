"""The text report: a record in, plain text out, byte for byte the same each time."""

from __future__ import annotations

from scantling.report import dependence_section, limits_section, sections, tails_section
from scantling.report.first_screen import first_screen
from scantling.report.record import Report

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
        limits_section.remedies,
        limits_section.cautions,
        sections.receipt,
    ):
        lines += section(report, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"
