"""Variance, dependence and co-movement, in sentences; nothing is computed here."""

from __future__ import annotations

from scantling.diagnostics.autoregression import NEAR_UNIT_ROOT, Autoregression, Levels
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.clustering import LEVEL
from scantling.diagnostics.error_findings import Finding, Worth
from scantling.diagnostics.variance import CO_MOVEMENT
from scantling.diagnostics.volatility import Volatility
from scantling.report.record import Diagnosed
from scantling.report.sections import heading, listing
from scantling.report.wording import p_value, paragraph, shortened, table

WORST = 5
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


def variance(report: Diagnosed, width: int) -> list[str]:
    """Variance and dependence tests, volatility, co-movement."""
    found = report.diagnosis
    every = (*found.variance, *found.dependence)
    lines = heading("Variance and dependence")
    lines += findings_table(every)
    lines += lacks_lines(every, width)
    lines += _scale_words(found, width)
    if found.levels is not None:
        lines += level_lines(found.levels, report.read.rows, width)
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
        f" ({p_value(first.p_value)}), so equal loadings lose nothing there"
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
    return lines + paragraph(
        f"For means these {rows:,} {noun} are worth {worth.rows:,.0f} independent ones, for the"
        f" tail index {worth.tail_rows:,.0f}.",
        width,
    )


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
    for j in ranked.ranked[:WORST]:
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
