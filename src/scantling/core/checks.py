"""Argument checks of the public functions; below them arrays are trusted."""

from __future__ import annotations

import math
from typing import Any, Literal

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


def between(
    value: Any, name: str, low: float, high: float, *,
    closed: bool | Literal["low", "high"] = False,
) -> float:  # fmt: skip
    """Return `value` as a float between `low` and `high`; the ends count where `closed`.

    `closed` is True for both ends, 'low' or 'high' for one of them.

    Raises
    ------
    InputError
        If it is not a number or lies outside.
    """
    try:
        number = float(value)
    except (TypeError, ValueError) as fault:
        raise InputError(f"{name}: a number is needed; found {value!r}") from fault
    above = low <= number if closed in (True, "low") else low < number
    below = number <= high if closed in (True, "high") else number < high
    if not (above and below):
        raise InputError(f"{name}: a number {_range(low, high, closed)} is needed; found {value!r}")
    return number


def _range(low: float, high: float, closed: bool | str) -> str:
    """The accepted numbers in words, an open end told from a closed one."""
    if closed is True:
        return f"from {low:g} to {high:g}"
    lower = f"of at least {low:g}" if closed == "low" else f"above {low:g}"
    if math.isinf(high):
        return lower
    return f"{lower} and {'at most' if closed == 'high' else 'below'} {high:g}"
