"""The first screen: what a person who reads only twelve lines has to know."""

from __future__ import annotations

import math

from scantling.core.listing import listed
from scantling.planning.remedies import Remedy
from scantling.planning.verdict import BORDERLINE, NONE, WITHIN
from scantling.report.record import Budgeted
from scantling.report.wording import (
    LABEL,
    about,
    band,
    between_words,
    columns,
    count,
    in_lines,
    labelled,
    rate,
    shortened,
)

REASON_LINES = 3
SHOWN_REMEDIES = 3


def first_screen(report: Budgeted, width: int) -> list[str]:
    """At most twelve lines: verdict, reason, columns, limits, rows, remedies."""
    title = shortened(report.title, width - len("scantling: "))
    lines = [f"scantling: {title}"]
    lines += labelled("Verdict", _verdict(report), width)
    lines += in_lines("Because", report.verdict.reasons[0], width, REASON_LINES)
    lines += labelled("Columns", _columns(report), width)
    lines += in_lines("Limits", _limits(report), width, 2)
    lines += _rows_lines(report, width)
    return lines + _remedies(report, width, 12 - len(lines))


def _verdict(report: Budgeted) -> str:
    """The answer; what covers it is said where there is something to cover."""
    answer = report.verdict.answer
    covered = answer in (WITHIN, BORDERLINE)
    return answer.upper() + (f" (cover: {report.verdict.cover})" if covered else "")


def reason_is_cut(report: Budgeted, width: int) -> bool:
    """Whether the first screen shows the first reason only in part."""
    return len(labelled("Because", report.verdict.reasons[0], width)) > REASON_LINES


def _columns(report: Budgeted) -> str:
    budget = report.budget
    asked = f"{budget.asked:,} asked for; "
    if report.verdict.answer == NONE:
        return asked + "none allowed as it stands"
    allowed = budget.allowed
    if allowed.columns is None:
        return asked + "allowed: unknown"
    if allowed.note and allowed.low is not None and allowed.low >= budget.asked:
        return asked + "all of them allowed"
    if allowed.columns == 0 and allowed.high == 0:
        refitted = budget.binding == "stability" and report.stress is not None
        fewest = report.stress.runs[0].columns if refitted and report.stress else 1
        return asked + f"none allowed, {fewest:,} being the fewest tried"
    return asked + f"{columns(allowed)} allowed (90 % band {band(allowed, budget.asked)})"


def _limits(report: Budgeted) -> str:
    budget = report.budget
    named = {"noise": budget.noise, "signal": budget.signal, "stability": budget.stability}
    together: dict[str, list[str]] = {}
    for name in sorted(named, key=lambda name: name != budget.binding):
        together.setdefault(columns(named[name]), []).append(name)
    parts = []
    for value, names in together.items():
        bind = ""
        if budget.binding in names:
            bind = " binds" if len(names) == 1 else " bind"
        parts.append(f"{listed(names)} {value}{bind}")
    kind = "" if budget.ceiling.columns is None else " (a rate)"
    return "; ".join([*parts, f"ceiling {rate(budget.ceiling)}{kind}"])


def _rows_lines(report: Budgeted, width: int) -> list[str]:
    """Rows used, what these errors cost, rows needed: two lines; for want of room, no cost."""
    budget = report.budget
    used, cost = f"{budget.rows:,} used", ""
    if report.verdict.answer == NONE:
        return labelled("Rows", used, width)
    if budget.equivalent_rows is not None and budget.equivalent_rows < 0.97 * budget.rows:
        lost = budget.rows - budget.equivalent_rows
        cost = f"; these errors cost {lost:,} of them"
    needed = f"; needed: {budget.rows_note or 'unknown'}"
    if budget.rows_needed is not None:
        found = about(budget.rows_needed, budget.rows_range)
        needed = f"; needed for all {budget.asked:,}: {found}"
    whole = labelled("Rows", used + cost + needed, width)
    return whole if len(whole) <= 2 else in_lines("Rows", used + needed, width, 2)


def _remedies(report: Budgeted, width: int, room: int) -> list[str]:
    helpful = [remedy for remedy in report.remedies if helps(report, remedy)]
    found = helpful[: min(SHOWN_REMEDIES, max(room, 1))]
    if not found:
        text = "none needed"
        if report.verdict.answer != WITHIN:
            tried = len(report.remedies)
            text = f"none of the {tried} computed helps" if tried else "none computed applies"
            text = "; ".join(filter(None, [text, instead(report)]))
        return in_lines("Remedies", text, width, min(2, max(room, 1)))
    lines = []
    for place, remedy in enumerate(found):
        label = "Remedies" if place == 0 else ""
        end = f": {outcome(remedy)}"
        name = between_words(f"{place + 1}. {remedy.name}", width - LABEL - len(end))
        text = name + end
        lines.append(f"{label:<{LABEL}}{text}")
    return lines


def instead(report: Budgeted) -> str:
    """Which rows, or which effects where effect size binds, would do without a remedy."""
    budget, words = report.budget, []
    if budget.rows_needed is not None and budget.rows_needed > budget.rows:
        words.append(f"about {count(budget.rows_needed)} rows would carry it")
    shows = budget.detectable is not None and report.target.relevant * budget.detectable**2 < 1
    if budget.signal.reached and budget.detectable is not None and shows:
        words.append(f"effects of {math.ceil(100 * budget.detectable) / 100:.2f} sd show as it is")
    return "; ".join(words)


def helps(report: Budgeted, remedy: Remedy) -> bool:
    """Whether a remedy allows more columns than the design does, or settles more of them."""
    if report.verdict.answer == WITHIN or not remedy.refitted:
        return False
    now, then = report.budget.allowed, remedy.allowed
    if report.verdict.answer == NONE:
        return bool(then.columns)
    return (then.columns or 0, then.low or 0) > (now.columns or 0, now.low or 0)


def outcome(remedy: Remedy) -> str:
    """What a remedy makes of the design, in a few words."""
    allowed = remedy.allowed
    if allowed.columns is None:
        return "unknown"
    if remedy.answer == WITHIN:
        return f"within, all {remedy.columns:,}"
    words = f"{allowed.columns:,} of {remedy.columns:,}"
    # Without a band nothing is settled, and 'borderline' would say that a band says so.
    if allowed.low is not None or remedy.answer != BORDERLINE:
        words = f"{remedy.answer.split()[0]}, {words}"
    if allowed.low is None:
        words += " (no band)"
    elif allowed.low < allowed.columns:
        words += f" (low end {allowed.low:,})"
    return words
