"""Limits, selection and remedies, in tables."""

from __future__ import annotations

from collections.abc import Sequence

from scantling.planning.refits import StressRun
from scantling.planning.remedies import Remedy
from scantling.planning.verdict import WITHIN, chance
from scantling.report.chart import risk_chart
from scantling.report.document import cautions as all_cautions
from scantling.report.first_screen import helps, instead, reason_is_cut
from scantling.report.record import Budgeted, Report
from scantling.report.sections import heading, listing
from scantling.report.wording import (
    band,
    columns,
    count,
    large,
    many,
    paragraph,
    rate,
    share,
    table,
    two,
)

LAW_WORDS = {
    "fitted": "fitted law",
    "twin": "Gaussian twin",
    "normal-volatility": "normal, fitted path",
}


STATED_WORDS = {"fitted": "stated law", "normal-volatility": "normal, stated path"}
"""Where nothing was fitted."""


def law_words(name: str, *, stated: bool) -> str:
    """What the law of a run is called."""
    return (STATED_WORDS if stated else {}).get(name, LAW_WORDS[name])


LISTED_COLUMNS = 12
RANKED = (
    "Ranked: those whose selection was simulated first; then by columns allowed, the low end of"
    " their band, fewer changes and lower risk."
)

SUPPORT_WORDS = {
    "random": "random supports of {} relevant columns",
    "pilot": "sign patterns of {} relevant columns, the pilot's first",
    "named": "sign patterns of {} relevant columns, the named ones first",
}


def limits(report: Budgeted, width: int) -> list[str]:
    """All limits with their bands, the risk curve, and what the tails cost."""
    budget = report.budget
    asked = many(budget.asked, "column")
    lines = heading("Limits")
    rows = [["Limit", "columns", "90 % band", "from"]]
    for name in ("noise", "signal", "stability", "geometry"):
        limit = getattr(budget, name)
        rows.append([name, columns(limit), band(limit, budget.asked), f"{limit.mode} simulation"])
    ends = budget.ceiling
    spread = "no band"
    if ends.low is not None:
        spread = f"{large(ends.low)} {'upwards' if ends.high is None else 'to ' + large(ends.high)}"
    rows.append(["ceiling", rate(ends), spread, "theory, a rate"])
    proved = budget.assured
    if proved.columns is not None:
        ends_of = band(proved, budget.asked)
        rows.append(["assured", columns(proved), ends_of, "proof, given the law"])
    lines += table(rows)
    if not isinstance(report, Report):
        lines += paragraph("Bands hold simulation error only, as the laws are stated.", width)
    lines += paragraph(f"Ceiling: {ends.regime}.", width)
    if proved.columns is not None:
        lines += paragraph(
            "Assured is what is proved at a penalty that still shows the smallest effect, not what"
            " is so: 0 is common.",
            width,
        )
    for name in ("noise", "signal", "stability"):
        limit = getattr(budget, name)
        if limit.columns is None:
            lines += paragraph(f"The {name} limit is unknown: {limit.note}.", width)
    risk, draws = budget.risk_at_design, budget.draws
    lines += paragraph(
        f"Break-through risk at {asked}: {chance(risk.value, draws)} (90 % band"
        f" {chance(risk.low, draws)} to {chance(risk.high, draws)}; accepted"
        f" {report.target.risk:g}).",
        width,
    )
    lines += paragraph(
        "Noise is measured against the plug-in penalty: L(p) times the root mean square of the"
        " errors (of a robust loss, of its score) over the root of the rows, L(p) = 1.1"
        f" Phi^-1(1 - {report.target.risk:g}/2p), {budget.level:.2f} at {asked}. It grows with p,"
        " so under thin tails the risk falls as columns are added.",
        width,
    )
    lines += ["", *risk_chart(budget.curve, report.target.risk, width), ""]
    if budget.penalty_ratio is not None:
        cost = f"the work of {count(budget.equivalent_rows)} under normal errors"
        if budget.equivalent_rows == budget.rows:
            cost = "the same work as under normal errors"
        lines += paragraph(
            f"Penalty ratio {budget.penalty_ratio:.2f}: {budget.rows:,} rows do {cost}.",
            width,
        )
    if budget.detectable is not None and budget.detectable_worst is not None:
        lines += paragraph(
            f"Smallest detectable effect at {asked}: {budget.detectable:.3f} sd of"
            f" the response for the median column, {budget.detectable_worst:.3f} for the worst"
            f" tenth.",
            width,
        )
    return lines


def selection(report: Budgeted, width: int) -> list[str]:
    """Refits under fresh errors."""
    lines = heading("Selection under fresh errors")
    if report.stress is None:
        return lines + paragraph(f"Not simulated: {report.budget.stability.note}.", width)
    runs = report.stress.runs
    rows = [["Columns and law", "stability", "90 %", "power", "false share", "refits"]]
    for run in runs:
        rows.append(
            [
                f"{run.columns:,} {law_words(run.law, stated=not isinstance(report, Report))}",
                two(run.stability.value),
                f"{two(run.stability.low)} to {two(run.stability.high)}",
                two(run.power.value),
                two(run.false_share.value),
                f"{run.replicates:,}",
            ]
        )
    lines += table(rows)
    fitted = [run for run in runs if run.law == "fitted"][-1]
    names = report.read.names if isinstance(report, Report) else ()
    called = law_words("fitted", stated=not isinstance(report, Report))
    lines += more_criteria(fitted, names, called, width)
    target = report.target
    relevant = min(target.relevant, report.budget.asked)
    failing = ", ".join(name.replace("_", " ") for name in report.stress.failing)
    met = f"{failing} missed" if failing else "all are met"
    return lines + paragraph(
        f"Asked for: stability {target.stability:g}, power {target.power:g}, false share at most"
        f" {target.false_share:g}. At {many(report.budget.asked, 'column')}"
        f" {met}. Refits are over 5 {SUPPORT_WORDS[runs[0].support].format(relevant)}, up to"
        f" {runs[0].replicates_asked:,} a row: {how_decided(report.stress.runs)}. They use the"
        " rule's own penalty; the signal limit uses the larger one that would hold noise to the"
        " risk.",
        width,
    )


