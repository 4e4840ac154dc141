"""The report below the first screen, one function a section; nothing is computed here."""

from __future__ import annotations

from scantling.diagnostics.structure import ALIKE, DEPENDENT
from scantling.report.law_words import law_sentences
from scantling.report.record import Diagnosed, HasLaw, Receipt, Report
from scantling.report.wording import (
    count,
    index,
    many,
    paragraph,
    share,
    shortened,
)

MOST_POWER = 6
SHAPES = {
    "sparse": "Sparse signal",
    "dense": "Dense signal",
    "undecided": "Sparse or dense is undecided",
    "no signal": "No signal found",
}
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


def structure(report: Diagnosed, width: int) -> list[str]:
    """Geometry of the columns."""
    shape = report.diagnosis.structure
    lines = heading("Columns among themselves")
    factors = (
        "no common factor"
        if shape.factors == 0
        else f"{shape.factors} common factor{'s' if shape.factors > 1 else ''}"
    )
    leading = "the leading component carries" if not shape.factors else "carrying"
    pair = ""
    if shape.largest_pair is not None:
        names = [shortened(report.read.names[j], 24) for j in shape.largest_pair]
        pair = f", between {names[0]} and {names[1]}"
    lines += paragraph(
        f"{factors.capitalize()} ({leading} {share(shape.leading_share)} of the columns'"
        f" variance); the {many(len(report.read.names), 'column')} vary like"
        f" {shape.effective_rank:.0f} uncorrelated ones (effective rank); largest correlation"
        f" {shape.largest_correlation:.2f}{pair}.",
        width,
    )
    return lines + _dependent(report, width)


def _dependent(report: Diagnosed, width: int) -> list[str]:
    """What columns that are sums of others, or all but copies, mean for a fit."""
    shape, lines = report.diagnosis.structure, []
    if shape.condition_note == DEPENDENT:
        lines += paragraph(
            "The columns are linearly dependent: some are sums of multiples of others, so a fit"
            " cannot tell them apart; drop one of each such group.",
            width,
        )
    if shape.largest_pair is not None and shape.largest_correlation >= ALIKE:
        first, second = (shortened(report.read.names[j], 24) for j in shape.largest_pair)
        lines += paragraph(
            f"{first} and {second} are all but the same (correlation"
            f" {shape.largest_correlation:.3f} in size): a fit cannot tell them apart; drop one.",
            width,
        )
    return lines


def signal(report: Diagnosed, width: int) -> list[str]:
    """Sparse or dense, and which powers keep their scores' moments."""
    shape, rule = report.diagnosis.signal, report.diagnosis.powers
    lines = heading("Signal and powers")
    lines += paragraph(f"{SHAPES[shape.answer]}: {shape.reason}.", width)
    if rule is not None:
        together = (
            "as large on the same rows, the worst case,"
            if rule.shared_volatility
            else "as unconnected"
        )
        lines += paragraph(
            f"Powers: a power divides a column's index; the median column before powers"
            f" (index {index(rule.column_index)}) and the errors ({index(rule.error_index)}) taken"
            f" {together} leave scores a variance {_power(rule.keeping_variance)} and a fourth"
            f" moment {_power(rule.keeping_fourth)}. This is by point estimates: each column's own"
            " answer is above and in the JSON.",
            width,
        )
    return lines


def _power(highest: int) -> str:
    """The highest power that keeps a moment, in words."""
    if highest == 0:
        return "at none"
    return f"up to power {highest}" + (" (none higher was tried)" if highest == MOST_POWER else "")


def law(report: HasLaw, width: int) -> list[str]:
    """The fitted law and how well it fits."""
    lines = heading("Error law")
    for sentence in law_sentences(report.law):
        lines += paragraph(sentence, width)
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
