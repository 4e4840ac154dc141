"""Rows of the study of predicted risk, and the written results: errors, bands, verdicts."""

from __future__ import annotations

import csv
import itertools
from collections import Counter
from collections.abc import Iterable
from dataclasses import asdict, dataclass, fields
from pathlib import Path

import numpy as np
from risk_grid import APART, GRID, REPLICATIONS
from write_up import preamble, share_error, table

from scantling.core.record import FloatArray
from scantling.planning.budget import BORDERLINE, OVER, WITHIN

RISK = 0.05
CLEARLY_OVER, CLEARLY_WITHIN = 2 * RISK, RISK / 2
"""True risks beyond these are clear cases."""
MOST_RATIO = 1.25
MOST_WRONG = 0.05
MOST_UNDECIDED = 0.30
LEAST_COVERED = 0.85


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One replication of one design."""

    design: int
    """Place in the grid."""
    replication: int
    """From 1."""
    truth: float
    """Break-through risk by brute force."""
    tool: float
    """Predicted risk at p, as the tool gives it."""
    low: float
    """Lower end of its band."""
    high: float
    """Upper end."""
    answer: str
    """Verdict by the noise limit alone."""
    family: str
    """Family of the fitted law."""
    index: float
    """Its tail index, the volatility's share included."""
    volatile: int
    """1 if a volatility path was fitted."""
    oracle: float
    """Predicted by the oracle, with as many draws as the tool takes."""
    shape: float
    """The oracle's shape: 1/df of Student laws, exponent of GED and stable ones, else 0."""
    bootstrap: float
    """Predicted by the bootstrap of residuals, with as many draws as the tool takes."""
    tool_exact: float
    """The tool's law with 4,000 draws."""
    oracle_exact: float
    """The oracle's law with 4,000 draws."""
    bootstrap_exact: float
    """The bootstrap with 4,000 draws."""
    seconds: float
    """Of the tool's chain."""


def write_rows(path: Path, rows: list[Row]) -> None:
    """Raw rows, floats to four digits."""
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow([f.name for f in fields(Row)])
        for row in rows:
            values = asdict(row).values()
            writer.writerow([f"{v:.4g}" if isinstance(v, float) else v for v in values])


def read_rows(path: Path) -> list[Row]:
    """Rows written by `write_rows`."""
    kinds = {f.name: {"int": int, "float": float}.get(str(f.type), str) for f in fields(Row)}
    with path.open(encoding="utf-8", newline="") as file:
        return [Row(**{k: kinds[k](v) for k, v in row.items()}) for row in csv.DictReader(file)]


class Sheet:
    """Rows as arrays, by field."""

    def __init__(self, rows: Iterable[Row]) -> None:
        self.rows = list(rows)
        self.design = np.array([row.design for row in self.rows])
        self.truth = self.values("truth")

    def values(self, name: str) -> FloatArray:
        """One field of every row."""
        return np.array([getattr(row, name) for row in self.rows])

    def misses(self, name: str) -> FloatArray:
        """Absolute errors of one prediction."""
        return np.asarray(np.abs(self.values(name) - self.truth))

    def only(self, families: Iterable[str]) -> Sheet:
        """The rows whose errors are of these families."""
        wanted = set(families)
        return Sheet(row for row in self.rows if GRID[row.design].law.family in wanted)

    def of(self, design: int) -> Sheet:
        """The rows of one design."""
        return Sheet(row for row in self.rows if row.design == design)

    def error_of_mean(self, values: FloatArray) -> float:
        """Monte Carlo standard error of a mean over designs, each with its own variance.

        Where a design has one sample only, that of the pooled values, which is too large.
        """
        places, counts = np.unique(self.design, return_counts=True)
        if counts.min() < 2:
            return float(values.std()) / values.size**0.5
        total = 0.0
        for place, count in zip(places, counts, strict=True):
            total += count * float(values[self.design == place].var(ddof=1))
        return total**0.5 / values.size

    def ratio(self, one: str, other: str) -> tuple[float, float]:
        """Mean absolute error of one over the other's, and its standard error."""
        top, bottom = self.misses(one), self.misses(other)
        ratio = float(top.mean() / bottom.mean())
        return ratio, self.error_of_mean(top - ratio * bottom) / float(bottom.mean())

    @property
    def covered(self) -> np.ndarray:
        """Whether each band holds the truth."""
        return (self.values("low") <= self.truth) & (self.truth <= self.values("high"))

    @property
    def over(self) -> np.ndarray:
        """Clearly too many columns."""
        return self.truth > CLEARLY_OVER

    @property
    def within(self) -> np.ndarray:
        """Clearly few enough."""
        return self.truth < CLEARLY_WITHIN

    @property
    def wrong(self) -> np.ndarray:
        """Within where the truth is clearly over, or the other way round."""
        answer = self.values("answer")
        return (self.over & (answer == WITHIN)) | (self.within & (answer == OVER))

    @property
    def undecided(self) -> np.ndarray:
        """Borderline in clear cases."""
        return (self.over | self.within) & (self.values("answer") == BORDERLINE)


