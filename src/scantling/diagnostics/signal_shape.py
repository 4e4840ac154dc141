"""Is the signal sparse or dense? Out-of-fold predictions of a sparse and two dense fits compared.

A sparse fit is no answer to a dense signal; before columns are budgeted for one it is asked
whether ridge or a few principal components predict better.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import eigh

from scantling.core.checks import finite_matrix, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.tail_estimators import block_standard_error
from scantling.diagnostics.tail_index import LARGEST, MINIMUM, SMALLEST, block_length
from scantling.errors import InputError

FOLDS = 5
MOST_COMPONENTS = 8
PENALTIES = np.logspace(-2, 2, 9)
"""Ridge penalties, in units of max(n, P): the mean eigenvalue of X'X that is not zero."""
ERRORS_APART = 2.0
"""Standard errors that a difference must exceed (common practice, no source)."""
ANSWERS = ("sparse", "dense", "undecided", "no signal")


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalShape:
    """Evidence on a sparse against a dense signal."""

    answer: str
    """sparse | dense | undecided | no signal."""
    reason: str
    """One sentence with the numbers."""
    sparse_explained: float
    """Share of the response's variance that the sparse pilot explains out of fold; negative
    where it predicts worse than the mean."""
    ridge_explained: float
    """The same for ridge regression."""
    factor_explained: float
    """The same for regression on principal components."""
    components: int
    """Principal components used, the median over folds."""
    best_dense: str
    """ridge | factors: the dense fit with the smaller squared error."""
    difference: float
    """Mean squared error of the best dense fit minus that of the sparse one, as a share of the
    response's variance; positive speaks for sparse."""
    error: float
    """Standard error of the difference."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """Paired comparison of two sets of prediction errors."""

    gain: float
    """Mean square of the first minus that of the second."""
    error: float
    """Standard error of the gain, allowing for serial dependence."""
    clear: int
    """1 if the second is clearly better, -1 if the first is, else 0."""


def signal_shape(
    X: Any, y: Any, *, sparse_fitted: Any, time_ordered: bool, seed: int
) -> SignalShape:
    """Compare a sparse fit with ridge and principal-component regression, out of fold.

    Parameters
    ----------
    X : array-like, shape (n, P)
        Standardised columns.
    y : array-like, shape (n,), n >= 30
        Response.
    sparse_fitted : array-like, shape (n,)
        Out-of-fold predictions of the sparse pilot.
    time_ordered : bool
        Folds are then contiguous, and standard errors allow for dependence over ceil(n^0.6)
        rows.
    seed : int
        Of the random folds.

    Raises
    ------
    InputError
        If an argument is not finite, shapes do not agree, or the response is constant or of a
        size whose squares overflow or vanish.

    Notes
    -----
    The answer is about prediction from n rows: a sparse signal too weak to be found by selection
    may still be 'dense' here. A fit is clearly better than another if its mean squared error is
    smaller by more than two standard errors and its mean absolute error, about its median, is
    smaller too: under heavy tails a few rows can carry the squares. 'no signal': no fit is
    clearly better than the mean.
    'dense': ridge or factors are, and clearly better than the sparse fit. 'sparse': the sparse
    fit is, and clearly better than both. Ridge: penalty by leave-one-out inside the training
    rows, Golub et al. (1979), Technometrics 21. Components: up to 8, by the criterion of
    Schwarz (1978), Annals of Statistics 6, there. Sparse and dense predictions contrasted:
    Giannone et al. (2021), Econometrica 89.
    """
    columns, response, sparse = _checked(X, y, sparse_fitted)
    scale = float(response.std())
    centred = (response - response.mean()) / scale
    labels = _fold_labels(response.size, time_ordered=time_ordered, seed=seed)
    ridge, factors, components = _dense_predictions(columns, centred, labels)
    block = block_length(response.size) if time_ordered else 1
    residuals = {
        "sparse": (response - sparse) / scale,
        "ridge": centred - ridge,
        "factors": centred - factors,
    }
    useful = {name: compare(centred, left, block) for name, left in residuals.items()}
    against = {
        name: compare(residuals[name], residuals["sparse"], block) for name in ("ridge", "factors")
    }
    best = min(against, key=lambda name: against[name].gain)
    answer = _answer(useful, against)
    return SignalShape(
        answer=answer,
        reason=_reason(answer, useful, components, against[best], best),
        sparse_explained=useful["sparse"].gain,
        ridge_explained=useful["ridge"].gain,
        factor_explained=useful["factors"].gain,
        components=components,
        best_dense=best,
        difference=against[best].gain,
        error=against[best].error,
    )


def compare(first: FloatArray, second: FloatArray, block: int) -> Comparison:
    """Compare prediction errors of the same rows, both of shape (n,), in time order.

    Differences of squares decide; differences of absolute values about the median must agree
    in sign. Standard error: that of the circular block bootstrap in closed form, freed of what
    centring takes.
    """
    squares = first**2 - second**2
    sizes = np.abs(first - np.median(first)) - np.abs(second - np.median(second))
    gain, n = float(squares.mean()), first.size
    spread = float(block_standard_error((squares - gain)[:, None], block)[0])
    error = spread / float(np.sqrt(1 - block / n))
    clear = abs(gain) > ERRORS_APART * error and gain * float(sizes.mean()) > 0
    return Comparison(gain=gain, error=error, clear=int(np.sign(gain)) if clear else 0)


def ridge_predictions(X: FloatArray, y: FloatArray, new: FloatArray) -> FloatArray:
    """Ridge fitted on X, y, penalty by leave-one-out, and its predictions at `new`.

    Of the two eigenproblems scikit-learn takes the smaller, rows or columns.
    """
    from sklearn.linear_model import RidgeCV

    fitted = RidgeCV(alphas=PENALTIES * max(X.shape)).fit(X, y)
    return np.asarray(fitted.predict(new))


def factor_predictions(X: FloatArray, y: FloatArray, new: FloatArray) -> tuple[FloatArray, int]:
    """Regression on the first principal components; predictions at `new`, and their number.

    1 to 8 components, the number minimising n ln(RSS/n) + k ln n on X, y. None, and the mean,
    where the columns do not vary.
    """
    n = X.shape[0]
    mean, level = X.mean(axis=0), y.mean()
    loadings = principal_axes(X - mean, min(MOST_COMPONENTS, n // 4))
    if not loadings.shape[1]:
        return np.full(new.shape[0], level), 0
    scores = (X - mean) @ loadings
    power = (scores**2).sum(axis=0)
    slopes = (scores.T @ (y - level)) / power
    total = float(((y - level) ** 2).sum())
    # Principal components are orthogonal, so each takes its own part of the total.
    left = np.maximum(total - np.cumsum(slopes**2 * power), 1e-12 * max(total, 1e-300))
    count = int((n * np.log(left / n) + np.arange(1, left.size + 1) * np.log(n)).argmin()) + 1
    return level + (new - mean) @ loadings[:, :count] @ slopes[:count], count


def principal_axes(centred: FloatArray, count: int) -> FloatArray:
    """First `count` right singular vectors, shape (P, at most count), largest first.

    From the smaller of the two Gram matrices; directions without variance are left out.
    """
    n, width = centred.shape
    small = min(n, width)
    gram = centred @ centred.T if n < width else centred.T @ centred
    first = max(0, small - count)
    values, vectors = eigh(gram, subset_by_index=(first, small - 1))
    kept = values > 1e-10 * max(float(values[-1]), 1e-300)
    values, vectors = values[kept][::-1], vectors[:, kept][:, ::-1]
    return np.asarray(centred.T @ vectors / np.sqrt(values) if n < width else vectors)


def _dense_predictions(
    X: FloatArray, y: FloatArray, labels: np.ndarray
) -> tuple[FloatArray, FloatArray, int]:
    """Out-of-fold predictions of ridge and of factors; median number of components."""
    ridge, factors = np.empty_like(y), np.empty_like(y)
    counts = []
    for fold in range(FOLDS):
        out = labels == fold
        training, held = X[~out], X[out]
        ridge[out] = ridge_predictions(training, y[~out], held)
        factors[out], count = factor_predictions(training, y[~out], held)
        counts.append(count)
    return ridge, factors, int(np.median(counts))


def _answer(useful: dict[str, Comparison], against: dict[str, Comparison]) -> str:
    """What the comparisons with the mean and with the sparse fit add up to."""
    if not any(found.clear > 0 for found in useful.values()):
        return "no signal"
    if any(useful[name].clear > 0 and found.clear < 0 for name, found in against.items()):
        return "dense"
    if useful["sparse"].clear > 0 and all(found.clear > 0 for found in against.values()):
        return "sparse"
    return "undecided"


def _share(value: float) -> str:
    """A share in per cent, never minus zero."""
    return f"{round(100 * value, 1) + 0.0:.1f} %"


def _reason(
    answer: str, useful: dict[str, Comparison], components: int, apart: Comparison, best: str
) -> str:
    """The numbers in one sentence."""
    plural = "" if components == 1 else "s"
    shares = (
        f"out of fold the sparse fit explains {_share(useful['sparse'].gain)}, ridge"
        f" {_share(useful['ridge'].gain)} and {components} principal component{plural}"
        f" {_share(useful['factors'].gain)} of the variance"
    )
    if answer == "no signal":
        most = max(useful.values(), key=lambda found: found.gain)
        return f"{shares}, none clearly above 0 (standard error {_share(most.error)})"
    dense = {"ridge": "ridge", "factors": "components"}[best]
    return (
        f"{shares}; sparse minus {dense} is {_share(apart.gain)} with standard error"
        f" {_share(apart.error)}"
    )


def _fold_labels(n: int, *, time_ordered: bool, seed: int) -> np.ndarray:
    """Fold of each row: contiguous stretches in time order, else at random."""
    labels = np.arange(n) * FOLDS // n
    return labels if time_ordered else stream(seed, "signal folds").permutation(labels)


def _checked(X: Any, y: Any, sparse_fitted: Any) -> tuple[FloatArray, FloatArray, FloatArray]:
    """The three arrays, of shapes that agree, the response neither constant nor out of size."""
    columns = finite_matrix(X, "X")
    response = finite_vector(y, "y", minimum=MINIMUM)
    sparse = finite_vector(sparse_fitted, "sparse_fitted")
    for name, size in (("X", columns.shape[0]), ("sparse_fitted", sparse.size)):
        if size != response.size:
            raise InputError(f"{name}: {response.size} rows are needed, as in y; found {size}")
    top = float(np.abs(response).max())
    if np.ptp(response / (top or 1.0)) == 0:
        raise InputError("y: constant, so there is nothing to explain")
    if not SMALLEST <= top <= LARGEST:
        raise InputError(
            f"y: a largest size between {SMALLEST:g} and {LARGEST:g} is needed; found {top:g}"
        )
    return columns, response, sparse
