"""One block of responses down a grid of penalties, all in step, by kept inverses.

At every penalty the gradients at the last two are continued in a straight line;
columns that come near their bound are candidates. On active columns and
candidates the optimality conditions are then met exactly, by exchanges in the
kept inverses. One pass over all columns confirms it, gives the gap and finds the
few columns that were not foreseen. The pass may be in single precision: a column
near its bound is judged by its gradient from the small products, in double.
Efron et al. (2004), Least angle regression, Annals of Statistics 32, 407-499
(between changes of the set all is linear in the penalty); Osborne et al. (2000),
A new approach to variable selection in least squares problems, IMA J. Numerical
Analysis 20, 389-403 (the homotopy).
"""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array

from scantling.core.record import FloatArray
from scantling.simulation.active_set import BoolArray
from scantling.simulation.kept_inverse import KeptInverse
from scantling.simulation.working_set import IndexArray

MARGIN = 0.01
"""Share of its bound by which a foreseen gradient may miss it and be a candidate still."""

AGAIN = 0.005
"""The same share for a candidate that is looked at again after others have entered."""

STEP = 0.8
"""Least ratio of one penalty to the one before; a larger step is taken in parts."""

EXCHANGES = 16
"""Most exchanges of columns before one check; nearly always one or two are needed."""

ONE_BY_ONE = 6
"""Exchanges after which columns enter one at a time."""

PASSES = 8
"""Most passes over all columns at one penalty; nearly always one is needed."""

MOST_CANDIDATES = 64
"""Most candidates of one response at a time."""

SPARSE_BELOW = 64
"""Mean size of the sets below which a pass is a sparse product with the Gram matrix."""

SINGLE_FROM = 1e-6
"""Least tolerance for which the passes are made in single precision."""


class SharedColumns:
    """What all blocks of responses have in common.

    Attributes
    ----------
    double, double_gram : array, shapes (n, p) and (p, p)
        X, of unit mean square, and X'X/n.
    kind : dtype
        The precision of the passes over all columns.
    gram, columns, by_column : array, shapes (p, p), (n, p) and (p, n)
        X'X/n, X and X' in the precision of the passes.
    noise : float
        A gradient that the passes find so much below its bound is below it.
    drift : float
        Error of the gradients of active columns above which an inverse is not used further.
    """

    def __init__(self, X: FloatArray, gram: FloatArray, tol: float) -> None:
        self.n, self.p = X.shape
        single = tol >= SINGLE_FROM
        self.kind = np.dtype(np.float32 if single else np.float64)
        self.noise, self.drift = (1e-6, 1e-6) if single else (1e-12, 1e-10)
        self.gram = gram.astype(self.kind, copy=False)
        self.double, self.double_gram = X, gram
        self.columns = X.astype(self.kind, copy=False)
        self.by_column = np.ascontiguousarray(self.columns.T)