def _groups(sheet: Sheet) -> list[tuple[str, Sheet]]:
    """All promised families together, each of them, then those apart."""
    families = list(dict.fromkeys(design.law.family for design in GRID))
    promised = [family for family in families if family not in APART]
    groups = [("all", sheet.only(promised))] + [(f, sheet.only([f])) for f in promised]
    groups += [(f"{family} (apart)", sheet.only([family])) for family in APART]
    return [(name, some) for name, some in groups if some.rows]


def _accuracy(groups: list[tuple[str, Sheet]], exact: bool) -> list[str]:
    end = "_exact" if exact else ""
    body = []
    for name, some in groups:
        row = [name, str(np.unique(some.design).size), f"{some.truth.mean():.3f}"]
        for one in ("tool", "oracle", "bootstrap"):
            missed = some.misses(one + end)
            row.append(f"{missed.mean():.4f} ({some.error_of_mean(missed):.4f})")
        ratio, error = some.ratio("tool" + end, "oracle" + end)
        row += [
            f"{ratio:.2f} ({error:.2f})",
            f"{some.ratio('bootstrap' + end, 'oracle' + end)[0]:.2f}",
        ]
        row += [
            f"{(some.values(one + end) - some.truth).mean():+.4f}" for one in ("tool", "oracle")
        ]
        body.append(row)
    header = ["errors", "designs", "true risk", "tool", "oracle", "bootstrap", "tool / oracle",
              "bootstrap / oracle", "bias, tool", "bias, oracle"]  # fmt: skip
    return table(header, body)


def _share(hits: np.ndarray, of: np.ndarray) -> str:
    count, total = int((hits & of).sum()), int(of.sum())
    if not total:
        return "none"
    share = count / total
    return f"{100 * share:.1f} % ({100 * share_error(share, total):.1f}) of {total}"


def _verdicts(groups: list[tuple[str, Sheet]]) -> list[str]:
    body = []
    for name, some in groups:
        clear, all_rows = some.over | some.within, np.ones(some.truth.size, dtype=bool)
        body.append([
            name, _share(some.covered, all_rows), _share(some.wrong, clear),
            _share(some.undecided, clear), _share(some.wrong, some.over),
            _share(some.undecided, some.over), _share(some.wrong, some.within),
            _share(some.undecided, some.within),
        ])  # fmt: skip
    header = ["errors", "band covers", "clear: wrong", "clear: borderline", "over: within",
              "over: borderline", "within: over", "within: borderline"]  # fmt: skip
    return table(header, body)


def _by_answer(sheet: Sheet) -> list[str]:
    """Verdicts by true risk."""
    edges = (0, CLEARLY_WITHIN, RISK, CLEARLY_OVER, 0.2, 1.0001)
    answer = sheet.values("answer")
    body = []
    for low, high in itertools.pairwise(edges):
        here = (sheet.truth >= low) & (sheet.truth < high)
        counts = [str(int((here & (answer == a)).sum())) for a in (WITHIN, BORDERLINE, OVER)]
        body.append([f"{low:g} to {min(high, 1):g}", str(int(here.sum())), *counts])
    return table(["true risk", "cases", WITHIN, BORDERLINE, OVER], body)


def _designs(sheet: Sheet) -> list[str]:
    body = []
    for place in np.unique(sheet.design):
        some = sheet.of(int(place))
        laws = Counter(
            row.family + (" with volatility" if row.volatile else "") for row in some.rows
        )
        body.append([
            GRID[place].name,
            f"{some.truth.mean():.3f} ({some.truth.min():.3f} to {some.truth.max():.3f})",
            *(f"{some.misses(one).mean():.4f}" for one in ("tool", "oracle", "bootstrap")),
            f"{(some.values('tool') - some.truth).mean():+.4f}",
            f"{(some.values('oracle') - some.truth).mean():+.4f}",
            f"{int(some.covered.sum())}/{len(some.rows)}",
            f"{int(some.wrong.sum())}, {int(some.undecided.sum())}",
            "; ".join(f"{name} {count}" for name, count in laws.most_common()),
        ])  # fmt: skip
    header = ["errors / columns, n x p", "true risk", "tool", "oracle", "bootstrap",
              "bias, tool", "bias, oracle", "covered", "wrong, borderline",
              "laws fitted"]  # fmt: skip
    return table(header, body)


def _held(holds: bool) -> str:
    return "held" if holds else "not held"


