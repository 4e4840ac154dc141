"""The report below the first screen, one function a section; nothing is computed here."""

from __future__ import annotations

import numpy as np

from scantling.diagnostics.battery import SeriesGroup
from scantling.diagnostics.error_findings import Finding
from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.tail_index import TailIndex, index_from_gamma
from scantling.report.record import Diagnosed, HasLaw, Receipt, Report
from scantling.report.wording import (
    count,
    index,
    index_interval,
    many,
    p_value,
    paragraph,
    share,
    shortened,
    table,
)

WORST = 5
MOST_POWER = 6
SHAPES = {
    "sparse": "Sparse signal",
    "dense": "Dense signal",
    "undecided": "Sparse or dense is undecided",
    "no signal": "No signal found",
}
FEWEST_SPREAD = 5
"""Series from which on the spread of their indices is told."""
LISTED = 6


def heading(text: str) -> list[str]:
    """A blank line and an underlined heading."""
    return ["", text, "-" * len(text)]


def listing(names: tuple[str, ...], most: int = LISTED) -> str:
    """A few names, and how many more."""
    shown = ", ".join(names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most:,} more"


def design(report: Diagnosed, width: int) -> list[str]:
    """What was read, expanded, lost and dropped."""
    read, spec = report.read, report.design
    lines = heading("Design as read")
    span = f", {read.span[0]} to {read.span[1]}" if read.span else ""
    made_of = many(read.raw_columns, "raw one")
    if spec.expand.own_lags:
        made_of += " and the response's own lags"
    lost = []
    if read.rows_dropped:
        lost.append(f"{read.rows_dropped:,} dropped for missing values")
    if read.rows_lost:
        lost.append(f"{read.rows_lost:,} lost to lags")
    lines += paragraph(
        f"{read.rows:,} rows{span}{' (' + ', '.join(lost) + ')' if lost else ''};"
        f" {many(len(read.names), 'candidate column')} made of {made_of};"
        f" response {spec.data.response}.",
        width,
    )
    target = spec.target
    lines += paragraph(
        f"Asked of it: {target.relevant} relevant columns, smallest effect"
        f" {target.smallest_effect:g} sd of the response per sd of a column, risk"
        f" {target.risk:g}, power {target.power:g}, stability {target.stability:g}, false share"
        f" {target.false_share:g}; {spec.penalty.loss} loss, {spec.penalty.rule} penalty.",
        width,
    )
    if read.dropped:
        names = tuple(f"{name} ({reason})" for name, reason in read.dropped)
        lines += paragraph(f"Left out of the expansion: {listing(names, 4)}.", width)
    if read.skipped:
        lines += paragraph(f"Without any number, skipped: {listing(read.skipped)}.", width)
    pilot = (
        f"A cross-fitted pilot ({read.folds} folds) explains {share(read.explained)} of the"
        f" response's variance out of fold"
    )
    if read.pilot_columns:
        pilot += f"; on all rows it takes {listing(read.pilot_columns)}"
    return lines + paragraph(pilot + ".", width)


def tail_words(tail: TailIndex) -> str:
    """A tail index in words, without a full stop."""
    found = "thin tails are excluded" if tail.finite else "thin tails are not excluded"
    ends = index_interval(tail.low, tail.high)
    return f"index {index(tail.index)} (90 % {ends}); {found} ({p_value(tail.p_value)})"


def tails(report: Diagnosed, width: int) -> list[str]:
    """Tail index of errors, columns and scores."""
    found = report.diagnosis
    lines = heading("Tails")
    if found.errors is None:
        lines += paragraph(f"Errors: not assessed, {found.errors_note}.", width)
    else:
        lines += paragraph(f"Errors: {tail_words(found.errors)}.", width)
        if found.errors.note:
            lines += paragraph(f"Before that: {found.errors.note}.", width)
    for side in found.sides:
        lines += paragraph(f"{side.side.capitalize()} tail: {tail_words(side)}.", width)
    weights = {w: found.weight.count(w) for w in ("heavy", "sparse", "light")}
    lines += _group_words("Columns", found.columns, report.read.names, width)
    lines += paragraph(
        f"By the thin-tail test (Holm over columns), of {many(len(found.weight), 'column')}"
        f" {weights['heavy']:,} shown heavy, {weights['sparse']:,} sparse,"
        f" {weights['light']:,} not shown heavy.",
        width,
    )
    lines += _group_words("Scores", found.scores, report.read.names, width)
    refused = found.columns.tails.refused
    if refused:
        names = tuple(f"{report.read.names[j]} ({why})" for j, why in refused)
        lines += paragraph(
            f"No index for {many(len(refused), 'column')}: {listing(names, 3)}.", width
        )
    return lines


