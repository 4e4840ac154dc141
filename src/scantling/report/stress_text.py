"""Text of the stress stage alone."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from scantling.core.estimate import Estimate
from scantling.planning.refits import StressRun
from scantling.report.limits_section import inclusion_words, law_words, ratio
from scantling.report.sections import heading, law, receipt_lines
from scantling.report.stress_record import StressReport
from scantling.report.text import NARROWEST
from scantling.report.wording import (
    ALWAYS,
    PLAN_CAUTIONS,
    labelled,
    many,
    paragraph,
    shortened,
    table,
    two,
)

Shown = Callable[[float], str]
HEAD = "scantling stress: "
NO_NUMBER = "none"
SHORT = {"normal-volatility": "normal on path"}
"""Heads that would be too wide beside two others."""


def render_stress(report: StressReport, width: int = 80) -> str:
    """Return the report as plain text, at least 80 columns wide."""
    width = max(width, NARROWEST)
    lines = [HEAD + shortened(report.title, width - len(HEAD))]
    lines += labelled("Verdict", report.judgement.answer.upper(), width)
    for place, reason in enumerate(report.judgement.reasons):
        lines += labelled("" if place else "Because", reason, width)
    if report.compared is not None:
        fares = " ".join([f"{report.compare}: {report.compared.answer}.", *report.compared.reasons])
        lines += labelled("Compared", fares, width)
    lines += labelled(
        "Columns", f"{report.columns:,} of {many(report.rows, 'row')}, {report.rule} penalty", width
    )
    lines += heading("What is refitted")
    for fact in report.facts:
        lines += paragraph(fact, width)
    if report.runs:
        lines += _selection(report, width)
    lines += law(report, width)
    lines += heading("Cautions")
    for caution in ALWAYS if report.names else PLAN_CAUTIONS:
        lines += paragraph(caution, width)
    lines += receipt_lines(report.receipt, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"


def _selection(report: StressReport, width: int) -> list[str]:
    """The criteria: laws side by side, or, where two rules are compared, rules under each law."""
    lines = heading("Selection under fresh errors")
    stated = not report.names
    if report.compare is None:
        heads = [SHORT.get(run.law, law_words(run.law, stated=stated)) for run in report.runs]
        lines += _criteria(report, report.runs, heads)
    for name in dict.fromkeys(run.law for run in report.runs) if report.compare else ():
        runs = [run for run in report.runs if run.law == name]
        lines += [f"  Under the {law_words(name, stated=stated)}, on the same draws:"]
        lines += [*_criteria(report, runs, [run.rule for run in runs]), ""]
    lines += paragraph("In brackets 90 % intervals, simulation error included.", width)
    for run in report.runs:
        if run.law == "fitted":
            rule = f"With {run.rule}: " if report.compare else ""
            words = inclusion_words(run, report.names)
            lines += paragraph(rule + (words[0].lower() + words[1:] if rule else words), width)
    return lines


def _criteria(report: StressReport, runs: Sequence[StressRun], heads: Sequence[str]) -> list[str]:
    target = report.target
    asked: list[tuple[str, str, str, Shown]] = [
        ("stability", "stability", f">= {target.stability:g}", two),
        ("power", "power", f">= {target.power:g}", two),
        ("false share", "false_share", f"<= {target.false_share:g}", two),
        ("exact support", "exact", "", two),
        ("sign errors", "sign_errors", "", two),
        ("columns picked", "size", "", _one),
        ("prediction loss", "prediction_loss", "", ratio),
    ]
    rows = [["Criterion", "asked", *heads]]
    for words, name, bar, shown in asked:
        rows.append([words, bar, *(_cell(getattr(run, name), shown) for run in runs)])
    return table(rows)


def _one(value: float) -> str:
    return f"{value:.1f}" if value < 10 else f"{value:.0f}"


def _cell(found: Estimate | None, shown: Shown) -> str:
    if found is None:
        return NO_NUMBER
    return f"{shown(found.value)} ({shown(found.low)}-{shown(found.high)})"