def _reading(groups: list[tuple[str, Sheet]]) -> list[str]:
    """Each bar, whether it holds, and where not."""
    _, everything = groups[0]
    promised = [(name, some) for name, some in groups[1:] if "(apart)" not in name]
    ratio, error = everything.ratio("tool", "oracle")
    above = [
        f"{name} {r:.2f} ({e:.2f}; {some.misses('tool').mean():.4f} against"
        f" {some.misses('oracle').mean():.4f})"
        for name, some in promised
        for r, e in [some.ratio("tool", "oracle")]
        if r > MOST_RATIO
    ]
    gain, gain_error = everything.ratio("tool", "bootstrap")
    clear = everything.over | everything.within
    wrong = float(everything.wrong.sum() / max(1, clear.sum()))
    undecided = float(everything.undecided.sum() / max(1, clear.sum()))
    covered = float(everything.covered.mean())
    lines = [
        f"- Mean absolute error of the predicted risk {everything.misses('tool').mean():.4f},"
        f" the oracle's {everything.misses('oracle').mean():.4f}: ratio {ratio:.2f} ({error:.2f}),"
        f" bar {MOST_RATIO:g}: {_held(ratio <= MOST_RATIO)}.",
        f"- Families above the bar: {'; '.join(above) or 'none'}.",
        f"- The bootstrap of residuals: {everything.misses('bootstrap').mean():.4f}; the tool's"
        f" error is {gain:.2f} ({gain_error:.2f}) of it.",
        f"- Bands cover the truth in {100 * covered:.1f} %, bar {100 * LEAST_COVERED:.0f} %:"
        f" {_held(covered >= LEAST_COVERED)}.",
        f"- Clear cases: {100 * wrong:.1f} % wrong, bar {100 * MOST_WRONG:.0f} %:"
        f" {_held(wrong <= MOST_WRONG)}; {100 * undecided:.1f} % borderline, bar"
        f" {100 * MOST_UNDECIDED:.0f} %: {_held(undecided <= MOST_UNDECIDED)}.",
    ]
    for kind, hits in (("Wrong", everything.wrong), ("Borderline", everything.undecided)):
        counts = Counter(int(d) for d in everything.design[hits])
        worst = "; ".join(f"{GRID[d].name} {k}" for d, k in counts.most_common(6))
        lines.append(f"- {kind} most often: {worst or 'never'}.")
    for at_most, words in ((False, "furthest above"), (True, "furthest below")):
        places = np.unique(everything.design)
        bias = [float((everything.of(int(d)).values("tool")
                       - everything.of(int(d)).truth).mean()) for d in places]  # fmt: skip
        order = np.argsort(bias if at_most else [-b for b in bias])[:4]
        named = "; ".join(f"{GRID[places[k]].name} {bias[k]:+.3f}" for k in order)
        lines.append(f"- Predictions lie {words} the truth, on average, in: {named}.")
    return ["## Reading", "", *lines, ""]


def _extent(sheet: Sheet) -> str:
    """How many samples there are of the full study's."""
    full = REPLICATIONS * len(GRID)
    done = len(sheet.rows)
    if done == full:
        return f"{REPLICATIONS} samples of each"
    return f"PARTIAL: {done} samples of the {full} of the full study"


def write_results(out: Path, rows: list[Row], seconds: float) -> None:
    """Write the tables and the reading."""
    sheet = Sheet(rows)
    groups = _groups(sheet)
    moderate = [d for d in GRID if d.law.family not in APART]
    share = np.mean([0.03 <= d.risk <= 0.30 for d in moderate])
    lines = preamble("Predicted break-through risk against brute force", seconds)
    lines += [
        f"{len(GRID)} known designs, {100 * share:.0f} % of those promised with a true risk"
        f" between 0.03 and 0.30; {_extent(sheet)}. Everything is drawn anew in each sample;"
        " truth: 4,000 draws of the true errors given the sample's columns and volatility path."
        " Tool: pilot, diagnosis, law and break-through simulation with 400 replicates, from"
        " columns and response alone. Oracle: maximum likelihood with the true family on the true"
        " errors, true mean known, the same number of draws. Bootstrap: centred residuals of the"
        " pilot resampled independently, the same number of draws. Accepted risk 0.05, constant"
        " 1.1. Monte Carlo standard errors in brackets. One row for each sample in"
        f" {out.with_suffix('.csv').name}.",
        "",
        *_reading(groups),
        "## Mean absolute error of the risk at p",
        "",
        *_accuracy(groups, exact=False),
        "The same with 4,000 draws each, so that hardly any simulation error is left. Here the tool"
        " stands for the law it chose alone; its prediction above is the average over all laws"
        " the sample leaves open: what that average is worth is the difference.",
        "",
        *_accuracy(groups, exact=True),
        "## Bands and verdicts",
        "",
        "By the noise limit alone. Clear: true risk above 0.10 (over) or under 0.025 (within).",
        "",
        *_verdicts(groups),
        *_by_answer(groups[0][1]),
        "## Designs",
        "",
        *_designs(sheet),
    ]
    out.parent.mkdir(parents=True, exist_ok=True)
    out.write_text("\n".join(lines), encoding="utf-8")
