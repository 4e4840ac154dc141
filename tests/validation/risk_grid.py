"""The known designs of the study of predicted risk: their laws, their columns and the grid.

The grid was fixed by true risks alone, before any prediction was looked at; the recorded risks
are the means over the study's own samples (`risk_calibration.py --record`).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from known_laws import BURN_IN, LAPLACE, NORMAL, KnownLaw, skewed_student, stable, student

from scantling.core.record import FloatArray

SEED = 20
REPLICATIONS = 20
EFFECTS = 3
EFFECT = 0.2
"""Each true coefficient, sd of the errors per sd of a column."""
OWN_LAGS = 20
SERIES_LAGS = 10
SHARED = ("shared volatility", "shared lags")
"""Columns that need the errors' volatility."""
UNORDERED = ("uniform", "dummies 2 %", "dummies 5 %", "products of normal", "products of t 6")
"""Columns of cross sections: their rows have no order in time."""


@dataclass(frozen=True, slots=True, kw_only=True)
class KnownErrors:
    """A law of errors."""

    family: str
    """Family of the maximum-likelihood rival, under which results are grouped."""
    innovations: KnownLaw
    """Law of the independent innovations."""
    variance: float = 1.0
    """Of the innovations (of the stable law, twice its squared scale)."""
    garch: tuple[float, float] | None = None
    """alpha and beta of a GARCH(1,1) of unit variance; None: constant volatility."""

    def draw(self, rng: np.random.Generator, path: FloatArray, count: int) -> FloatArray:
        """Errors given the volatility path (n,), shape (n, count)."""
        return path[:, None] * self._unit(rng, path.size, count)

    def sample(self, rng: np.random.Generator, rows: int) -> tuple[FloatArray, FloatArray]:
        """One series of errors and its volatility, each (rows,)."""
        if self.garch is None:
            return self._unit(rng, rows, 1)[:, 0], np.ones(rows)
        shocks = self._unit(rng, rows + BURN_IN, 1)[:, 0]
        path = volatility(shocks[:, None], *self.garch)[:, 0]
        return (path * shocks)[BURN_IN:], path[BURN_IN:]

    def _unit(self, rng: np.random.Generator, rows: int, count: int) -> FloatArray:
        return self.innovations.draw(rng, rows, count) / math.sqrt(self.variance)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """One sample of a known design."""

    X: FloatArray
    """Columns, mean 0 and mean square 1, shape (n, p)."""
    y: FloatArray
    """Response, shape (n,)."""
    errors: FloatArray
    """True errors, shape (n,)."""
    path: FloatArray
    """Their true volatility, shape (n,)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class KnownDesign:
    """Errors, columns and sizes."""

    errors: str
    """Key of ERRORS."""
    columns: str
    """Key of COLUMNS, or 'own lags'."""
    rows: int
    """n."""
    width: int
    """p, all of them asked for."""
    rule: str = "plug-in"
    """plug-in | self-normalised."""
    risk: float
    """True break-through risk, mean over the study's samples."""

    @property
    def name(self) -> str:
        """As printed; also names its random streams."""
        loadings = "" if self.rule == "plug-in" else ", self-normalised"
        return f"{self.errors} / {self.columns}, {self.rows} x {self.width}{loadings}"

    @property
    def law(self) -> KnownErrors:
        """The law of the errors."""
        return ERRORS[self.errors]

    @property
    def time_ordered(self) -> bool:
        """Whether the chain is told that rows follow one another in time."""
        return self.columns not in UNORDERED

    def sample(self, rng: np.random.Generator) -> Sample:
        """Draw columns, errors and volatility path; the first three columns carry effects."""
        before = OWN_LAGS if self.columns == "own lags" else 0
        rows = self.rows + before
        errors, path = self.law.sample(rng, rows)
        if before:
            X = rng.standard_t(4, (rows, self.width - OWN_LAGS))
        else:
            X = COLUMNS[self.columns](rng, rows, self.width, path)
        X = standardised(X)
        y = errors + EFFECT * X[:, :EFFECTS] @ rng.choice([-1.0, 1.0], EFFECTS)
        if before:
            lags = [y[before - lag : rows - lag] for lag in range(1, OWN_LAGS + 1)]
            X = standardised(np.column_stack([X[before:], *lags]))
        return Sample(X=X, y=y[before:], errors=errors[before:], path=path[before:])


