"""Text of the diagnostics stage alone: of a design, or of one bare series."""

from __future__ import annotations

from collections.abc import Sequence

from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.series import SeriesDiagnosis
from scantling.report import sections
from scantling.report.chart import extremes_table, path_chart
from scantling.report.record import DesignDiagnosis, SeriesReport
from scantling.report.sections import findings_table, heading, receipt_lines, tail_words
from scantling.report.wording import (
    ALWAYS,
    index,
    index_interval,
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
        sections.tails,
        sections.moments,
        sections.variance,
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
    if found.clustering is None:
        return lines + labelled("Volatility", "not looked at: values have no order", width)
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
    for side in found.sides:
        lines += paragraph(f"{side.side.capitalize()} tail: {tail_words(side)}.", width)
    for opinion in found.opinions:
        verdict = "agrees" if opinion.agrees else "disagrees: trust neither beyond their overlap"
        lines += paragraph(
            f"{opinion.estimator}: index {index(opinion.index)} (90 %"
            f" {index_interval(opinion.low, opinion.high)}), {verdict}.",
            width,
        )
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
    path = found.clustering.volatility
    if path is None:
        lines += paragraph(f"Volatility is taken as constant: {found.clustering.reason}.", width)
    else:
        lines += paragraph(
            f"Volatility clusters: GARCH(1,1) with alpha {path.alpha:.3f}, beta {path.beta:.3f}"
            f" (sum {path.persistence:.3f}).",
            width,
        )
    extremes = found.extremes
    if extremes is not None:
        lines += paragraph(
            f"Extremes come in clusters of {1 / extremes.index:.1f} on average: the"
            f" {extremes.exceedances:,} largest values count as {extremes.clusters:.0f} separate"
            f" events (extremal index {extremes.index:.2f}, 90 % {extremes.low:.2f} to"
            f" {extremes.high:.2f}).",
            width,
        )
    if found.effective_rows is not None and found.tail_effective_rows is not None:
        lines += paragraph(
            f"For means these {found.rows:,} values are worth {found.effective_rows:,.0f}"
            f" independent ones, for the tail index {found.tail_effective_rows:,.0f}.",
            width,
        )
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
