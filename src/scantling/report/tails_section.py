"""Tails and moments of errors, columns and scores, in sentences; nothing is computed here."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from scantling.diagnostics.battery import SeriesGroup
from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.second_opinion import Opinion
from scantling.diagnostics.tail_index import TailIndex, index_from_gamma
from scantling.report.record import Diagnosed, Report
from scantling.report.sections import heading, listing
from scantling.report.wording import (
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
FEWEST_SPREAD = 5
"""Series from which on the spread of their indices is told."""
TOGETHER = "5 % risk of error over all of them"


def tail_words(tail: TailIndex) -> str:
    """A tail index in words, without a full stop."""
    found = "thin tails are excluded" if tail.finite else "thin tails are not excluded"
    ends = index_interval(tail.low, tail.high)
    return f"index {index(tail.index)} (90 % {ends}); {found} ({p_value(tail.p_value)})"


def opinion_lines(opinions: Sequence[Opinion], width: int) -> list[str]:
    """One sentence for each further estimator."""
    lines = []
    for opinion in opinions:
        says = (
            "whose interval overlaps"
            if opinion.agrees
            else "whose interval does not overlap: rely on what both exclude, no more"
        )
        lines += paragraph(
            f"Second opinion, {opinion.estimator}: index {index(opinion.index)} (90 %"
            f" {index_interval(opinion.low, opinion.high)}), {says}.",
            width,
        )
    return lines


def side_lines(sides: Sequence[TailIndex], heavier: str, width: int) -> list[str]:
    """Left and right tail, and what their difference means; nothing without them."""
    if not sides:
        return []
    words = " and ".join(
        f"{side.side} {index(side.index)} ({index_interval(side.low, side.high)})" for side in sides
    )
    means = (
        f"the {heavier} is clearly heavier, so its moments count"
        if heavier
        else "not clearly different, so both are taken together"
    )
    return paragraph(f"By side: {words}; {means}.", width)


def tails(report: Diagnosed, width: int) -> list[str]:
    """Tail index of errors, columns and scores."""
    found = report.diagnosis
    lines = heading("Tails")
    lines += paragraph(
        "The smaller the tail index, the heavier the tail; moments exist up to it.", width
    )
    if found.errors is None:
        lines += paragraph(f"Errors: not assessed, {found.errors_note}.", width)
    else:
        lines += paragraph(f"Errors: {tail_words(found.errors)}.", width)
        if found.errors.note:
            lines += paragraph(f"Before that: {found.errors.note}.", width)
    lines += side_lines(found.sides, found.heavier, width)
    lines += opinion_lines(found.opinions, width)
    lines += _group_words("Columns", found.columns, report.read.names, width)
    weights = {w: found.weight.count(w) for w in ("heavy", "sparse", "light")}
    lines += paragraph(
        f"Shown to have heavy tails: {weights['heavy']:,} of {many(len(found.weight), 'column')}"
        f" ({TOGETHER}); sparse, so that single errors decide (under 5 % of rows active):"
        f" {weights['sparse']:,}; neither: {weights['light']:,}.",
        width,
    )
    lines += _side_counts("column", found.columns, width)
    lines += _group_words("Scores (column times error)", found.scores, report.read.names, width)
    lines += _side_counts("score", found.scores, width)
    refused = found.columns.tails.refused
    if refused:
        names = tuple(f"{report.read.names[j]} ({why})" for j, why in refused)
        lines += paragraph(
            f"No index for {many(len(refused), 'column')}: {listing(names, 3)}; their scores have"
            " the errors' tail.",
            width,
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


def _side_counts(noun: str, group: SeriesGroup, width: int) -> list[str]:
    """How many series are heavier on one side."""
    if group.sides is None:
        return []
    plain = np.ones(group.sides.heavier.size, dtype=bool)
    if group.borrowed is not None:
        plain = ~group.borrowed
    left, right = (int(np.sum(plain & (group.sides.heavier == sign))) for sign in (-1, 1))
    if not left + right:
        return paragraph(f"No {noun} is clearly heavier on one side ({TOGETHER}).", width)
    return paragraph(
        f"Of the {noun}s {left:,} clearly heavier on the left, {right:,} on the right"
        f" ({TOGETHER}).",
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
    lines += paragraph(
        f"Errors, order 2 (the variance, without which there is no budget): {second.answer},"
        f" because {second.reason}.",
        width,
    )
    lines += _scores_without(report, width)
    return lines


def _scores_without(report: Diagnosed, width: int) -> list[str]:
    """Scores whose variance is missing, and those where that is in doubt."""
    found, lines = report.diagnosis, []
    without = found.scores_without_variance
    if without:
        names = tuple(report.read.names[j] for j in without)
        lines += paragraph(
            f"The scores of {many(len(without), 'column')} have no variance, so equal loadings rest"
            f" on something that is not there: {listing(names)}.",
            width,
        )
    doubted = 0 if found.scores.doubted is None else int(found.scores.doubted.sum())
    if doubted:
        lines += paragraph(
            f"For {many(doubted, 'more score' if without else 'score')} the largest products alone"
            " look as if there were no variance, but the indices of column and error leave room for"
            " one, so the answer is unclear: in samples of this size products look heavier than"
            " they are.",
            width,
        )
    return lines
