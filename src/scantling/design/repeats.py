"""Candidates that repeat one another: the same column up to sign and scale."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.core.streams import stream

_SAME = 1e-9


def repeated_rows(stack: FloatArray, ignored: NDArray[np.bool_]) -> dict[int, int]:
    """Return, for each row of `stack` (P, n) that equals an earlier one up to sign, that one.

    Rows are compared in full only where their absolute projections on one
    random direction agree, which takes O(n P) and cannot part equal rows, as
    rounding each value before a comparison would.
    """
    direction = stream(0, "repeated-rows").standard_normal(stack.shape[1])
    projected = np.abs(stack @ direction)
    order = [int(place) for place in np.argsort(projected, kind="stable") if not ignored[place]]
    tolerance = _SAME * stack.shape[1]
    found: dict[int, int] = {}
    start = 0
    for stop in range(1, len(order) + 1):
        if stop < len(order) and projected[order[stop]] - projected[order[stop - 1]] <= tolerance:
            continue
        firsts: list[int] = []
        for place in sorted(order[start:stop]):
            match = next((first for first in firsts if _same(stack[first], stack[place])), None)
            if match is None:
                firsts.append(place)
            else:
                found[place] = match
        start = stop
    return found


def _same(one: FloatArray, two: FloatArray) -> bool:
    sign = 1.0 if float(one @ two) > 0 else -1.0
    return bool(np.abs(one - sign * two).max() <= _SAME)