def _group_words(label: str, group: SeriesGroup, names: tuple[str, ...], width: int) -> list[str]:
    middle = group.tails.median_column()
    if middle is None:
        return paragraph(f"{label}: none has a tail index.", width)
    known = group.tails.gamma[group.tails.assessed]
    spread = ""
    if known.size >= FEWEST_SPREAD:
        ends = [index(index_from_gamma(float(np.quantile(known, q)))) for q in (0.9, 0.1)]
        spread = f"; four in five lie between {ends[0]} and {ends[1]}"
    words = index_interval(*group.tails.interval(middle))
    return paragraph(
        f"{label}: the median one, {shortened(names[middle], 30)}, has index"
        f" {index(index_from_gamma(float(group.tails.gamma[middle])))} (90 % {words}){spread}.",
        width,
    )


def worst_columns(report: Report, width: int) -> list[str]:
    """The columns that break through most, and how heavy their scores are."""
    group, budget = report.diagnosis.scores, report.budget
    if not budget.worst_columns:
        return []
    rows = [["Break through most", "score index", "variance", "share of all"]]
    for j, part in list(zip(budget.worst_columns, budget.worst_shares, strict=True))[:WORST]:
        gamma = float(group.tails.gamma[j])
        rows.append(
            [
                shortened(report.read.names[j], 36),
                index(index_from_gamma(gamma)) if group.tails.assessed[j] else "unknown",
                group.answer(2, j),
                share(part),
            ]
        )
    return table(rows)


def moments(report: Diagnosed, width: int) -> list[str]:
    """Which moments exist."""
    found = report.diagnosis
    lines = heading("Moments")
    rows = [["Order", *(str(order) for order in ORDERS)]]
    rows.append(["errors", *(found.moment(order) for order in ORDERS)])
    for label, group in (("median column", found.columns), ("median score", found.scores)):
        middle = group.tails.median_column()
        if middle is not None:
            rows.append([label, *(group.answer(order, middle) for order in ORDERS)])
    lines += table(rows)
    second = next(m for m in found.error_moments if m.order == 2)
    lines += paragraph(f"Errors, order 2: {second.answer}, because {second.reason}.", width)
    without = found.scores_without_variance
    if without:
        names = tuple(report.read.names[j] for j in without)
        lines += paragraph(
            f"Scores whose variance is found missing: {many(len(without), 'column')},"
            f" {listing(names)}. (Products of heavy variables look heavier than they are.)",
            width,
        )
    return lines


def findings_table(findings: tuple[Finding, ...]) -> list[str]:
    """A table of tests, with what each lacks here."""
    rows = [["Test", "statistic", "p", "lacks"]]
    for finding in findings:
        result = finding.result
        lacks = finding.lacks or "nothing"
        shown = f"{result.p_value:.3f}" if result.p_value >= 0.001 else "< 0.001"
        rows.append([shortened(result.test, 39), f"{result.statistic:.3g}", shown, lacks])
    return table(rows)


def variance(report: Diagnosed, width: int) -> list[str]:
    """Variance and dependence tests, volatility, co-movement."""
    found = report.diagnosis
    lines = heading("Variance and dependence")
    lines += findings_table((*found.variance, *found.dependence))
    if any(not finding.valid for finding in (*found.variance, *found.dependence)):
        lines += paragraph("Lacks: what the p-value needs and is not found here.", width)
    path = found.volatility
    if found.clustering is None:
        lines += paragraph("Rows have no order, so dependence is not tested.", width)
    elif path is None:
        lines += paragraph(f"Volatility is taken as constant: {found.clustering.reason}.", width)
    else:
        joint = report.law.tail_index
        implied = "no finite index" if joint > 50 else f"index {joint:.1f}"
        lines += paragraph(
            f"Volatility clusters: GARCH(1,1) with alpha {path.alpha:.3f}, beta {path.beta:.3f}"
            f" (sum {path.persistence:.3f}), which with the law of the innovations implies"
            f" {implied} for the errors.",
            width,
        )
    together = found.co_movement
    worst = int(together.argmax())
    lines += paragraph(
        f"Column and error being large together multiplies the penalty needed by"
        f" {float(np.median(together)):.2f} for the median column, by {together[worst]:.2f} for"
        f" {shortened(report.read.names[worst], 30)} (1: no connection).",
        width,
    )
    return lines


