"""Inverses of small Gram matrices, one for each response, kept while columns come and go.

For the active columns A of one response, with signs s and weights w, the lasso at
penalty l is b = u - l v, with u = K c_A, v = K (w s) and K the inverse of G_AA:
linear in the penalty as long as A and s stay. When columns enter or leave, K, u
and v are changed by as many rank-one terms and nothing is factored again:
entering columns N add Z S^-1 Z' with Z = [K G_AN; -I], S = G_NN - G_NA K G_AN,
and leaving columns D take off K_D K_DD^-1 K_D'.
Osborne et al. (2000), A new approach to variable selection in least squares
problems, IMA J. Numerical Analysis 20, 389-403; Efron et al. (2004), Least angle
regression, Annals of Statistics 32, 407-499.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.blas import dgemm, dger
from scipy.linalg.lapack import dposv

from scantling.core.record import FloatArray
from scantling.simulation.active_set import BoolArray
from scantling.simulation.working_set import IndexArray

WORST_PIVOT = 1e6
"""Largest 1 / (1 - R^2) of an entering column on the others that is still worked with."""


class KeptInverse:
    """Active columns and their inverse Gram matrices, for the R responses of one block.

    A response has `width` places; a free one holds zeros, and any column number.

    Attributes
    ----------
    gram : array, shape (p, p)
        X'X/n with unit diagonal.
    columns : array, shape (R, width)
        Column in each place.
    terms : array, shape (R, 2, width)
        c and w s, the latter never zero where there is a column.
    lines : array, shape (R, 2, width)
        u and v: the coefficients are u - penalty * v.
    inverse : list of R arrays, shape (k, k)
        k is at most the width; places beyond k are free.
    broken : array of bool, shape (R,)
        Where columns nearly depend on each other and the inverse is not to be used.
    """

    def __init__(self, gram: FloatArray, replicates: int) -> None:
        self.gram, self.p = gram, len(gram)
        self.columns: IndexArray = np.zeros((replicates, 0), dtype=np.int64)
        self.terms: FloatArray = np.zeros((replicates, 2, 0))
        self.lines: FloatArray = np.zeros((replicates, 2, 0))
        self.inverse: list[FloatArray] = [np.zeros((0, 0)) for _ in range(replicates)]
        self.broken: BoolArray = np.zeros(replicates, dtype=np.bool_)

    def at(self, penalty: FloatArray, rows: IndexArray | slice = slice(None)) -> FloatArray:
        """Return the coefficients of `rows`, by place, at their penalties."""
        b: FloatArray = self.lines[rows, 0] - penalty[:, None] * self.lines[rows, 1]
        return b

    def products(self, who: IndexArray, column: IndexArray) -> FloatArray:
        """Return G between columns and the places of responses, shape (len(who), width)."""
        cells = column[:, None] * self.p + self.columns[who]
        found: FloatArray = self.gram.ravel().take(cells)
        return found

    def exchange(
        self,
        rows: IndexArray,
        leaves: BoolArray,
        new: IndexArray,
        column: IndexArray,
        beside: FloatArray,
        own: FloatArray,
    ) -> None:
        """Let columns out of and into the sets of `rows`.

        Parameters
        ----------
        rows : array, shape (r,)
            The responses.
        leaves : array of bool, shape (r, width)
            The places to free.
        new, column : array, shape (m,)
            Columns to enter, and the positions in `rows` where; sorted by these.
        beside : array, shape (m, width)
            Their products with the places.
        own : array, shape (2, m)
            c and w s of the entering columns.
        """
        start = np.searchsorted(new, np.arange(len(rows) + 1))
        taken = self.terms[rows, 1] != 0
        short = int((np.count_nonzero(taken, axis=1) + np.diff(start)).max()) - taken.shape[1]
        if short > 0:
            more = self._widen(short)
            beside = np.pad(beside, ((0, 0), (0, more)))
            taken, leaves = (np.pad(part, ((0, 0), (0, more))) for part in (taken, leaves))
        rank = np.arange(len(new)) - start[new]
        seat = np.argsort(taken, axis=1, kind="stable")[new, rank]
        self.columns[rows[new], seat] = column
        self.terms[rows[new], :, seat] = own.T
        who, gone = np.nonzero(leaves)
        self.terms[rows[who], :, gone] = 0.0
        beside *= ~leaves[new]
        begin = np.searchsorted(who, np.arange(len(rows) + 1)).tolist()
        leaving = np.asarray(leaves.any(axis=1))
        plain = (np.diff(start) > 0) & ~leaving
        changes = np.zeros(beside.shape)
        bounds = start.tolist()
        for i, r in enumerate(rows.tolist()):
            first, last = bounds[i], bounds[i + 1]
            come = slice(first, last)
            if leaving[i]:
                out = gone[begin[i] : begin[i + 1]]
                self._exchange_one(r, out, column[come], seat[come], beside[come], own[:, come])
            elif last == first + 1:
                self._enter_one(r, int(seat[first]), beside[first], changes[first])
            elif plain[i]:
                self._enter_few(r, column[come], seat[come], beside[come], changes[come])
        if plain.any():  # Their lines are changed together.
            at = np.flatnonzero(plain[new])
            ahead = np.einsum("icj,ij->ic", self.lines[rows[new[at]]], beside[at]) - own[:, at].T
            moves = ahead[:, :, None] * changes[at][:, None, :]
            group = np.searchsorted(new[at], np.flatnonzero(plain))
            self.lines[rows[plain]] += np.add.reduceat(moves, group, axis=0)

    def _enter_one(self, r: int, seat: int, beside: FloatArray, change: FloatArray) -> None:
        """Let one column in; fill in what its part of u and v has to be multiplied by."""
        kept = self._room(r, seat)
        size = len(kept)
        beside = beside[:size]
        z = kept @ beside
        pivot = 1.0 - float(z @ beside)
        if not pivot * WORST_PIVOT > 1.0:
            self.broken[r] = True
            return
        z[seat] = -1.0
        dger(1.0 / pivot, z, z, a=kept.T, overwrite_x=0, overwrite_y=0, overwrite_a=1)
        np.divide(z, pivot, out=change[:size])

    def _enter_few(
        self, r: int, column: IndexArray, seat: IndexArray, beside: FloatArray, change: FloatArray
    ) -> None:
        """Let several columns in, as `_enter_one`."""
        seats = seat.tolist()
        kept = self._room(r, max(seats))
        size = len(kept)
        beside = beside[:, :size]
        z = beside @ kept
        s = self.gram[column[:, None], column] - z @ beside.T
        for i, k in enumerate(seats):
            z[i, k] = -1.0
        change[:, :size] = back = self._solved(r, s, z)
        _add(kept, z, back)

    def _exchange_one(
        self,
        r: int,
        gone: IndexArray,
        column: IndexArray,
        seat: IndexArray,
        beside: FloatArray,
        own: FloatArray,
    ) -> None:
        """Free the places in `gone` of one response and let columns in; change u and v too."""
        seats = seat.tolist()
        kept = self._room(r, max(seats, default=-1))
        size = len(kept)
        lines, beside = self.lines[r, :, :size], beside[:, :size]
        left = kept[gone]
        back = self._solved(r, left[:, gone], left)
        lines -= lines[:, gone] @ back
        lines[:, gone] = 0.0
        right = -back
        if seats:
            z = beside @ kept + (beside @ left.T) @ right
            z[:, gone] = 0.0
            s = self.gram[column[:, None], column] - z @ beside.T
            for i, k in enumerate(seats):
                z[i, k] = -1.0
            back = self._solved(r, s, z)
            lines += (lines @ beside.T - own) @ back
            left, right = np.concatenate([left, z]), np.concatenate([right, back])
        _add(kept, left, right)
        kept[gone] = 0.0
        kept[:, gone] = 0.0

    def _solved(self, r: int, matrix: FloatArray, right: FloatArray) -> FloatArray:
        """Return matrix^-1 right; mark the response if the matrix is nearly singular."""
        if len(matrix) == 1:
            pivot = float(matrix[0, 0])
            if not pivot * WORST_PIVOT > 1.0:
                self.broken[r] = True
                return np.zeros_like(right)
            return right / pivot
        _, inverse, fault = dposv(matrix, np.eye(len(matrix)))
        if fault or not max(inverse.diagonal().tolist()) < WORST_PIVOT:
            self.broken[r] = True
            return np.zeros_like(right)
        product: FloatArray = inverse @ right
        return product

    def _room(self, r: int, seat: int) -> FloatArray:
        """Return the inverse of a response, made larger if it has not that place."""
        old = self.inverse[r]
        if seat < len(old):
            return old
        size = min(seat + 9 + seat // 12, self.columns.shape[1])
        fresh = np.zeros((size, size))
        fresh[: len(old), : len(old)] = old
        self.inverse[r] = fresh
        return fresh

    def _widen(self, short: int) -> int:
        """Make places; return how many."""
        more = short + 4 + self.columns.shape[1] // 16
        self.columns = np.pad(self.columns, ((0, 0), (0, more)))
        self.terms = np.pad(self.terms, ((0, 0), (0, 0), (0, more)))
        self.lines = np.pad(self.lines, ((0, 0), (0, 0), (0, more)))
        return more


def _add(kept: FloatArray, left: FloatArray, right: FloatArray) -> None:
    """Add left' right, which is symmetric, to `kept` in place."""
    # All are seen transposed, which is the order BLAS wants; otherwise they would be copied.
    dgemm(1.0, left.T, right.T, 1.0, kept.T, trans_b=1, overwrite_c=1)
