"""Argument checks of the public functions; below them arrays are trusted."""

from __future__ import annotations

from typing import Any

import numpy as np

from scantling.core.record import FloatArray
from scantling.errors import InputError


def _numbers(values: Any, name: str) -> FloatArray:
    """`values` as float64; text, dates and complex numbers are not taken for numbers."""
    try:
        found = np.asarray(values)
        if found.dtype.kind in "SUMmc" or (
            found.dtype.kind == "O"
            and any(isinstance(v, str | bytes | complex) for v in found.flat)
        ):
            raise TypeError(f"{found.dtype} values")
        return np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError) as fault:
        raise InputError(f"{name}: numbers are needed; found {type(values).__name__}") from fault


def finite_vector(values: Any, name: str, *, minimum: int = 1) -> FloatArray:
    """Return `values` as a finite 1-D float64 array.

    Parameters
    ----------
    values : array-like, shape (n,)
        numpy or pandas input.
    name : str
        The argument's name, for the message.
    minimum : int
        Fewest values accepted.

    Raises
    ------
    InputError
        If it is not numeric, not 1-D, shorter than `minimum`, or not finite.
    """
    array = _numbers(values, name)
    if array.ndim != 1:
        raise InputError(f"{name}: one dimension is needed; found {array.ndim}")
    if array.size < minimum:
        raise InputError(f"{name}: at least {minimum} values are needed; found {array.size}")
    bad = np.flatnonzero(~np.isfinite(array))
    if bad.size:
        raise InputError(
            f"{name}: finite values are needed; value {bad[0] + 1} is {array[bad[0]]}"
            f" ({bad.size} such)"
        )
    return array


def finite_matrix(values: Any, name: str) -> FloatArray:
    """Return `values` as a finite 2-D float64 array with at least one row and column.

    Raises
    ------
    InputError
        If it is not numeric, not 2-D, empty, or not finite.
    """
    array = _numbers(values, name)
    if array.ndim != 2 or not array.size:
        raise InputError(
            f"{name}: a table of rows and columns is needed; found shape {array.shape}"
        )
    if not np.isfinite(array).all():
        row, column = np.argwhere(~np.isfinite(array))[0]
        raise InputError(
            f"{name}: finite values are needed; row {row + 1}, column {column + 1} is"
            f" {array[row, column]}"
        )
    return array


def between(value: Any, name: str, low: float, high: float, *, closed: bool = False) -> float:
    """Return `value` as a float strictly between `low` and `high` (or within, if `closed`).

    Raises
    ------
    InputError
        If it is not a number or lies outside.
    """
    try:
        number = float(value)
    except (TypeError, ValueError) as fault:
        raise InputError(f"{name}: a number is needed; found {value!r}") from fault
    inside = low <= number <= high if closed else low < number < high
    if not inside:
        raise InputError(
            f"{name}: a number between {low:g} and {high:g} is needed; found {value!r}"
        )
    return number
