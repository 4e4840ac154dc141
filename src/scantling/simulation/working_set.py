"""Working sets of a batch of lasso problems: check, grow, solve.

A working set is the few columns one response may use at present. All are held
as one sorted list of keys, response * p + column, with a coefficient each.
The set of one response never depends on the others in its batch, so answers do
not depend on how responses are split in batches, up to rounding.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from scantling.core.record import FloatArray
from scantling.core.streams import blocks
from scantling.simulation.active_set import BoolArray, solve_together, sweep_together

IndexArray = NDArray[np.int64]

GRAM_CELLS = 8_000_000
"""Largest number of cells of the kept products X'X_W (64 MB)."""

UNION_COLUMNS = 1500
"""Most columns for which one Gram matrix is shared by several responses."""

SPARSE_SHARE = 0.15
"""Share of columns in the working sets below which a sparse product is the faster one."""

BATCH_CELLS = 500_000
"""Cells of the stacked small Gram matrices solved together (4 MB, to stay in cache)."""

PASS_CELLS = 60_000
"""Cells of one piece of a pass over all columns and responses (0.5 MB, to stay in cache)."""


class Problem:
    """One block of responses on the shared columns, with what is computed once.

    Attributes
    ----------
    X, Y : array, shapes (n, p) and (n, R)
    weights : array, shape (1, R) or (p, R)
    scale : array, shape (p,)
        Root mean square of the columns.
    power : array, shape (R,)
        Mean square of the responses.
    scores : array, shape (p, R)
        X'Y/n.
    scores_by_row : array, shape (R, p)
        Their transpose, laid out by response, where the Gram matrix is given.
    gram : array, shape (p, p), or None
        X'X/n, where it is given; the columns then have unit mean square.
    units : array, shape (p,), or None
        What the columns were divided by; the coefficients given out are divided by it too.
    """

    def __init__(
        self,
        X: FloatArray,
        Y: FloatArray,
        weights: FloatArray,
        gram: FloatArray | None = None,
        units: FloatArray | None = None,
    ) -> None:
        self.gram, self.units = gram, units
        self.X, self.Y, self.weights = X, Y, weights
        self.n, self.p = X.shape
        self.scale: FloatArray = np.sqrt(np.einsum("ij,ij->j", X, X) / self.n)
        self.power: FloatArray = np.einsum("ij,ij->j", Y, Y) / self.n
        self.scores: FloatArray = X.T @ (Y / self.n)
        self.scores_by_row = self.scores if gram is None else np.ascontiguousarray(self.scores.T)

    def weight_of(self, columns: IndexArray, rows: IndexArray) -> FloatArray:
        """Return the weights of (column, response) pairs."""
        flat: FloatArray = self.weights[columns if len(self.weights) > 1 else 0, rows]
        return flat


