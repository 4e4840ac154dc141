"""Penalty rules, applied to many simulated responses as a user would apply them to one.

plug-in
    L(p)/sqrt(n) times the root mean square of the error scores and of the column:
    for squared loss c Phi^-1(1 - g/(2p)) rms(e)/sqrt(n). For absolute loss the scores
    are signs, for logistic loss at most 1/2 in root mean square, for the square-root
    lasso free of scale. Belloni et al. (2012), Econometrica 80, 2369-2429; Belloni et
    al. (2011), Biometrika 98, 791-806; Belloni et al. (2016), J. Business & Economic
    Statistics 34, 606-619.
self-normalised
    The same with sqrt(mean of (x_ij score_i)^2) for each column.
bic, extended-bic
    The point of a falling grid with the least -2 log-likelihood + k ln n, and
    + 2 ln C(p, k) more, k the columns selected. Zou et al. (2007), Annals of
    Statistics 35, 2173-2192 (k as degrees of freedom); Chen et al. (2008), Biometrika
    95, 759-771, with their constant at 1.
cross-validated, cross-validated-sparse
    The point with the least K-fold error, and the largest penalty whose error is
    within one standard error of that. Folds are contiguous blocks where rows are
    ordered in time, random otherwise.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from scantling.core.record import FloatArray
from scantling.core.streams import blocks, stream
from scantling.errors import InputError
from scantling.simulation.arguments import columns_and_responses, per_response
from scantling.simulation.lasso import BLOCK_CELLS
from scantling.simulation.loadings import BoolArray, adaptive_loadings, refit_batch
from scantling.simulation.loss_scores import huber_thresholds
from scantling.simulation.losses import (
    LOSSES,
    deviance,
    error_scores,
    null_scores,
    row_losses,
    walk_loss,
)
from scantling.simulation.scores import penalty_level

LEVEL_RULES = ("plug-in", "self-normalised")
PATH_RULES = ("bic", "extended-bic", "cross-validated", "cross-validated-sparse")
RULES = LEVEL_RULES + PATH_RULES

GRID_POINTS = 50
GRID_RATIO = 0.05
"""Penalties of the grid, and the last over the first."""

PATIENCE = 20
"""A response is done once it has not improved for so many points (common practice, no source).

