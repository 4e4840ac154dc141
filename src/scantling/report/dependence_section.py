"""Variance, dependence and co-movement, in sentences; nothing is computed here."""

from __future__ import annotations

from scantling.diagnostics.autoregression import NEAR_UNIT_ROOT, Autoregression, Levels
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.column_levels import near_random_walks
from scantling.diagnostics.dependence import LEVEL
from scantling.diagnostics.error_findings import Finding, Worth
from scantling.diagnostics.extremes import LOWEST_SHARE
from scantling.diagnostics.variance import CO_MOVEMENT
from scantling.diagnostics.volatility import Volatility
from scantling.report.record import Diagnosed
from scantling.report.sections import heading, listing
from scantling.report.wording import (
    many,
    p_value,
    paragraph,
    share,
    shortened,
    table,
)

WORST = 5
NO_LOSS = "no loss shown"
SINGLY = 0.95
"""Extremal index above which clusters would be of 1.0 or 1.1."""


def findings_table(findings: tuple[Finding, ...]) -> list[str]:
    """A table of tests, with what each lacks here."""
    rows = [["Test", "statistic", "p", "lacks"]]
    for finding in findings:
        result = finding.result
        lacks = finding.lacks or "nothing"
        shown = f"{result.p_value:.3f}" if result.p_value >= 0.001 else "< 0.001"
        rows.append([shortened(result.test, 39), f"{result.statistic:.3g}", shown, lacks])
    return table(rows)


def lacks_lines(findings: tuple[Finding, ...], width: int) -> list[str]:
    """What the last column of the table means, where it says anything."""
    if all(finding.valid for finding in findings):
        return []
    return paragraph(
        "Lacks: what the p-value needs and was not found; such a test is shown, not used.", width
    )


def counts_lines(findings: tuple[Finding, ...], width: int) -> list[str]:
    """Lags and permutations of the tests, and the least p-value those allow."""
    results = [finding.result for finding in findings]
    words = [
        f"Tests of dependence take {many(lags, 'lag')} together."
        for lags in sorted({r.lags for r in results if r.lags is not None})
    ]
    drawn = {r.permutations: r.test.split(" of ")[0] for r in results if r.permutations}
    most, *fewer = sorted(drawn, reverse=True) or [0]
    if most:
        words.append(f"P-values by permutation come from {most:,} permutations")
        words += [f"({drawn[count]} from {count:,})" for count in fewer]
        ends = [f"{1 / (count + 1):.3g}" for count in (most, *fewer)]
        words.append(f"and are never smaller than {' and '.join(ends)}: read these as at most.")
    return paragraph(" ".join(words), width) if words else []


def volatility_words(path: Volatility) -> str:
    """The fitted volatility, without a full stop."""
    extra = f", leverage {path.leverage:.3f}" if path.leverage else ""
    return (
        f"{path.kind.upper()}(1,1) with alpha {path.alpha:.3f}{extra}, beta {path.beta:.3f}"
        f" (persistence {path.persistence:.3f})"
    )


def levels_words(path: Autoregression) -> str:
    """The fitted autoregression, without a full stop."""
    named = ", ".join(f"{value:.2f}" for value in path.coefficients)
    many = path.coefficients.size > 1
    return (
        f"persist: autoregression of order {path.coefficients.size}, coefficient"
        f"{'s' if many else ''} {named}"
    )


def level_lines(levels: Levels, rows: int, width: int) -> list[str]:
    """Whether the level persists from row to row, and what that does."""
    chance, path = p_value(levels.test.p_value), levels.autoregression
    if path is None:
        found = (
            "the signs depend on those before, but no autoregression pays for its coefficients"
            if levels.test.p_value <= LEVEL
            else "nothing shows that they persist from row to row"
        )
        return paragraph(f"Levels: {found} ({chance}).", width)
    lines = paragraph(
        f"Levels {levels_words(path)} ({chance}). Beside columns that persist as well, noise then"
        " passes a penalty made for independent errors; every simulation here draws such errors.",
        width,
    )
    if path.root >= NEAR_UNIT_ROOT:
        lines += paragraph(
            f"With a root of {path.root:.3f} they are hardly told from a random walk in"
            f" {rows:,} rows: take differences of the response, or its own lags as columns.",
            width,
        )
    return lines


def column_level_lines(found: Diagnosis, names: tuple[str, ...], width: int) -> list[str]:
    """Columns that are hardly told from random walks; nothing where there are none."""
    if found.column_levels is None:
        return []
    near = near_random_walks(found.column_levels)
    if not near:
        return []
    one = len(near) == 1
    named = listing(tuple(shortened(names[j], 30) for j in near), 3)
    also = ", as these do" if found.autoregression is not None else ""
    return paragraph(
        f"{len(near):,} of {many(len(names), 'column')} {'keeps' if one else 'keep'}"
        f" {share(NEAR_UNIT_ROOT)} or more of {'its' if one else 'their'} level from row to row"
        f" ({named}): like {'a random walk' if one else 'random walks'},"
        f" {'its' if one else 'their'} scores vary more than rows suggest wherever errors persist"
        f" as well{also}.",
        width,
    )