class WorkingSets:
    """The working sets of one block of responses."""

    def __init__(self, problem: Problem, start: FloatArray | None) -> None:
        self.problem = problem
        self.keys: IndexArray = np.zeros(0, dtype=np.int64)
        self.values: FloatArray = np.zeros(0)
        self.slopes: FloatArray = np.zeros(0)
        if start is not None:
            usable = (start.T != 0) & (problem.scale > 0) & (problem.power > 0)[:, None]
            rows, columns = np.nonzero(usable)
            self.keys = rows * problem.p + columns
            self.values = start[columns, rows]
            self.slopes = np.zeros(len(rows))
        self.parked: list[tuple[IndexArray, FloatArray, FloatArray]] = []
        self.kept: IndexArray = np.zeros(0, dtype=np.int64)
        self.products: FloatArray = np.zeros((problem.p, 0))
        if problem.gram is not None:  # All products there will ever be.
            self.kept, self.products = np.arange(problem.p), problem.gram

    def check(
        self,
        rows: IndexArray,
        slack: FloatArray,
        *,
        size: int,
        exact: bool,
        tol: float = 0.0,
        ahead: FloatArray | None = None,
    ) -> tuple[FloatArray, FloatArray, BoolArray]:
        """Return objectives and duality gaps of `rows`; let the worst violating columns in.

        At most `size` columns, or a quarter of those present, enter a set; those that
        violate by less than the slack, times the root mean squares of column and
        response, do not. With `exact` gradients come from residuals, not from kept
        products. The last item says which sets grew. Where the gap is within `tol` the
        columns whose gradient exceeds `ahead`, shaped as the weights, enter too.
        """
        problem = self.problem
        owner, column = np.divmod(self.keys, problem.p)
        place = np.zeros(len(problem.power), dtype=np.int64)
        place[rows] = np.arange(len(rows))
        floor = problem.weights if ahead is None else ahead
        few = len(self.keys) < SPARSE_SHARE * problem.p * len(rows)
        if problem.gram is not None and few and not exact:
            at, who, slope, self.slopes = self._pass_gram(rows, place[owner], column, floor)
        else:
            union = np.unique(column)
            b = np.zeros((len(union), len(rows)))
            cell = np.searchsorted(union, column), place[owner]
            b[cell] = self.values
            at, who, slope, inside = self._pass(rows, union, b, exact, floor)
            self.slopes = inside[cell]
        weight = problem.weight_of(at, rows[who])
        strength = np.abs(slope) / weight
        worst = np.ones(len(rows))
        np.maximum.at(worst, who, strength)
        objective, gap = self._gap(rows, place[owner], owner, column, 1.0 / worst)
        allowed = slack[rows[who]] * np.sqrt(problem.power[rows[who]]) * problem.scale[at]
        keys = rows[who] * problem.p + at
        enters = np.abs(slope) - weight > allowed
        if ahead is not None:
            enters |= (gap <= tol)[who]
        enters[enters] = ~np.isin(keys[enters], self.keys)
        grew = self._add(keys[enters], slope[enters], strength[enters], size)
        return objective, gap, grew[rows]

    def _gap(
        self,
        rows: IndexArray,
        place: IndexArray,
        owner: IndexArray,
        column: IndexArray,
        shrink: FloatArray,
    ) -> tuple[FloatArray, FloatArray]:
        """Return objectives and gaps of `rows`, the gaps over mean(y^2)/2.

        `shrink` is the factor s that makes the residual dual feasible. With g the
        gradient, ||y - Xb||^2/n = ||y||^2/n - b'(c + g).
        """
        problem, b, slopes = self.problem, self.values, self.slopes
        power = problem.power[rows]
        each = problem.weight_of(column, owner) * np.abs(b)

        def total(terms: FloatArray) -> FloatArray:
            return np.asarray(np.bincount(place, terms, len(rows)), dtype=np.float64)

        cost = total(each)
        rest = np.maximum(power - total(b * (problem.scores[column, owner] + slopes)), 0.0) / 2
        gap = (1.0 - shrink) ** 2 * rest + total(each - shrink[place] * b * slopes)
        return rest + cost, np.abs(gap) / (power / 2)

    def _pass_gram(
        self, rows: IndexArray, place: IndexArray, column: IndexArray, floor: FloatArray
    ) -> tuple[IndexArray, IndexArray, FloatArray, FloatArray]:
        """Do what `_pass` does, by sparse products with the whole Gram matrix.

        The last item holds the gradients at the keys.
        """
        problem = self.problem
        assert problem.gram is not None
        begin = np.searchsorted(place, np.arange(len(rows) + 1))
        inside = np.empty(len(column))
        found: list[tuple[IndexArray, IndexArray, FloatArray]] = []
        for first, last in blocks(len(rows), max(PASS_CELLS // problem.p, 1)):
            keys = slice(begin[first], begin[last])
            pointer = begin[first : last + 1] - begin[first]
            some = rows[first:last]
            b = csr_array((self.values[keys], column[keys], pointer), (len(some), problem.p))
            gradient = b @ problem.gram
            np.subtract(problem.scores_by_row[some], gradient, out=gradient)
            inside[keys] = gradient[place[keys] - first, column[keys]]
            flat = np.flatnonzero(np.abs(gradient) > floor[:, some].T)
            who, at = np.divmod(flat, problem.p)
            found.append((at, who + first, gradient.ravel()[flat]))
        at, who, slope = (np.concatenate(part) for part in zip(*found, strict=True))
        return at, who, slope, inside

    def _pass(
        self, rows: IndexArray, union: IndexArray, b: FloatArray, exact: bool, floor: FloatArray
    ) -> tuple[IndexArray, IndexArray, FloatArray, FloatArray]:
        """Go over all columns: where |gradient| exceeds the floor, and the gradient on `union`.

        Returns column, position in `rows` and gradient of the excesses, and the
        gradient on the union, shape (len(union), len(rows)).
        """
        problem = self.problem
        everything = len(rows) == len(problem.power)
        pick: slice | IndexArray = slice(None) if everything else rows
        weights = floor[:, pick]
        residual: FloatArray | None = None
        fitted: FloatArray | None = None
        inside = np.zeros((0, len(rows)))
        if len(union):
            if not exact and self._keep(union, len(rows)):
                fitted = self.products[:, np.searchsorted(self.kept, union)] @ b
                inside = problem.scores[np.ix_(union, rows)] - fitted[union]
            else:
                residual = problem.Y[:, pick] - problem.X[:, union] @ b
                inside = problem.X[:, union].T @ residual / problem.n
        found: list[tuple[IndexArray, IndexArray, FloatArray]] = []
        for first, last in blocks(problem.p, max(PASS_CELLS // len(rows), 1)):
            if residual is not None:
                gradient = problem.X[:, first:last].T @ residual
                gradient /= problem.n
            elif fitted is not None:
                gradient = problem.scores[first:last, pick] - fitted[first:last]
            else:
                gradient = problem.scores[first:last, pick]
            above = np.abs(gradient) > (weights if len(weights) == 1 else weights[first:last])
            flat = np.flatnonzero(above)
            at, who = np.divmod(flat, len(rows))
            found.append((at + first, who, gradient[at, who]))
        at, who, slope = (np.concatenate(part) for part in zip(*found, strict=True))
        return at, who, slope, inside

    def _keep(self, union: IndexArray, replicates: int) -> bool:
        """Make X'X_W/n available for the union if that is cheaper than residuals and fits."""
        problem = self.problem
        if problem.gram is not None:
            return True
        fresh = np.setdiff1d(union, self.kept, assume_unique=True)
        total = len(self.kept) + len(fresh)
        cost = len(fresh) * problem.n + len(union) * replicates
        if cost > problem.n * replicates or total * problem.p > GRAM_CELLS:
            return False
        if len(fresh):
            new = problem.X.T @ (problem.X[:, fresh] / problem.n)
            order = np.argsort(np.concatenate([self.kept, fresh]), kind="stable")
            self.kept = np.concatenate([self.kept, fresh])[order]
            self.products = np.concatenate([self.products, new], axis=1)[:, order]
        return True

    def _add(
        self, keys: IndexArray, slopes: FloatArray, strength: FloatArray, size: int
    ) -> BoolArray:
        """Put the strongest keys of each response in its set; say which responses grew."""
        replicates = len(self.problem.power)
        owner = keys // self.problem.p
        present = np.bincount(self.keys // self.problem.p, minlength=replicates)
        room = np.maximum(present // 4, size)
        counts = np.bincount(owner, minlength=replicates)
        if (counts > room).any():
            order = np.lexsort((keys, -strength, owner))
            begin = np.cumsum(counts) - counts
            rank = np.arange(len(keys)) - begin[owner[order]]
            order = order[rank < room[owner[order]]]
            keys, slopes = keys[order], slopes[order]
        together = np.concatenate([self.keys, keys])
        order = np.argsort(together, kind="stable")
        self.keys = together[order]
        self.values = np.concatenate([self.values, np.zeros(len(keys))])[order]
        self.slopes = np.concatenate([self.slopes, slopes])[order]
        return counts > 0

    def release(self, rows: IndexArray, coefficients: FloatArray) -> None:
        """Write the coefficients of finished responses and put their sets aside."""
        finished = np.zeros(len(self.problem.power), dtype=np.bool_)
        finished[rows] = True
        owner, column = np.divmod(self.keys, self.problem.p)
        out = finished[owner]
        unit = 1.0 if self.problem.units is None else self.problem.units[column[out]]
        coefficients[column[out], owner[out]] = self.values[out] / unit
        self.parked.append((self.keys[out], self.values[out], self.slopes[out]))
        self._retain(~out)

    def resume(self, weights: FloatArray) -> None:
        """Take up every set again, with the weights of the next penalty."""
        self.problem.weights = weights
        if not self.parked:
            return
        keys, self.values, self.slopes = (
            np.concatenate(part) for part in zip(*self.parked, strict=True)
        )
        order = np.argsort(keys, kind="stable")
        self.keys, self.values, self.slopes = keys[order], self.values[order], self.slopes[order]
        self.parked = []

    def solve(self, rows: IndexArray, slack: FloatArray, *, rescue: BoolArray) -> None:
        """Solve every response of `rows` on its set; columns that end at zero leave it.

        `rescue` marks responses that get coordinate descent first.
        """
        owner, column = np.divmod(self.keys, self.problem.p)
        first = np.searchsorted(owner, rows)
        count = np.searchsorted(owner, rows, side="right") - first
        busy = count > 0
        self._solve_part(rows[busy], first[busy], count[busy], column, slack, rescue)
        self._retain(self.values != 0)

    def _retain(self, stays: BoolArray) -> None:
        self.keys, self.values = self.keys[stays], self.values[stays]
        self.slopes = self.slopes[stays]

    def _solve_part(
        self,
        rows: IndexArray,
        first: IndexArray,
        count: IndexArray,
        column: IndexArray,
        slack: FloatArray,
        rescue: BoolArray,
    ) -> None:
        """Solve `rows`, in halves if together they use too many columns for one Gram matrix."""
        if not rows.size:
            return
        slots = _ranges(first, count)
        union = self.kept if self.problem.gram is not None else np.unique(column[slots])
        if len(union) > UNION_COLUMNS and len(rows) > 1 and self.problem.gram is None:
            for half in (slice(None, len(rows) // 2), slice(len(rows) // 2, None)):
                self._solve_part(rows[half], first[half], count[half], column, slack, rescue)
            return
        gram = self._gram(union, len(rows))
        width = -(-count // 4) * 4
        width[count > 32] = -(-count[count > 32] // 16) * 16
        for k in np.unique(width):
            group = np.flatnonzero(width == k)
            for begin, end in blocks(len(group), max(BATCH_CELLS // int(k) ** 2, 1)):
                some = group[begin:end]
                self._solve_stack(
                    gram, union, column, rows[some], first[some], count[some], int(k), slack, rescue
                )

    def _gram(self, union: IndexArray, replicates: int) -> FloatArray:
        """Return the Gram matrix of the columns in `union`, scaled to unit diagonal."""
        problem = self.problem
        if problem.gram is not None:
            return problem.gram
        if self._keep(union, replicates):
            gram = self.products[np.ix_(union, np.searchsorted(self.kept, union))]
        else:
            chosen = problem.X[:, union]
            gram = chosen.T @ chosen / problem.n
        scale = problem.scale[union]
        gram /= scale[:, None]
        gram /= scale
        return gram

    def _solve_stack(
        self,
        gram: FloatArray,
        union: IndexArray,
        column: IndexArray,
        rows: IndexArray,
        first: IndexArray,
        count: IndexArray,
        k: int,
        slack: FloatArray,
        rescue: BoolArray,
    ) -> None:
        """Solve responses whose sets have at most k columns, padded to k."""
        problem = self.problem
        offset = np.arange(k)
        real = offset < count[:, None]
        slot = np.where(real, first[:, None] + offset, first[:, None])
        columns = column[slot]
        local = np.searchsorted(union, columns)
        stack = gram.ravel().take(local[:, :, None] * len(gram) + local[:, None, :])
        if not real.all():
            stack *= real[:, :, None] & real[:, None, :]
        stack[:, offset, offset] = 1.0
        scale = problem.scale[columns]
        slopes = np.where(real, self.slopes[slot] / scale, 0.0)
        weights = np.where(real, problem.weight_of(columns, rows[:, None]) / scale, 1.0)
        start = np.where(real, self.values[slot] * scale, 0.0)
        ease = 0.5 * slack[rows] * np.sqrt(problem.power[rows])
        late = rescue[rows]
        if late.any():
            start[late], slopes[late] = sweep_together(
                stack[late], slopes[late], weights[late], start[late], 50
            )
        solved, _ = solve_together(stack, slopes, weights, start, ease)
        self.values[slot[real]] = (solved / scale)[real]


def _ranges(first: IndexArray, count: IndexArray) -> IndexArray:
    """Return first_i, ..., first_i + count_i - 1 for every i, one after another."""
    ends = np.cumsum(count)
    return np.arange(ends[-1]) + np.repeat(first - (ends - count), count)