def structure(report: Diagnosed, width: int) -> list[str]:
    """Geometry of the columns."""
    shape = report.diagnosis.structure
    lines = heading("Columns among themselves")
    factors = (
        "no common factor"
        if shape.factors == 0
        else f"{shape.factors} common factor{'s' if shape.factors > 1 else ''}"
    )
    pair = ""
    if shape.largest_pair is not None:
        names = [shortened(report.read.names[j], 24) for j in shape.largest_pair]
        pair = f", between {names[0]} and {names[1]}"
    lines += paragraph(
        f"{factors.capitalize()} ({share(shape.leading_share)} of the trace); effective rank"
        f" {shape.effective_rank:.0f} of {len(report.read.names):,}; largest correlation"
        f" {shape.largest_correlation:.2f}{pair}.",
        width,
    )
    return lines


def signal(report: Diagnosed, width: int) -> list[str]:
    """Sparse or dense, and which powers keep their scores' moments."""
    shape, rule = report.diagnosis.signal, report.diagnosis.powers
    lines = heading("Signal and powers")
    lines += paragraph(f"{SHAPES[shape.answer]}: {shape.reason}.", width)
    if rule is not None:
        together = "and errors large together" if rule.shared_volatility else "independent of them"
        lines += paragraph(
            f"By the planning rule, a worst case (index {index(rule.column_index)} of the median"
            f" raw column, {index(rule.error_index)} of the errors, columns {together}), scores"
            f" have a variance up to {_power(rule.keeping_variance)} and a fourth moment up to"
            f" {_power(rule.keeping_fourth)}.",
            width,
        )
    return lines


def _power(highest: int) -> str:
    """The highest power that keeps a moment, in words."""
    if highest == 0:
        return "no power"
    return f"power {highest}" + (", the highest looked at," if highest == MOST_POWER else "")


def law(report: HasLaw, width: int) -> list[str]:
    """The fitted law and how well it fits."""
    fitted = report.law
    lines = heading("Error law")
    named = ", ".join(f"{name} {value:.4g}" for name, value in fitted.parameters.items())
    lines += paragraph(f"{fitted.family}: {named}.", width)
    if fitted.fit.note:
        note = fitted.fit.note
        lines += paragraph(f"{note[0].upper()}{note[1:]}.", width)
    if fitted.fit.p_value is not None:
        lines += paragraph(
            f"Anderson-Darling distance {fitted.fit.distance:.2f},"
            f" {p_value(fitted.fit.p_value)} by parametric bootstrap: the law is"
            f" {'rejected' if fitted.fit.p_value <= 0.05 else 'not rejected'}.",
            width,
        )
    tried = "; ".join(f"{family} {value:.1f}" for family, value in fitted.fit.candidates)
    if tried:
        lines += paragraph(f"Bayes information criterion, smaller is better: {tried}.", width)
    if fitted.volatility is not None:
        lines += paragraph("The law is of the innovations, on the fitted volatility path.", width)
    return lines


def receipt(report: Report, width: int) -> list[str]:
    """What is needed to run it again."""
    return receipt_lines(report.receipt, width)


def receipt_lines(record: Receipt, width: int) -> list[str]:
    """A receipt, whatever it belongs to."""
    lines = heading("Receipt")
    lines += paragraph(
        f"scantling {record.version}, seed {record.seed}, {count(record.replicates)} replicates,"
        f" {record.seconds:.1f} s, {record.finished}.",
        width,
    )
    lines += paragraph(
        "Libraries: " + ", ".join(f"{name} {v}" for name, v in record.libraries) + ".", width
    )
    for name, digest in record.inputs:
        lines += [f"  sha-256 of {shortened(name, width - 20)}", f"    {digest}"]
    return [*lines, *paragraph(f"Command, where the input lies: {record.command}", width)]