def how_decided(runs: Sequence[StressRun]) -> str:
    """How many refits it took, of those asked for."""
    done, asked = (sum(getattr(r, k) for r in runs) for k in ("replicates", "replicates_asked"))
    if done == asked:
        return f"all {done:,} were needed"
    return f"decided after {done:,} of {asked:,}, a row ending once every criterion is clear"


def more_criteria(run: StressRun, names: Sequence[str], name: str, width: int) -> list[str]:
    """The criteria that no bar is set for, of one run under the law, not its twin."""
    loss = ""
    if run.prediction_loss is not None:
        loss = (
            f"; prediction loss {ratio(run.prediction_loss.value)} times that of least squares on"
            f" the relevant columns ({ratio(run.prediction_loss.low)} to"
            f" {ratio(run.prediction_loss.high)})"
        )
    return paragraph(
        f"At {many(run.columns, 'column')}, {name}: {run.size.value:.1f} columns selected on"
        f" average, exactly the relevant ones in {share(run.exact.value)} of refits"
        f" ({share(run.exact.low)} to {share(run.exact.high)}), the wrong sign in"
        f" {100 * run.sign_errors.value:.1f} % of cases{loss}. {inclusion_words(run, names)}",
        width,
    )


def inclusion_words(run: StressRun, names: Sequence[str]) -> str:
    """How often relevant columns are selected; by name where they are not drawn at random."""
    low, median, high = run.inclusion_range
    if share(low) == share(high):
        return f"Every relevant column is selected in {share(low)} of refits."
    words = (
        f"A relevant column is selected in {share(low)} to {share(high)} of refits, the median"
        f" one in {share(median)}"
    )
    if run.support == "random" or not names:
        return words + "."
    rarest = sorted(run.inclusion, key=lambda each: each[1])
    each = tuple(f"{names[j % len(names)]} {share(found)}" for j, found in rarest)
    return f"{words}; least often {listing(each, LISTED_COLUMNS)}."


def ratio(value: float) -> str:
    """A ratio to two digits or to whole numbers."""
    return f"{value:.2g}" if value < 10 else f"{value:.0f}"


def remedies(report: Report, width: int) -> list[str]:
    """Every remedy with its price."""
    lines = heading("Remedies, each recomputed")
    if not report.remedies:
        return lines + paragraph("None computed applies.", width)
    lines += paragraph(f"{_lead(report)} {RANKED}", width)
    for place, remedy in enumerate(report.remedies):
        risk = chance(remedy.risk_at_design.value, remedy.draws)
        kept = f"{count(remedy.allowed.columns)} of {many(remedy.columns, 'column')}"
        star = "*" if helps(report, remedy) else ""
        lines += paragraph(
            f"{place + 1}.{star} {remedy.name}: {kept} ({_band_words(remedy)}), break-through risk"
            f" {risk}. {'' if remedy.refitted else 'Noise and signal only. '}"
            f"{_dropped(report, remedy)}Price: {remedy.price}.",
            width,
        )
    pair = ""
    if len(report.remedies) > 1 and not any(remedy.parts for remedy in report.remedies):
        pair = "No pair of the best does better than one of its changes alone. "
    return lines + paragraph(
        f"{pair}The present errors are kept; a design changed so and vetted afresh fits its own.",
        width,
    )


def _lead(report: Report) -> str:
    """What the first screen says of remedies, before they are listed."""
    if report.verdict.answer == WITHIN:
        return "No change is needed, as the design is within budget; each is computed all the same."
    tried = len(report.remedies)
    helpful = sum(helps(report, remedy) for remedy in report.remedies)
    if helpful:
        each = "helps, marked" if helpful == 1 else "help, each marked"
        return f"{helpful} of the {tried} computed {each} *."
    words = "The one computed does not help" if tried == 1 else f"Of {tried} computed not one helps"
    return "; ".join(filter(None, [words, instead(report)])) + "."


def _dropped(report: Report, remedy: Remedy) -> str:
    names = tuple(report.read.names[j] for j in remedy.dropped)
    return f"Dropped: {listing(names, 3)}. " if names else ""


def _band_words(remedy: Remedy) -> str:
    ends = band(remedy.allowed, remedy.columns)
    return ends if remedy.allowed.low is None else f"90 % band {ends}"


def reasons(report: Budgeted, width: int) -> list[str]:
    """All reasons, the binding one first, where the first screen does not show them all."""
    if len(report.verdict.reasons) == 1 and not reason_is_cut(report, width):
        return []
    lines = heading("Reasons")
    for reason in report.verdict.reasons:
        lines += paragraph(reason, width)
    return lines


def cautions(report: Report, width: int) -> list[str]:
    """What the report does not say."""
    lines = heading("Cautions")
    for caution in all_cautions(report):
        text = caution[0].upper() + caution[1:]
        lines += paragraph(text if text.endswith(".") else text + ".", width)
    return lines
