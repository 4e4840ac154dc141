"""What powers of a column leave of a score's tail index, and how high a power may go."""

from __future__ import annotations

import math
import operator
from dataclasses import dataclass
from typing import Any

from scantling.core.checks import between
from scantling.errors import InputError

STRICT = 1e-12
"""Relative excess of the index over the order below which they count as equal: a moment of the
order of the index does not exist, and rounding must not make it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PowerRule:
    """Up to which power a column's score keeps its moments, by the rule for planning."""

    column_index: float
    """Tail index of the median first-power column; may be inf."""
    error_index: float
    """Tail index of the errors; may be inf."""
    shared_volatility: bool
    """Whether columns and errors are large together."""
    keeping_variance: int
    """Highest power, up to 6, whose score has a variance; 0: none."""
    keeping_fourth: int
    """Highest power whose score has a fourth moment; 0: none."""


def power_rule(column_index: float, error_index: float, *, shared_volatility: bool) -> PowerRule:
    """The rule at orders 2 and 4; arguments as of `highest_power`."""
    variance, fourth = (
        highest_power(column_index, error_index, order, shared_volatility=shared_volatility)
        for order in (2.0, 4.0)
    )
    return PowerRule(
        column_index=column_index,
        error_index=error_index,
        shared_volatility=shared_volatility,
        keeping_variance=variance,
        keeping_fourth=fourth,
    )


def power_score_index(
    column_index: float, error_index: float, power: int, *, shared_volatility: bool
) -> float:
    """Tail index of the score x^power * e, by the rule for planning.

    |x|^m has index a_x/m (exact). Independent of e, the product has the smaller of the two
    indices: Breiman (1965), Theory of Probability and its Applications 10; Cline (1986),
    Probability Theory and Related Fields 72. Where volatility is shared, column and error are
    large together and, at worst, the reciprocals add: Jessen et al. (2006), Publications de
    l'Institut Mathematique 80.

    Parameters
    ----------
    column_index, error_index : float
        Tail indices of x and of e, above 0; inf: thin tails, or bounded.
    power : int
        m, 1 or more.
    shared_volatility : bool
        Whether the volatilities of column and error move together.

    Returns
    -------
    float
        inf where both are thin.

    Raises
    ------
    InputError
        If an index is not above 0, or the power not a whole number above 0.
    """
    column = _index(column_index, "column_index")
    error = _index(error_index, "error_index")
    raised = column / _whole(power, "power")
    if not shared_volatility:
        return min(raised, error)
    if math.isinf(raised) or math.isinf(error):
        return min(raised, error)
    low, high = sorted((raised, error))
    return low / (1 + low / high)  # 1/(1/low + 1/high), without overflow


def highest_power(
    column_index: float,
    error_index: float,
    order: float,
    *,
    shared_volatility: bool,
    most: int = 6,
) -> int:
    """Highest power, up to `most`, of which the score still has a moment of `order`.

    The moment exists where the index lies above the order; an index that equals it is not
    enough. 0: not even the column itself keeps it.

    Parameters
    ----------
    column_index, error_index : float
        Tail indices of x and of e, above 0; may be inf.
    order : float
        Order of the moment, above 0.
    shared_volatility : bool
        Whether the volatilities of column and error move together.
    most : int
        Highest power looked at.

    Raises
    ------
    InputError
        As `power_score_index`; also if `order` is not above 0 or `most` is below 1.
    """
    between(order, "order", 0, math.inf)
    highest = 0
    for power in range(1, _whole(most, "most") + 1):
        index = power_score_index(
            column_index, error_index, power, shared_volatility=shared_volatility
        )
        if not index > order * (1 + STRICT):
            break
        highest = power
    return highest


def _index(value: Any, name: str) -> float:
    """A tail index: above 0, possibly infinite."""
    try:
        number = float(value)
    except (TypeError, ValueError) as fault:
        raise InputError(f"{name}: a number above 0 is needed; found {value!r}") from fault
    if not number > 0:
        raise InputError(f"{name}: a number above 0 is needed; found {value!r}")
    return number


def _whole(value: Any, name: str) -> int:
    """A whole number, 1 or more."""
    try:
        number = operator.index(value)
    except TypeError as fault:
        raise InputError(f"{name}: a whole number is needed; found {value!r}") from fault
    if number < 1:
        raise InputError(f"{name}: 1 or more is needed; found {number}")
    return number