Wide enough for the hump of the extended criterion between nothing and the relevant columns."""

TOLERANCE = 1e-5
"""Relative duality gap of the fits; selections no longer change below it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Selections:
    """What one penalty rule selects for each of R responses."""

    selected: BoolArray
    """Columns selected, shape (p, R)."""
    coefficients: FloatArray
    """Coefficients, shape (p, R)."""
    intercepts: FloatArray
    """Intercepts, shape (R,)."""
    penalties: FloatArray
    """Penalty at loading 1, shape (R,)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """How to fit and to choose; the same for every response."""

    rule: str
    """One of RULES."""
    loss: str
    """One of LOSSES."""
    risk: float
    """g in the level L(p)."""
    folds: NDArray[np.int64]
    """Fold of each row, shape (n,)."""
    tol: float
    """Relative duality gap."""


def select_batch(
    X: Any,
    Y: Any,
    *,
    rule: str,
    loss: str = "squared",
    errors: Any = None,
    risk: float = 0.05,
    tau: Any = None,
    adaptive: bool = False,
    folds: int = 5,
    time_ordered: bool = False,
    seed: int = 0,
    tol: float = TOLERANCE,
) -> Selections:
    """Apply a penalty rule to every response.

    Parameters
    ----------
    X : array-like, shape (n, p)
        Columns; penalties are in units of their root mean squares about the mean.
    Y : array-like, shape (n, R) or (n,)
        Responses.
    rule : str
        plug-in, self-normalised, bic, extended-bic, cross-validated or
        cross-validated-sparse.
    loss : str
        squared, square-root, huber, absolute or logistic.
    errors : array-like, shape (n, R)
        The errors in the responses, for the first two rules (logistic loss, and
        plug-in under square-root and absolute loss, do without).
    risk : float
        g of the level L(p) = 1.1 Phi^-1(1 - g/(2p)).
    tau : float or array-like, shape (R,), optional
        Threshold of Huber's loss; 1.345 robust sd of the errors (of the response
        where no errors are given) by default, as in `loss_scores`.
    adaptive : bool
        Whether a second fit follows, with loadings from least squares on the columns
        the first selects; squared loss.
    folds : int
        Folds of cross-validation, 2 to n.
    time_ordered : bool
        Whether rows are ordered in time.
    seed : int
        Of the random folds.
    tol : float
        Relative duality gap of the fits.

    Raises
    ------
    InputError
        If an argument is of another kind, or errors are needed and missing.
    """
    columns, responses = columns_and_responses(X, Y)
    (n, p), replicates = columns.shape, responses.shape[1]
    for name, value, known in (("rule", rule, RULES), ("loss", loss, LOSSES)):
        if value not in known:
            raise InputError(f"{name}: one of {', '.join(known)} is needed; found {value!r}")
    if adaptive and loss != "squared":
        raise InputError(f"adaptive: only squared loss has a second stage; found loss {loss!r}")
    noise = None if errors is None else columns_and_responses(columns, errors)[1]
    if noise is not None and noise.shape != responses.shape:
        raise InputError(f"errors: shape {responses.shape} is needed; found {noise.shape}")
    spread = responses - np.median(responses, axis=0) if noise is None else noise
    if tau is None:
        tau = np.maximum(huber_thresholds(spread), 1e-300)
    thresholds = per_response(tau, "tau", replicates)
    settings = Settings(
        rule=rule, loss=loss, risk=risk, folds=fold_of_rows(n, folds, time_ordered, seed), tol=tol
    )
    middle, scale = columns.mean(axis=0), columns.std(axis=0)[:, None]
    scale[scale == 0] = 1.0
    parts = []
    for first, last in blocks(replicates, max(BLOCK_CELLS // p, 16)):
        some = slice(first, last)
        part = columns, responses[:, some], None if noise is None else noise[:, some]
        found = _select(*part, settings, thresholds[some], scale)
        if adaptive:
            # Least squares on the first selection: the lasso's own coefficients are too small.
            first_fit = refit_batch(columns - middle, part[1] - part[1].mean(0), found.selected)
            factor = adaptive_loadings(first_fit * scale, found.penalties)
            found = _select(*part, settings, thresholds[some], scale, factor)
        parts.append(found)
    return Selections(
        selected=np.concatenate([part.selected for part in parts], axis=1),
        coefficients=np.concatenate([part.coefficients for part in parts], axis=1),
        intercepts=np.concatenate([part.intercepts for part in parts]),
        penalties=np.concatenate([part.penalties for part in parts]),
    )


def fold_of_rows(n: int, folds: int, time_ordered: bool, seed: int) -> NDArray[np.int64]:
    """Return the fold, 0..folds-1, of each row: contiguous blocks, or at random of equal size."""
    if not 2 <= folds <= n:
        raise InputError(f"folds: 2 to {n} (the rows) are needed; found {folds}")
    fold = np.arange(n) * folds // n
    return fold if time_ordered else stream(seed, "folds").permutation(fold)


def _select(
    X: FloatArray,
    Y: FloatArray,
    errors: FloatArray | None,
    settings: Settings,
    tau: FloatArray,
    scale: FloatArray,
    factor: FloatArray | None = None,
) -> Selections:
    """Apply the rule to one block of responses, loadings multiplied by `factor`."""
    loadings = scale if factor is None else scale * factor
    if settings.rule in LEVEL_RULES:
        level, loadings = _level(X, errors, Y.shape[1], settings, tau, scale)
        if factor is not None:
            loadings = loadings * factor
        walk = walk_loss(X, Y, level[None], loadings, loss=settings.loss, tau=tau, tol=settings.tol)
        B, A = next(walk)
        return Selections(selected=B != 0, coefficients=B, intercepts=A, penalties=level)
    top = np.abs(null_scores(X - X.mean(axis=0), Y, settings.loss, tau) / loadings).max(axis=0)
    steps = np.arange(GRID_POINTS)[:, None] / (GRID_POINTS - 1)
    grid = np.maximum(top, 1e-12) * GRID_RATIO**steps
    if settings.rule in ("bic", "extended-bic"):
        return _by_criterion(X, Y, grid, loadings, settings, tau)
    place = _cross_validate(X, Y, grid, loadings, settings, tau)
    return _at(X, Y, grid, place, loadings, settings, tau)


def _level(
    X: FloatArray,
    errors: FloatArray | None,
    replicates: int,
    settings: Settings,
    tau: FloatArray,
    scale: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return the penalties at loading 1, shape (R,), and the loadings, (p, 1) or (p, R)."""
    n, p = X.shape
    base = float(penalty_level(p, settings.risk)) / np.sqrt(n)
    plain = settings.loss in ("square-root", "absolute") and settings.rule == "plug-in"
    if settings.loss == "logistic" or plain:
        unit = 0.5 if settings.loss == "logistic" else 1.0
        return np.full(replicates, base * unit), scale
    if errors is None:
        raise InputError(f"errors: rule {settings.rule!r} needs the errors; found none")
    scores = error_scores(errors, settings.loss, tau)
    size = np.maximum(np.sqrt((scores**2).mean(axis=0)), 1e-300)
    if settings.rule == "plug-in":
        return base * size, scale
    squares = (X - X.mean(axis=0)) ** 2
    loadings = np.sqrt(squares.T @ (scores / size) ** 2 / n)
    return base * size, np.maximum(loadings, 1e-12 * scale)