class PathBlock:
    """Responses that go down their grids in step.

    All is done for responses of unit mean square, laid out by response.

    Attributes
    ----------
    unit : array, shape (R,)
        What the responses, and so the penalties, were divided by.
    responses, scores, weights : array, shapes (R, n), (R, p) and (1 or R, 1 or p)
        The first in the precision of the passes; `coarse_` is the same in that precision.
    sets : KeptInverse
        Active columns and their coefficients.
    penalty, earlier : array, shape (R,)
        The present penalties and those before.
    slopes, before : array, shape (R, p)
        The gradients there.
    gaps : array, shape (R,)
        Duality gaps over ||y||^2/(2n), at the present penalty.
    failed : array of bool, shape (R,)
        Responses given up, for good: their columns nearly depend on each other, or
        their sets are too large. They are another method's task.
    """

    def __init__(
        self,
        shared: SharedColumns,
        Y: FloatArray,
        weights: FloatArray,
        first: FloatArray,
        *,
        tol: float,
        most: int,
    ) -> None:
        """Take Y (n, R), not zero, with weights (1, 1), (1, p) or (R, p) of the first penalty.

        The columns have unit mean square. A set may grow to `most` columns.
        """
        self.shared, self.tol, self.most = shared, tol, most
        self.unit: FloatArray = np.sqrt(np.einsum("ij,ij->j", Y, Y) / shared.n)
        scaled = np.ascontiguousarray((Y / self.unit).T)
        self.responses = scaled.astype(shared.kind)
        self.scores: FloatArray = (scaled / shared.n) @ shared.double
        self.coarse_scores = self.scores.astype(shared.kind)
        self.weights = weights
        self.coarse_weights = np.clip(weights, 1e-15, 1e15).astype(shared.kind)
        self.sets = KeptInverse(shared.double_gram, len(self.scores))
        self.slopes = self.before = self.coarse_scores
        top = (np.abs(self.scores) / weights).max(axis=1)
        self.penalty: FloatArray = np.maximum(top, first / self.unit)
        self.earlier: FloatArray = 2.0 * self.penalty
        self.gaps: FloatArray = np.zeros(len(self.scores))
        self.failed: BoolArray = np.zeros(len(self.scores), dtype=np.bool_)

    def advance(self, penalty: FloatArray) -> None:
        """Go down to the next penalties, shape (R,), in parts if they are far."""
        start, end = self.penalty, penalty / self.unit
        far = float(np.log(start / end)[~self.failed].max(initial=0.0))
        parts = max(int(np.ceil(far / -np.log(STEP) - 1e-9)), 1)
        for part in range(1, parts + 1):
            way = end if part == parts else start * (end / start) ** (part / parts)
            self._step(way)

    def write(self, out: FloatArray, rows: IndexArray, units: FloatArray) -> None:
        """Put the coefficients in `rows` of `out`, shape (all responses, p), over `units`."""
        who, place = np.nonzero((self.sets.terms[:, 1] != 0) & ~self.failed[:, None])
        column = self.sets.columns[who, place]
        b = self.sets.at(self.penalty)[who, place]
        out[rows[who], column] = b * self.unit[who] / units[column]

    def _step(self, penalty: FloatArray) -> None:
        """Solve at penalties not far below the present ones."""
        rows = np.flatnonzero(~self.failed)
        if not rows.size:
            return
        who, column = self._foresee(penalty)
        lower = penalty < self.penalty
        if lower.all():
            self.before, self.earlier = self.slopes, self.penalty
            self.slopes = np.zeros_like(self.before)
        else:
            self.before = np.where(lower[:, None], self.slopes, self.before)
            self.earlier = np.where(lower, self.penalty, self.earlier)
            self.slopes = self.slopes.copy()
        self.penalty = penalty
        self._settle(rows, who, column)
        for _ in range(PASSES):
            rows = rows[~self.failed[rows]]
            if not rows.size:
                break
            who, column = self._check(rows)
            rows = rows[self._marked(who)[rows] & ~self.failed[rows]]
            if rows.size:
                changed = self._settle(rows, who, column)
                rows = rows[changed[rows]]
        self.failed[rows] = True
        self.failed |= ~(self.gaps <= self.tol)

    def _marked(self, rows: IndexArray) -> BoolArray:
        mark = np.zeros(len(self.failed), dtype=np.bool_)
        mark[rows] = True
        return mark

    def _foresee(self, penalty: FloatArray) -> tuple[IndexArray, IndexArray]:
        """Return responses and columns whose gradients come near their bound, if nothing turns."""
        rate = np.clip((penalty - self.penalty) / (self.penalty - self.earlier), 0.0, 4.0)
        ahead = self.slopes - self.before
        ahead *= rate[:, None].astype(ahead.dtype)
        ahead += self.slopes
        np.abs(ahead, out=ahead)
        self._hide_active(ahead)
        ahead[self.failed] = 0.0
        near = ahead > self._bound(penalty * (1.0 - MARGIN))
        return self._strongest(*np.divmod(np.flatnonzero(near), ahead.shape[1]), ahead)

    def _hide_active(self, table: FloatArray) -> None:
        who, place = np.nonzero(self.sets.terms[:, 1])
        table[who, self.sets.columns[who, place]] = 0.0

    def _bound(self, penalty: FloatArray, rows: IndexArray | slice = slice(None)) -> FloatArray:
        """Return penalty times weights, in the precision of the passes."""
        weights = self.coarse_weights
        if len(weights) > 1:
            weights = weights[rows]
        level = np.clip(penalty, 1e-15, 1e15).astype(weights.dtype)
        bound: FloatArray = level[:, None] * weights
        return bound

    def _settle(self, rows: IndexArray, who: IndexArray, column: IndexArray) -> BoolArray:
        """Meet the conditions on active columns and candidates; say which sets changed.

        `who` and `column` are the candidates, sorted by response.
        """
        sets = self.sets
        changed = np.zeros(len(self.failed), dtype=np.bool_)
        rows = rows[~self.failed[rows]]
        for attempt in range(EXCHANGES):
            fine = ~self.failed[who]
            who, column = who[fine], column[fine]
            at = np.searchsorted(rows, who)
            b = sets.at(self.penalty[rows], rows)
            leaves = b * sets.terms[rows, 1] < 0
            beside = sets.products(who, column)
            scores = self.scores[who, column]
            gradient = scores - np.einsum("ij,ij->i", beside, b[at])
            weights = self._weight_of(who, column)
            excess = np.abs(gradient) - self.penalty[who] * weights * (1 + 1e-9)
            enters = excess > 0
            if attempt >= ONE_BY_ONE:
                best = np.zeros(len(rows))
                np.maximum.at(best, at, excess)
                enters &= (excess == best[at]) & ~leaves.any(axis=1)[at]
            come = np.bincount(at[enters], minlength=len(rows))
            busy = leaves.any(axis=1) | (come > 0)
            if not busy.any():
                return changed
            large = np.count_nonzero(sets.terms[rows, 1], axis=1) + come > self.most
            self.failed[rows[large]] = True
            busy &= ~large
            enters &= busy[at]
            rows, leaves = rows[busy], leaves[busy]
            if not rows.size:
                return changed
            changed[rows] = True
            own = np.array([scores, np.sign(gradient) * weights])[:, enters]
            new = np.searchsorted(rows, who[enters])
            sets.exchange(rows, leaves, new, column[enters], beside[enters], own)
            self.failed |= sets.broken
            rows = rows[~self.failed[rows]]
            # Those that are well below their bound will hardly rise above it now.
            near = excess > -AGAIN * self.penalty[who] * weights
            stays = near & ~enters & self._marked(rows)[who]
            who, column = who[stays], column[stays]
        self.failed[rows] = True
        return changed

    def _weight_of(self, who: IndexArray, column: IndexArray) -> FloatArray | float:
        if self.weights.size == 1:
            return float(self.weights[0, 0])
        weights: FloatArray = self.weights[who if len(self.weights) > 1 else 0, column]
        return weights

    def _check(self, rows: IndexArray) -> tuple[IndexArray, IndexArray]:
        """Pass over all columns: fill gradients and gaps, return what is not below its bound."""
        penalty, columns = self.penalty[rows], self.sets.columns[rows]
        b = self.sets.at(penalty, rows)
        pushes = self.sets.terms[rows, 1]
        # At a minimum the penalty is below the objective at zero; else rounding has won.
        lost = ~(penalty * np.einsum("ij,ij->i", b, pushes) < 1.0)
        self.failed[rows[lost]] = True
        b[lost] = 0.0
        who, place = np.nonzero(pushes)
        slopes = self._slopes(rows, who, columns[who, place], b[who, place])
        gaps, size = self._gaps(rows, b, slopes)
        near = size > self._bound(penalty, rows) - self.shared.noise
        high, column = np.divmod(np.flatnonzero(near), near.shape[1])
        rough = gaps > self.tol
        rough[high] = False
        if self.shared.kind == np.float32 and rough.any():
            fine = self._fine_slopes(rows[rough], b[rough])
            gaps[rough], _ = self._gaps(rows[rough], b[rough], fine)
            slopes[rough] = fine
        self.gaps[rows] = gaps
        if len(rows) == len(self.failed):
            self.slopes = slopes
        else:
            self.slopes[rows] = slopes
        high, column = self._strongest(high, column, size, rows)
        return rows[high], column

    def _strongest(
        self,
        who: IndexArray,
        column: IndexArray,
        size: FloatArray,
        rows: IndexArray | slice = slice(None),
    ) -> tuple[IndexArray, IndexArray]:
        """Keep the MOST_CANDIDATES largest gradients, over weights, of each of `rows`."""
        counts = np.bincount(who, minlength=len(size))
        if counts.max(initial=0) <= MOST_CANDIDATES:
            return who, column
        weights = self._weight_of(np.arange(len(self.failed))[rows][who], column)
        strength = size[who, column] / weights
        order = np.lexsort((-strength, who))
        rank = np.arange(len(who)) - (np.cumsum(counts) - counts)[who]
        keep = np.sort(order[rank < MOST_CANDIDATES])
        return who[keep], column[keep]

    def _gaps(
        self, rows: IndexArray, b: FloatArray, slopes: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return the gaps at gradients, and the sizes of these where no column is active.

        The gap is that of `settle`, with mean(y^2) = 1.
        """
        penalty, columns = self.penalty[rows], self.sets.columns[rows]
        scores, pushes = self.sets.terms[rows].transpose(1, 0, 2)
        active = pushes != 0
        who, place = np.nonzero(active)
        inside = np.zeros_like(b)
        inside[who, place] = slopes[who, columns[who, place]]
        size = np.abs(slopes)
        size[who, columns[who, place]] = 0.0
        bound = self._bound(penalty, rows)
        if bound.shape[1] == 1:
            worst = size.max(axis=1) / bound[:, 0]
        else:
            worst = (size / bound).max(axis=1)
        wanted = penalty[:, None] * pushes
        off = np.abs(inside - wanted).max(axis=1, initial=0.0)
        self.failed[rows[off > self.shared.drift]] = True
        ratio = np.divide(inside, wanted, out=np.zeros_like(b), where=active)
        shrink = 1.0 / np.maximum(worst, ratio.max(axis=1, initial=1.0))
        rest = 1.0 - np.einsum("ij,ij->i", b, scores + inside)
        miss = np.einsum("ij,ij->i", b, wanted - shrink[:, None] * inside)
        return np.abs((1.0 - shrink) ** 2 * np.maximum(rest, 0.0) + 2.0 * miss), size

    def _fine_slopes(self, rows: IndexArray, b: FloatArray) -> FloatArray:
        """Return the gradients of `rows` in double precision."""
        table = np.zeros((len(rows), self.shared.p))
        who, place = np.nonzero(self.sets.terms[rows, 1])
        table[who, self.sets.columns[rows][who, place]] = b[who, place]
        slopes: FloatArray = self.scores[rows] - table @ self.shared.double_gram
        return slopes

    def _slopes(
        self, rows: IndexArray, who: IndexArray, column: IndexArray, b: FloatArray
    ) -> FloatArray:
        """Return the gradients of `rows` at coefficients b of `column` and rows[who]."""
        shared, b = self.shared, b.astype(self.shared.kind)
        pick = slice(None) if len(rows) == len(self.failed) else rows
        if len(who) < SPARSE_BELOW * len(rows):
            pointer = np.searchsorted(who, np.arange(len(rows) + 1))
            fitted = csr_array((b, column, pointer), (len(rows), shared.p)) @ shared.gram
            return np.asarray(np.subtract(self.coarse_scores[pick], fitted, out=fitted))
        table = np.zeros((len(rows), shared.p), dtype=shared.kind)
        table[who, column] = b
        residual = table @ shared.by_column
        np.subtract(self.responses[pick], residual, out=residual)
        residual *= shared.kind.type(1.0 / shared.n)
        return np.asarray(residual @ shared.columns)
