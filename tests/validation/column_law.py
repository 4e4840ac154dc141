"""Do tables drawn from a fitted column law behave like those the law was fitted to?

    python tests/validation/column_law.py --out reports/validation/column_law.md

For each known table law: many true tables with their errors, and, from each of several true
samples, a fitted column law and tables drawn from it. Compared: the score tail index (median
over columns), the largest absolute correlation, and the penalty ratio R(p).
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from threadpoolctl import threadpool_limits
from write_up import preamble, table

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.column_tails import column_tails
from scantling.law.column_law import draw_joint, fit_column_law
from scantling.law.column_lineage import Origin
from scantling.law.families import ErrorLaw, student_law
from scantling.law.fit import fit_law
from scantling.simulation.scores import centre, score_ratios

RISK = 0.05
ERRORS = 10
"""Draws of the errors to a table."""
TAIL_TABLES = 5
"""Tables of each sample on which score tails are estimated."""
BURN_IN = 500
RESAMPLES = 200
CLEAR = 3.0
"""Joint standard errors from which a difference is read as one."""

Table = tuple[FloatArray, FloatArray]
"""Columns (n, P) and errors (n, draws) that belong to them."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """A law of tables and errors."""

    name: str
    """As printed."""
    draw: Callable[[np.random.Generator, int, int], Table]
    """(generator, rows, columns) -> one table and its errors."""
    law: Callable[[FloatArray], ErrorLaw]
    """Error law for a sample's errors: known where independent, fitted where volatile."""
    ordered: bool = False
    """Whether rows have an order."""
    lags: int = 0
    """Columns are lags 1 to this of their series."""

    def origins(self, columns: int) -> list[Origin] | None:
        """What the columns are lags of."""
        if not self.lags:
            return None
        return [(place // self.lags, place % self.lags + 1) for place in range(columns)]


@dataclass(slots=True, kw_only=True)
class Tally:
    """What is measured on tables."""

    gammas: list[float] = field(default_factory=list)
    """Median over columns of 1/index of the scores, a table each."""
    largest: list[float] = field(default_factory=list)
    """Largest absolute correlation, a table each."""
    sizes: list[float] = field(default_factory=list)
    """Mean absolute correlation, a table each."""
    peaks: list[FloatArray] = field(default_factory=list)
    """Largest ratio |S|/v of every draw of errors, a table each."""
    twins: list[FloatArray] = field(default_factory=list)
    """The same under normal errors."""

    def add(self, found: Table, rng: np.random.Generator, *, tails: bool, ordered: bool) -> None:
        """Measure one table."""
        X, errors = found
        n = len(X)
        correlation = np.abs(X.T @ X / n)
        np.fill_diagonal(correlation, 0.0)
        self.largest.append(float(correlation.max()))
        self.sizes.append(float(correlation.sum() / (correlation.size - len(correlation))))
        self.peaks.append(score_ratios(X, centre(errors), "plug-in")[0].max(axis=0))
        normal = centre(rng.standard_normal((n, ERRORS)))
        self.twins.append(score_ratios(X, normal, "plug-in")[0].max(axis=0))
        if tails:
            scores = X * centre(errors)[:, :1]
            gamma = column_tails(scores, dependent=ordered).gamma
            if np.isfinite(gamma).any():
                self.gammas.append(float(np.nanmedian(gamma)))

    def ratio(self, tables: np.ndarray | None = None) -> float:
        """R(p) over all tables, or those numbered."""
        chosen = range(len(self.peaks)) if tables is None else tables
        law, twin = (
            np.quantile(np.concatenate([group[k] for k in chosen]), 1 - RISK)
            for group in (self.peaks, self.twins)
        )
        return float(law / twin)


def standard(X: FloatArray) -> FloatArray:
    """Columns of mean 0 and mean square 1; those that do not vary get one active row."""
    flat = np.ptp(X, axis=0) == 0
    X[0, flat] += 1.0
    X = X - X.mean(axis=0)
    return np.asarray(X / np.sqrt((X**2).mean(axis=0)))


def student_table(df: float, error_df: float) -> Callable[..., Table]:
    """Independent Student columns and errors."""

    def draw(rng: np.random.Generator, n: int, p: int) -> Table:
        return standard(rng.standard_t(df, (n, p))), rng.standard_t(error_df, (n, ERRORS))

    return draw


def factor_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Two t(4) factors with half of the variance, and t(4) parts of each column's own."""
    loadings = np.array([[0.6] * p, [0.4, -0.4] * (p // 2) + [0.4] * (p % 2)])
    X = rng.standard_t(4, (n, 2)) @ loadings + 0.7 * rng.standard_t(4, (n, p))
    return standard(X), rng.standard_t(4, (n, ERRORS))


def elliptic_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Columns of a multivariate t(4): large together; errors apart."""
    mix = np.sqrt(4 / rng.chisquare(4, (n, 1)))
    return standard(mix * rng.standard_normal((n, p))), rng.standard_t(4, (n, ERRORS))


def mixed_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Columns and errors of one multivariate t(4): all large together."""
    mix = np.sqrt(4 / rng.chisquare(4, (n, 1)))
    return (
        standard(mix * rng.standard_normal((n, p))),
        mix * rng.standard_normal((n, ERRORS)),
    )


def paired_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """t(4) columns, every tenth pair correlated 0.8."""
    X = rng.standard_t(4, (n, p))
    X[:, 1::20] = 0.8 * X[:, ::20] + 0.6 * X[:, 1::20]
    return standard(X), rng.standard_t(4, (n, ERRORS))


def skewed_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Squares of t(6): one side heavy with index 3, the other bounded."""
    return standard(rng.standard_t(6, (n, p)) ** 2), rng.standard_t(4, (n, ERRORS))


def dummy_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Dummies with 1 to 4 % of rows active; t(3) errors."""
    share = np.linspace(0.01, 0.04, p)
    X = (rng.random((n, p)) < share).astype(np.float64)
    return standard(X), rng.standard_t(3, (n, ERRORS))


def garch(rng: np.random.Generator, n: int, count: int) -> tuple[FloatArray, FloatArray]:
    """GARCH(1,1) (0.15, 0.80) normal series and their paths, shape (n, count) each."""
    out, path = np.empty((n + BURN_IN, count)), np.empty((n + BURN_IN, count))
    variance = np.ones(count)
    for t, z in enumerate(rng.standard_normal((n + BURN_IN, count))):
        path[t] = np.sqrt(variance)
        out[t] = path[t] * z
        variance = 0.05 + 0.15 * out[t] ** 2 + 0.80 * variance
    return out[BURN_IN:], path[BURN_IN:]


def lag_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Five lags each of AR(1) series with GARCH shocks, the first the response itself."""
    shocks, path = garch(rng, n + 105, p // 5)
    series = np.zeros_like(shocks)
    for t in range(1, len(shocks)):
        series[t] = 0.3 * series[t - 1] + shocks[t]
    lagged = [series[105 - lag : 105 - lag + n] for lag in range(1, 6)]
    X = np.stack(lagged, axis=2).reshape(n, -1)
    errors = path[105:, :1] * rng.standard_normal((n, ERRORS))
    errors[:, 0] = shocks[105:, 0]
    return standard(X), errors


def volatile_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Columns and errors on the GARCH path of the errors."""
    errors, path = garch(rng, n, 1)
    X = path * rng.standard_normal((n, p))
    every = path * rng.standard_normal((n, ERRORS))
    every[:, :1] = errors
    return standard(X), every


def stochastic_table(rng: np.random.Generator, n: int, p: int) -> Table:
    """Columns and errors on one log-autoregressive path, which no GARCH matches exactly."""
    logs = np.empty(n + BURN_IN)
    level = 0.0
    for t, step in enumerate(rng.standard_normal(n + BURN_IN)):
        level = 0.95 * level + 0.5 * np.sqrt(1 - 0.95**2) * step
        logs[t] = level
    path = np.exp(logs[BURN_IN:, None])
    return standard(path * rng.standard_normal((n, p))), path * rng.standard_normal((n, ERRORS))


def volatile_law(errors: FloatArray) -> ErrorLaw:
    """Normal innovations on a fitted path, where clustering is found."""
    return fit_law(errors, family="normal", time_ordered=True)


CASES = (
    Case(name="independent normal, errors t 3",
         draw=lambda rng, n, p: (standard(rng.standard_normal((n, p))),
                                 rng.standard_t(3, (n, ERRORS))),
         law=lambda e: student_law(3)),
    Case(name="independent t 3, errors t 3", draw=student_table(3, 3),
         law=lambda e: student_law(3)),
    Case(name="t 4 with two factors", draw=factor_table, law=lambda e: student_law(4)),
    Case(name="multivariate t 4 columns", draw=elliptic_table, law=lambda e: student_law(4)),
    Case(name="multivariate t 4, errors too", draw=mixed_table, law=lambda e: student_law(4)),
    Case(name="t 4 with close pairs", draw=paired_table, law=lambda e: student_law(4)),
    Case(name="squares of t 6", draw=skewed_table, law=lambda e: student_law(4)),
    Case(name="sparse dummies, errors t 3", draw=dummy_table, law=lambda e: student_law(3)),
    Case(name="5 lags of AR(1) with GARCH shocks", draw=lag_table, law=volatile_law,
         ordered=True, lags=5),
    Case(name="common GARCH path", draw=volatile_table, law=volatile_law, ordered=True),
    Case(name="common stochastic volatility", draw=stochastic_table, law=volatile_law,
         ordered=True),
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Compared:
    """True and drawn tables of one case."""

    truth: Tally
    """Of fresh true tables."""
    drawn: list[Tally]
    """Of tables drawn from each sample's fitted law."""
    seconds: float
    """Of the slowest fit."""


def compare(case: Case, rows: int, columns: int, samples: int, tables: int, seed: int) -> Compared:
    """Measure true tables, and tables drawn from laws fitted to single samples."""
    key = f"column law, {case.name}"
    truth, slowest = Tally(), 0.0
    for number in range(samples * tables):
        rng = stream(seed, key, 1, number + 1)
        found = case.draw(rng, rows, columns)
        truth.add(found, rng, tails=number < samples * TAIL_TABLES, ordered=case.ordered)
    drawn = []
    for sample in range(samples):
        rng = stream(seed, key, 2, sample + 1)
        X, errors = case.draw(rng, rows, columns)
        law = case.law(errors[:, 0])
        started = time.perf_counter()
        fitted = fit_column_law(
            X, errors[:, 0], law, time_ordered=case.ordered, lag_groups=case.origins(columns)
        )
        slowest = max(slowest, time.perf_counter() - started)
        tally = Tally()
        for number in range(tables):
            found = draw_joint(fitted, law, rows, ERRORS, rng)
            tally.add(found, rng, tails=number < TAIL_TABLES, ordered=case.ordered)
        drawn.append(tally)
    return Compared(truth=truth, drawn=drawn, seconds=slowest)


def mean_and_error(values: list[float]) -> tuple[float, float]:
    """Mean and its Monte Carlo standard error."""
    array = np.asarray(values)
    return float(array.mean()), float(array.std(ddof=1) / np.sqrt(array.size))


def lines_of(case: Case, found: Compared, rng: np.random.Generator) -> tuple[list[str], list[str]]:
    """Rows of the two tables."""

    def index(tally: Tally) -> float:
        return float(np.mean(tally.gammas)) if tally.gammas else float("nan")

    def text(pair: tuple[float, float], digits: int = 3) -> str:
        value, error = pair
        return "-" if not np.isfinite(value) else f"{value:.{digits}f} ({error:.{digits}f})"

    true_gamma = mean_and_error(found.truth.gammas) if found.truth.gammas else (float("nan"), 0.0)
    count = len(found.truth.peaks)
    again = [found.truth.ratio(rng.integers(count, size=count)) for _ in range(RESAMPLES)]
    true_ratio = (found.truth.ratio(), float(np.std(again)))
    first = [
        case.name,
        text(true_gamma), text(mean_and_error([index(t) for t in found.drawn])),
        text(true_ratio), text(mean_and_error([t.ratio() for t in found.drawn])),
        f"{np.std([t.ratio() for t in found.drawn], ddof=1):.3f}",
    ]  # fmt: skip

    def quantiles(values: list[float]) -> str:
        return " / ".join(f"{q:.3f}" for q in np.quantile(values, (0.1, 0.5, 0.9)))

    all_drawn = [value for tally in found.drawn for value in tally.largest]
    second = [
        case.name,
        quantiles(found.truth.largest), quantiles(all_drawn),
        text(mean_and_error(found.truth.largest)),
        text(mean_and_error([float(np.mean(t.largest)) for t in found.drawn])),
        text(mean_and_error(found.truth.sizes), 4),
        text(mean_and_error([float(np.mean(t.sizes)) for t in found.drawn]), 4),
    ]  # fmt: skip
    return first, second


def reading(firsts: list[list[str]], seconds: list[list[str]]) -> list[str]:
    """Where drawn tables differ from true ones beyond chance, from the printed means."""

    def apart(rows: list[list[str]], true: int, drawn: int) -> str:
        found = []
        for row in rows:
            if "-" in (row[true], row[drawn]):
                continue
            (a, a_error), (b, b_error) = (
                map(float, row[place].removesuffix(")").split(" (")) for place in (true, drawn)
            )
            if abs(a - b) > CLEAR * max(np.hypot(a_error, b_error), 1e-4):
                found.append(f"{row[0]} {100 * (b / a - 1):+.0f} %")
        return "; ".join(found) or "none"

    return [
        f"Drawn against true, where the means are more than {CLEAR:g} of their joint standard"
        " errors apart:",
        "",
        f"- score 1/index: {apart(firsts, 1, 2)};",
        f"- penalty ratio: {apart(firsts, 3, 4)};",
        f"- largest correlation: {apart(seconds, 3, 4)};",
        f"- all pairs' correlation: {apart(seconds, 5, 6)}.",
        "",
        "The penalty ratio of volatile cases is that of the fitted error law as well: a GARCH"
        " fitted to one sample may be far heavier than what made it, hence the spread between"
        " samples.",
        "",
    ]


def main() -> None:
    """Run the study and write its tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rows", type=int, default=500)
    parser.add_argument("--columns", type=int, default=200)
    parser.add_argument("--samples", type=int, default=12)
    parser.add_argument("--tables", type=int, default=60)
    parser.add_argument("--only", default="", help="cases whose name holds this")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path)
    options = parser.parse_args()
    started = time.perf_counter()
    firsts, seconds, slowest = [], [], 0.0
    with threadpool_limits(1):
        for case in CASES:
            if options.only not in case.name:
                continue
            found = compare(
                case, options.rows, options.columns, options.samples, options.tables, options.seed
            )
            slowest = max(slowest, found.seconds)
            first, second = lines_of(case, found, stream(options.seed, "column law, resampled"))
            firsts.append(first)
            seconds.append(second)
            print(
                f"{time.perf_counter() - started:5.0f} s",
                *first,
                *second[1:],
                sep=" | ",
                flush=True,
            )
    lines = preamble("Column law: drawn tables against true ones", time.perf_counter() - started)
    lines += [
        f"n = {options.rows}, P = {options.columns}; {options.samples} samples a case, from each"
        f" of which one law is fitted and {options.tables} tables of {ERRORS} errors are drawn;"
        " as many true tables. Monte Carlo standard errors in brackets: of drawn tables between"
        f" samples, so that they hold the fit's own spread. Slowest fit {slowest:.2f} s.",
        "",
        *reading(firsts, seconds),
        "## Scores: 1/tail index (median column), and penalty ratio R(P) at risk 0.05",
        "",
        *table(
            ["table law", "1/index, true", "drawn", "R, true", "drawn", "sd between samples"],
            firsts,
        ),
        "## Absolute correlation: the largest (10 / 50 / 90 % points, mean), and all pairs' mean",
        "",
        *table(
            ["table law", "true", "drawn", "mean, true", "drawn", "all pairs, true", "drawn"],
            seconds,
        ),
    ]
    if options.out:
        options.out.parent.mkdir(parents=True, exist_ok=True)
        options.out.write_text("\n".join(lines), encoding="utf-8")


if __name__ == "__main__":
    main()
