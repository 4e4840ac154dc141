"""Arguments that every solver of many responses takes: columns, responses, penalties."""

from __future__ import annotations

from typing import Any

import numpy as np

from scantling.core.checks import finite_matrix, finite_vector
from scantling.core.record import FloatArray
from scantling.errors import InputError


class NotConvergedError(InputError):
    """The duality gap asked for was not reached.

    Attributes
    ----------
    gap : float
        The largest gap attained, relative, as the solver's `tol` is.
    response : int
        The response (0-based) that has it.
    """

    def __init__(self, message: str, *, gap: float, response: int) -> None:
        super().__init__(message)
        self.gap = gap
        self.response = response


def as_table(values: Any) -> Any:
    """Return a 1-D input as one column."""
    array = np.asarray(values)
    return array[:, None] if array.ndim == 1 else array


def columns_and_responses(X: Any, Y: Any) -> tuple[FloatArray, FloatArray]:
    """Return X, shape (n, p), and Y, shape (n, R), checked and with equal rows."""
    columns, responses = finite_matrix(X, "X"), finite_matrix(as_table(Y), "Y")
    if len(responses) != len(columns):
        raise InputError(
            f"Y: as many rows as X are needed ({len(columns)}); found {len(responses)}"
        )
    squarable(columns, "X")
    squarable(responses, "Y")
    return columns, responses


def squarable(values: FloatArray, name: str) -> None:
    """Refuse values whose squares, or the products of two of them, leave the range of a float."""
    largest = float(max(values.max(), -values.min()))
    if largest != 0 and not 1e-100 < largest < 1e100:
        raise InputError(
            f"{name}: magnitudes between 1e-100 and 1e100 are needed; the largest is {largest:.3g}"
        )


def per_response(values: Any, name: str, replicates: int) -> FloatArray:
    """Return one positive number for each response, shape (R,), from one or R of them."""
    array = finite_vector(np.atleast_1d(np.asarray(values)), name)
    if array.size not in (1, replicates):
        raise InputError(
            f"{name}: one number or {replicates} of them (one per response) are needed;"
            f" found {array.size}"
        )
    if not (array > 0).all():
        raise InputError(f"{name}: positive numbers are needed; found {array[~(array > 0)][0]}")
    return np.broadcast_to(array, (replicates,))


def penalty_table(penalty: Any, columns: int, replicates: int) -> FloatArray:
    """Return positive penalties of shape (1, R) or (p, R) from a number, (R,) or (p, R).

    Raises
    ------
    InputError
        If they are not positive and finite, or of another shape.
    """
    if np.ndim(penalty) < 2:
        return per_response(penalty, "penalty", replicates)[None, :]
    table = finite_matrix(penalty, "penalty")
    if table.shape != (columns, replicates):
        raise InputError(
            f"penalty: one number, {replicates} of them or a table of {columns} by {replicates}"
            f" (columns by responses) is needed; found shape {table.shape}"
        )
    if not (table > 0).all():
        raise InputError(f"penalty: positive numbers are needed; found {table[~(table > 0)][0]}")
    return table


def refuse_gap(gaps: FloatArray, tol: float) -> None:
    """Raise NotConvergedError if a gap is above `tol`."""
    worst = int(np.argmax(gaps))
    if not gaps[worst] <= tol:
        raise NotConvergedError(
            f"penalty: response {worst + 1} reached a duality gap of {gaps[worst]:.3g};"
            f" {tol:.3g} is asked for; a larger penalty or tol is needed",
            gap=float(gaps[worst]),
            response=worst,
        )