def variance(report: Diagnosed, width: int) -> list[str]:
    """Variance and dependence tests, volatility, co-movement."""
    found = report.diagnosis
    every = (*found.variance, *found.dependence)
    lines = heading("Variance and dependence")
    lines += findings_table(every)
    lines += lacks_lines(every, width)
    lines += counts_lines(every, width)
    lines += _scale_words(found, width)
    if found.levels is not None:
        lines += level_lines(found.levels, report.read.rows, width)
    lines += column_level_lines(found, report.read.names, width)
    lines += _order_words(report, width)
    if found.worth is not None:
        lines += worth_lines(found.worth, report.read.rows, "rows", width)
    return lines + co_movement(report, width)


def _scale_words(found: Diagnosis, width: int) -> list[str]:
    """Whether the errors' size follows what the pilot uses."""
    first = found.variance[0].result
    means = (
        "the errors' size follows the pilot's fit or its columns"
        f" ({p_value(first.p_value)}): loadings have to follow it, self-normalised ones do"
        if first.p_value <= LEVEL
        else "nothing shows that the errors' size follows the pilot's fit or its columns"
        f" ({p_value(first.p_value)}), so equal loadings are not shown to lose anything there"
    )
    return paragraph(f"Scale: {means}.", width)


def _order_words(report: Diagnosed, width: int) -> list[str]:
    """Volatility clustering, or why none is modelled."""
    clustering = report.diagnosis.clustering
    if clustering is None:
        return paragraph("Rows have no order, so dependence is not tested.", width)
    found = p_value(clustering.test.p_value)
    path = clustering.volatility
    if path is None:
        return paragraph(f"Volatility is taken as constant: {clustering.reason} ({found}).", width)
    joint = report.law.tail_index
    implied = "no finite index" if joint > 50 else f"index {joint:.1f}"
    return paragraph(
        f"Volatility clusters ({found}): {volatility_words(path)}, which with the law of the"
        f" shocks implies {implied} for the errors.",
        width,
    )


def worth_lines(worth: Worth, rows: int, noun: str, width: int) -> list[str]:
    """Clusters of extremes and effective rows, one sentence each."""
    lines = []
    extremes = worth.extremes
    if extremes is not None:
        together = (
            "Extremes come singly"
            if extremes.index > SINGLY
            else f"Extremes come in clusters of {1 / extremes.index:.1f} on average"
        )
        lines += paragraph(
            f"{together}: the {extremes.exceedances:,} largest errors count as"
            f" {extremes.clusters:.0f} separate events (extremal index {extremes.index:.2f}, 90 %"
            f" {extremes.low:.2f} to {extremes.high:.2f}).",
            width,
        )
    means = _worth_words(worth.rows, worth.rows_reference)
    tail = _worth_words(worth.tail_rows, worth.tail_rows_reference)
    each = f"for means {means}, for the tail index {tail}"
    if means == tail == NO_LOSS:
        each = f"{NO_LOSS}, neither for means nor for the tail index"
    return lines + paragraph(
        f"Worth of these {rows:,} {noun} in independent ones: {each}. A loss is shown below what"
        f" all but {share(LOWEST_SHARE)} of random orders of the same {noun} give"
        f" ({worth.rows_reference:,.0f} and {worth.tail_rows_reference:,.0f}).",
        width,
    )


def _worth_words(found: float, reference: float) -> str:
    """Effective rows, where fewer than random orders give by chance."""
    return NO_LOSS if found >= reference else f"{found:,.0f}"


def co_movement(report: Diagnosed, width: int) -> list[str]:
    """Which columns are large where the errors are, ranked by the penalty that asks for."""
    found = report.diagnosis
    ranked, names = found.co_movement, report.read.names
    together = next(f.result for f in found.variance if f.result.test == CO_MOVEMENT)
    clear = int(ranked.clear.sum())
    average = (
        "columns and errors are large on the same rows"
        if together.p_value <= LEVEL
        else "columns and errors are not shown to be large on the same rows"
    )
    which = "no column"
    if clear:
        named = tuple(names[int(j)] for j in ranked.ranked if ranked.clear[j])
        which = f"{clear:,} of {len(names):,} columns ({listing(named, 3)})"
    lines = paragraph(
        f"Size: on average {average} ({p_value(together.p_value)}); by itself {which}"
        f" {'is' if clear <= 1 else 'are'} so beyond chance (5 % risk of error over all of them)."
        " Equal loadings would need a penalty larger by this factor, self-normalised ones adapt:",
        width,
    )
    rows = [["Large where errors are large", "penalty times", "90 %", "p, all columns"]]
    for j in ranked.clear_first[:WORST]:
        chance = ranked.family_p_value[j]
        rows.append(
            [
                shortened(names[int(j)], 30),
                f"{ranked.ratio[j]:.2f}",
                f"{ranked.low[j]:.2f} to {ranked.high[j]:.2f}",
                f"{chance:.3f}",
            ]
        )
    return lines + table(rows)