def _by_criterion(
    X: FloatArray,
    Y: FloatArray,
    grid: FloatArray,
    loadings: FloatArray,
    settings: Settings,
    tau: FloatArray,
) -> Selections:
    """Keep, for each response, the fit with the least information criterion.

    Fits with more than half as many columns as rows are left out: there the
    likelihood of a nearly perfect fit rules the criterion.
    """
    (n, p), replicates = X.shape, Y.shape[1]
    best, since = np.full(replicates, np.inf), np.zeros(replicates)
    B, A, penalties = np.zeros((p, replicates)), Y.mean(axis=0), grid[0].copy()
    walk = walk_loss(X, Y, grid, loadings, loss=settings.loss, tau=tau, tol=settings.tol)
    for penalty, (b, a) in zip(grid, walk, strict=False):
        k = np.count_nonzero(b, axis=0)
        mean = row_losses(Y, a + X @ b, settings.loss, tau).mean(axis=0)
        value = deviance(mean, n, settings.loss) + k * np.log(n)
        if settings.rule == "extended-bic":
            value += 2.0 * (gammaln(p + 1) - gammaln(k + 1) - gammaln(p - k + 1))
        better = (value < best) & (k <= n // 2) & (since < PATIENCE)
        best[better], since[better] = value[better], 0
        B[:, better], A[better], penalties[better] = b[:, better], a[better], penalty[better]
        since[~better] += 1
        if (since >= PATIENCE).all():
            break
    return Selections(selected=B != 0, coefficients=B, intercepts=A, penalties=penalties)


def _cross_validate(
    X: FloatArray,
    Y: FloatArray,
    grid: FloatArray,
    loadings: FloatArray,
    settings: Settings,
    tau: FloatArray,
) -> NDArray[np.int64]:
    """Return the point of the grid that the rule takes for each response, shape (R,)."""
    loss = settings.loss
    names = np.unique(settings.folds)
    out = [settings.folds == name for name in names]
    walks = [
        walk_loss(X[~held], Y[~held], grid, loadings, loss=loss, tau=tau, tol=settings.tol)
        for held in out
    ]
    rows = np.array([held.sum() for held in out])[:, None]
    means, spreads = [], []
    best, since = np.full(Y.shape[1], np.inf), np.zeros(Y.shape[1])
    for fits in zip(*walks, strict=True):
        fold = np.array(
            [
                row_losses(Y[held], a + X[held] @ b, loss, tau).mean(axis=0)
                for held, (b, a) in zip(out, fits, strict=True)
            ]
        )
        mean = (rows * fold).sum(axis=0) / rows.sum()
        mean[since >= PATIENCE] = np.inf
        means.append(mean)
        spreads.append(fold.std(axis=0, ddof=1) / np.sqrt(len(names)))
        better = mean < best
        best = np.minimum(best, mean)
        since = np.where(better, 0, since + 1)
        if (since >= PATIENCE).all():
            break
    curve, spread = np.array(means), np.array(spreads)
    place = curve.argmin(axis=0)
    if settings.rule == "cross-validated-sparse":
        who = np.arange(Y.shape[1])
        place = (curve <= curve[place, who] + spread[place, who]).argmax(axis=0)
    return np.asarray(place, dtype=np.int64)


def _at(
    X: FloatArray,
    Y: FloatArray,
    grid: FloatArray,
    place: NDArray[np.int64],
    loadings: FloatArray,
    settings: Settings,
    tau: FloatArray,
) -> Selections:
    """Fit every response at its own point of the grid."""
    penalties = grid[place, np.arange(len(place))]
    walk = walk_loss(X, Y, penalties[None], loadings, loss=settings.loss, tau=tau, tol=settings.tol)
    B, A = next(walk)
    return Selections(selected=B != 0, coefficients=B, intercepts=A, penalties=penalties)