def volatility(shocks: FloatArray, alpha: float, beta: float) -> FloatArray:
    """sigma_t of GARCH(1,1) of unit variance for each column of unit-variance shocks."""
    out, variance = np.empty_like(shocks), np.ones(shocks.shape[1])
    for t, shock in enumerate(shocks):
        out[t] = np.sqrt(variance)
        variance = 1 - alpha - beta + variance * (alpha * shock**2 + beta)
    return out


def standardised(X: FloatArray) -> FloatArray:
    """Columns of mean 0 and mean square 1."""
    centred = X - X.mean(axis=0)
    return np.asarray(centred / np.sqrt((centred**2).mean(axis=0)))


def _lags(series: FloatArray, rows: int, width: int) -> FloatArray:
    """Lags 1..10 of every series, as many columns as asked for."""
    end = series.shape[0]
    parts = [series[end - rows - lag : end - lag] for lag in range(1, SERIES_LAGS + 1)]
    return np.stack(parts, axis=2).reshape(rows, -1)[:, :width]


def _garch_lags(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
    count = -(-width // SERIES_LAGS)
    shocks = rng.standard_t(5, (rows + BURN_IN, count)) * math.sqrt(3 / 5)
    return _lags(volatility(shocks, 0.10, 0.85) * shocks, rows, width)


def _shared_lags(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
    """Lags of series with the errors' volatility; before the sample it stays at its first value."""
    count = -(-width // SERIES_LAGS)
    longer = np.concatenate([np.full(SERIES_LAGS, path[0]), path])
    return _lags(longer[:, None] * rng.standard_normal((longer.size, count)), rows, width)


def _factors(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
    """Three t(4) factors, half of the variance, and t(4) remainders."""
    loadings = rng.standard_normal((3, width)) / math.sqrt(3)
    return rng.standard_t(4, (rows, 3)) @ loadings + rng.standard_t(4, (rows, width))


def _dummies(share: float) -> Columns:
    """0/1 columns, each active on the same number of rows."""

    def draw(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
        first = np.zeros((rows, width))
        first[: max(3, round(share * rows))] = 1.0
        return rng.permuted(first, axis=0)

    return draw


def _squares(df: float) -> Columns:
    """Half of the columns, then the squares of these."""

    def draw(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
        raw = _values(rng, df, (rows, -(-width // 2)))
        return np.column_stack([raw, raw**2])[:, :width]

    return draw


def _products(df: float) -> Columns:
    """The fewest columns whose pairs suffice, then products of pairs."""

    def draw(rng: np.random.Generator, rows: int, width: int, path: FloatArray) -> FloatArray:
        count = math.ceil((math.sqrt(1 + 8 * width) - 1) / 2)
        raw = _values(rng, df, (rows, count))
        left, right = np.triu_indices(count, 1)
        return np.column_stack([raw, raw[:, left] * raw[:, right]])[:, :width]

    return draw


def _values(rng: np.random.Generator, df: float, shape: tuple[int, int]) -> FloatArray:
    """Student t values; normal ones at infinite degrees of freedom."""
    return rng.standard_t(df, shape) if math.isfinite(df) else rng.standard_normal(shape)


def _student(df: float) -> Columns:
    return lambda rng, rows, width, path: _values(rng, df, (rows, width))


Columns = Callable[[np.random.Generator, int, int, FloatArray], FloatArray]
"""(generator, rows, width, the errors' volatility) -> columns, not yet standardised."""

COLUMNS: dict[str, Columns] = {
    "normal": _student(math.inf),
    "t 3": _student(3),
    "t 4": _student(4),
    "t 6": _student(6),
    "uniform": lambda rng, rows, width, path: rng.random((rows, width)),
    "equicorrelated t 4": lambda rng, rows, width, path: (
        rng.standard_t(4, (rows, 1)) + rng.standard_t(4, (rows, width))
    ),
    "factors": _factors,
    "dummies 2 %": _dummies(0.02),
    "dummies 5 %": _dummies(0.05),
    "squares of normal": _squares(math.inf),
    "squares of t 6": _squares(6),
    "products of normal": _products(math.inf),
    "products of t 6": _products(6),
    "GARCH lags": _garch_lags,
    "shared volatility": lambda rng, rows, width, path: (
        path[:, None] * rng.standard_normal((rows, width))
    ),
    "shared lags": _shared_lags,
}

GED_SHAPE = 1.3
GED = KnownLaw(
    name="GED 1.3",
    index=math.inf,
    draw=lambda rng, n, count: (
        rng.choice([-1.0, 1.0], (n, count))
        * rng.gamma(1 / GED_SHAPE, size=(n, count)) ** (1 / GED_SHAPE)
    ),
)


def _skewed() -> KnownLaw:
    """Two-piece t(4), skewness 1.5, less its mean E|t(4)| (1.5 - 1/1.5), E|t(4)| = 1."""
    law = skewed_student(4, 1.5)
    mean = 1.5 - 1 / 1.5
    return KnownLaw(
        name=law.name, index=4, draw=lambda rng, n, count: law.draw(rng, n, count) - mean
    )


SKEWED_VARIANCE = 2 * (1.5**3 + 1.5**-3) / (1.5 + 1 / 1.5) - (1.5 - 1 / 1.5) ** 2
GED_VARIANCE = math.gamma(3 / GED_SHAPE) / math.gamma(1 / GED_SHAPE)

ERRORS = {
    "normal": KnownErrors(family="normal", innovations=NORMAL),
    "Laplace": KnownErrors(family="Laplace", innovations=LAPLACE, variance=2),
    "GED 1.3": KnownErrors(family="GED", innovations=GED, variance=GED_VARIANCE),
    "t 2.5": KnownErrors(family="t", innovations=student(2.5), variance=5),
    "t 3": KnownErrors(family="t", innovations=student(3), variance=3),
    "t 4": KnownErrors(family="t", innovations=student(4), variance=2),
    "t 6": KnownErrors(family="t", innovations=student(6), variance=1.5),
    "skewed t 4": KnownErrors(
        family="skewed t", innovations=_skewed(), variance=SKEWED_VARIANCE
    ),
    "GARCH normal": KnownErrors(
        family="GARCH normal", innovations=NORMAL, garch=(0.12, 0.84)
    ),
    "GARCH t 5": KnownErrors(
        family="GARCH t", innovations=student(5), variance=5 / 3, garch=(0.10, 0.85)
    ),
    "stable 1.7": KnownErrors(family="stable", innovations=stable(1.7), variance=2),
}  # fmt: skip
APART = ("stable",)
"""Families whose errors have no variance: outside the promise, reported by themselves."""


def _design(
    errors: str, columns: str, rows: int, width: int, risk: float, rule: str = "plug-in"
) -> KnownDesign:
    return KnownDesign(
        errors=errors, columns=columns, rows=rows, width=width, risk=risk, rule=rule
    )  # fmt: skip


SELF = "self-normalised"
GRID = tuple(_design(*row) for row in (
    ("normal", "normal", 200, 200, 0.0082),
    ("normal", "t 3", 100, 500, 0.0044),
    ("normal", "t 3", 300, 1000, 0.0063),
    ("normal", "dummies 2 %", 200, 400, 0.0070),
    ("normal", "products of normal", 100, 300, 0.0053),
    ("normal", "GARCH lags", 500, 200, 0.0103),
    ("Laplace", "normal", 100, 100, 0.0084),
    ("Laplace", "t 3", 200, 800, 0.0405),
    ("Laplace", "t 3", 100, 300, 0.0315),
    ("Laplace", "t 4", 300, 500, 0.0175),
    ("Laplace", "dummies 2 %", 300, 400, 0.0725),
    ("Laplace", "products of t 6", 200, 500, 0.0294),
    ("Laplace", "squares of t 6", 500, 600, 0.0553),
    ("GED 1.3", "t 3", 200, 500, 0.0163),
    ("GED 1.3", "squares of t 6", 300, 400, 0.0240),
    ("GED 1.3", "dummies 2 %", 200, 800, 0.0441),
    ("GED 1.3", "normal", 300, 300, 0.0084),
    ("GED 1.3", "factors", 100, 200, 0.0078),
    ("t 2.5", "t 3", 200, 100, 0.1281),
    ("t 2.5", "t 3", 500, 1000, 0.3988),
    ("t 2.5", "t 4", 100, 100, 0.0709),
    ("t 2.5", "t 6", 300, 300, 0.0496),
    ("t 2.5", "normal", 300, 500, 0.0075),
    ("t 2.5", "dummies 5 %", 300, 50, 0.1242),
    ("t 2.5", "own lags", 500, 60, 0.0858),
    ("t 3", "t 3", 300, 800, 0.2362),
    ("t 3", "t 3", 100, 50, 0.0652),
    ("t 3", "t 3", 1000, 500, 0.1859),
    ("t 3", "t 4", 200, 400, 0.0903),
    ("t 3", "normal", 200, 1000, 0.0059),
    ("t 3", "uniform", 200, 500, 0.0037),
    ("t 3", "dummies 5 %", 500, 100, 0.0772),
    ("t 3", "own lags", 300, 60, 0.0586),
    ("t 3", "factors", 300, 200, 0.0328),
    ("t 3", "t 4", 300, 400, 0.0016, SELF),
    ("t 4", "t 4", 300, 1000, 0.0546),
    ("t 4", "t 4", 100, 300, 0.0361),
    ("t 4", "t 4", 1000, 300, 0.0283),
    ("t 4", "t 3", 500, 400, 0.0856),
    ("t 4", "t 3", 200, 30, 0.0380),
    ("t 4", "normal", 100, 1000, 0.0036),
    ("t 4", "squares of normal", 300, 200, 0.0290),
    ("t 4", "products of t 6", 300, 400, 0.0617),
    ("t 4", "dummies 2 %", 200, 100, 0.1557),
    ("t 4", "equicorrelated t 4", 200, 300, 0.0146),
    ("t 4", "own lags", 500, 40, 0.0268),
    ("t 4", "squares of t 6", 200, 200, 0.0013, SELF),
    ("t 6", "t 3", 200, 500, 0.0376),
    ("t 6", "t 4", 500, 1000, 0.0188),
    ("t 6", "t 6", 300, 500, 0.0097),
    ("t 6", "products of t 6", 200, 800, 0.0297),
    ("t 6", "squares of t 6", 300, 600, 0.0626),
    ("t 6", "dummies 2 %", 500, 500, 0.0487),
    ("t 6", "uniform", 100, 200, 0.0056),
    ("t 6", "GARCH lags", 300, 200, 0.0129),
    ("skewed t 4", "t 4", 200, 500, 0.0649),
    ("skewed t 4", "t 3", 300, 100, 0.0659),
    ("skewed t 4", "normal", 300, 300, 0.0089),
    ("skewed t 4", "dummies 2 %", 300, 200, 0.2357),
    ("skewed t 4", "factors", 500, 300, 0.0250),
    ("skewed t 4", "products of normal", 200, 400, 0.0353),
    ("GARCH normal", "shared volatility", 300, 200, 0.1041),
    ("GARCH normal", "shared volatility", 1000, 400, 0.1751),
    ("GARCH normal", "shared volatility", 500, 300, 0.0048, SELF),
    ("GARCH normal", "shared lags", 500, 100, 0.0716),
    ("GARCH normal", "own lags", 500, 60, 0.0353),
    ("GARCH normal", "GARCH lags", 300, 300, 0.0148),
    ("GARCH normal", "t 4", 500, 500, 0.0097),
    ("GARCH normal", "normal", 200, 100, 0.0108),
    ("GARCH t 5", "shared volatility", 300, 100, 0.0893),
    ("GARCH t 5", "shared volatility", 1000, 100, 0.1658),
    ("GARCH t 5", "shared volatility", 500, 200, 0.0044, SELF),
    ("GARCH t 5", "shared lags", 500, 30, 0.0734),
    ("GARCH t 5", "own lags", 500, 60, 0.0928),
    ("GARCH t 5", "GARCH lags", 300, 100, 0.0302),
    ("GARCH t 5", "t 4", 500, 300, 0.0299),
    ("GARCH t 5", "t 6", 1000, 20, 0.0194),
    ("stable 1.7", "normal", 300, 300, 0.0084),
    ("stable 1.7", "t 4", 200, 100, 0.1037),
    ("stable 1.7", "dummies 5 %", 300, 50, 0.2057),
    ("stable 1.7", "t 6", 500, 300, 0.0021, SELF),
))  # fmt: skip
