"""Text of the diagnostics stage alone: of a design, or of one bare series."""

from __future__ import annotations

from collections.abc import Sequence

from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.series import SeriesDiagnosis
from scantling.report import dependence_section, sections, tails_section
from scantling.report.chart import extremes_table, path_chart
from scantling.report.dependence_section import (
    counts_lines,
    findings_table,
    lacks_lines,
    level_lines,
    levels_words,
    volatility_words,
    worth_lines,
)
from scantling.report.record import DesignDiagnosis, SeriesReport
from scantling.report.sections import heading, receipt_lines
from scantling.report.tails_section import opinion_lines, side_lines, tail_words
from scantling.report.wording import (
    ALWAYS,
    index,
    labelled,
    p_value,
    paragraph,
    shortened,
    table,
)

NARROWEST = 80


def render_series(report: SeriesReport, width: int = 80) -> str:
    """The diagnostics of one series as plain text."""
    width = max(width, NARROWEST)
    found = report.diagnosis
    lines = [f"scantling diagnose: {shortened(report.source.name, width - 20)}"]
    lines += _summary(found, width)
    lines += _tails(report, width)
    lines += _moments(found, width)
    lines += _dependence(report, width)
    lines += _law(report, width)
    lines += _cautions(found.warnings, width)
    lines += receipt_lines(report.receipt, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"


def render_design_diagnosis(report: DesignDiagnosis, width: int = 80) -> str:
    """The diagnostics of a design as plain text."""
    width = max(width, NARROWEST)
    lines = [f"scantling diagnose: {shortened(report.design.title, width - 20)}"]
    for section in (
        sections.design,
        tails_section.tails,
        tails_section.moments,
        dependence_section.variance,
        sections.structure,
        sections.signal,
        sections.law,
    ):
        lines += section(report, width)
    lines += _cautions(report.diagnosis.warnings, width)
    lines += receipt_lines(report.receipt, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"


def _summary(found: SeriesDiagnosis, width: int) -> list[str]:
    """The answers in four lines."""
    tail = f"not assessed: {found.note}" if found.tail is None else tail_words(found.tail)
    answers = ", ".join(f"{int(m.order)} {m.answer}" for m in found.moments)
    lines = labelled("Values", f"{found.rows:,}", width)
    lines += labelled("Tail", tail, width)
    lines += labelled("Moments", answers, width)
    if found.clustering is None or found.levels is None:
        return lines + labelled("Volatility", "not looked at: values have no order", width)
    chance = p_value(found.levels.test.p_value)
    path = found.autoregression
    kept = "nothing shows that they persist" if path is None else levels_words(path)
    lines += labelled("Levels", f"{kept} ({chance})", width)
    test = found.clustering.test
    words = "clusters" if test.p_value <= 0.05 else "no clustering found"
    return lines + labelled("Volatility", f"{words} ({p_value(test.p_value)})", width)


def _tails(report: SeriesReport, width: int) -> list[str]:
    found = report.diagnosis
    lines = heading("Tails")
    if found.tail is None:
        return lines + paragraph(f"Not assessed: {found.note}.", width)
    lines += paragraph(f"Both tails: {tail_words(found.tail)}.", width)
    if found.note:
        lines += paragraph(f"Before that: {found.note}.", width)
    lines += side_lines(found.sides, found.heavier, width)
    lines += opinion_lines(found.opinions, width)
    if found.path is not None:
        path = found.path
        lines += paragraph(
            f"Hill's index by number of largest values; most stable ('=') from {path.stable_from:,}"
            f" to {path.stable_to:,}, at {index(path.stable_index)}:",
            width,
        )
        lines += path_chart(path, width)
    return lines


def _moments(found: SeriesDiagnosis, width: int) -> list[str]:
    lines = heading("Moments")
    lines += table(
        [["Order", *(str(q) for q in ORDERS)], ["answer", *(m.answer for m in found.moments)]]
    )
    for moment in found.moments:
        lines += paragraph(
            f"Order {moment.order:g}: {moment.answer}, because {moment.reason}.", width
        )
    return lines


def _dependence(report: SeriesReport, width: int) -> list[str]:
    found = report.diagnosis
    lines = heading("Dependence")
    if not report.time_ordered or found.clustering is None:
        return lines + paragraph("Values have no order, so dependence is not tested.", width)
    lines += findings_table(found.dependence)
    lines += lacks_lines(found.dependence, width)
    lines += counts_lines(found.dependence, width)
    if found.levels is not None:
        lines += level_lines(found.levels, found.rows, width)
    path = found.clustering.volatility
    chance = p_value(found.clustering.test.p_value)
    if path is None:
        words = f"Volatility is taken as constant: {found.clustering.reason} ({chance})."
    else:
        words = f"Volatility clusters ({chance}): {volatility_words(path)}."
    lines += paragraph(words, width)
    if found.worth is not None:
        lines += worth_lines(found.worth, found.rows, "values", width)
    return lines


def _law(report: SeriesReport, width: int) -> list[str]:
    lines = sections.law(report, width)
    lines += paragraph("Largest values against the fitted law:", width)
    return lines + table(extremes_table(report.extremes))


def _cautions(warnings: Sequence[str], width: int) -> list[str]:
    lines = heading("Cautions")
    for caution in (*warnings, ALWAYS[0]):
        text = caution[0].upper() + caution[1:]
        lines += paragraph(text if text.endswith(".") else text + ".", width)
    return lines
