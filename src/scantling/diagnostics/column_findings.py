"""What the columns say by themselves, whatever the response: several responses share it."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.battery import SeriesGroup, series_group
from scantling.diagnostics.column_sides import ColumnSides, heavier_sides
from scantling.diagnostics.column_tails import ColumnTails
from scantling.diagnostics.structure import Structure, column_structure


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnFindings:
    """Tails, moments and geometry of the columns of one response."""

    raw: SeriesGroup
    """Of the columns that do not depend on the response."""
    group: SeriesGroup
    """Of all columns."""
    structure: Structure
    """Of all columns."""


def column_findings(
    X: FloatArray, *, dependent: bool, raw: int | None = None, known: ColumnFindings | None = None
) -> ColumnFindings:
    """Diagnose the columns alone.

    Parameters
    ----------
    X : array, shape (n, P)
        Standardised columns.
    dependent : bool
        Whether rows follow one another in time.
    raw : int, optional
        The first so many do not depend on the response, the others are its lags; default: P.
    known : ColumnFindings, optional
        Of another response with the same raw columns on the same rows: only what its lags
        change is computed again.
    """
    rows, width = X.shape
    count = width if raw is None else raw
    first = series_group(X[:, :count], dependent=dependent) if known is None else known.raw
    if count == width:
        alone = known is not None and known.group is known.raw
        structure = known.structure if known is not None and alone else column_structure(X)
        return ColumnFindings(raw=first, group=first, structure=structure)
    own = series_group(X[:, count:], dependent=dependent)
    return ColumnFindings(
        raw=first,
        group=_joined(first, own, rows, dependent=dependent) if count else own,
        structure=column_structure(X),
    )


def _joined(first: SeriesGroup, then: SeriesGroup, rows: int, *, dependent: bool) -> SeriesGroup:
    """Return the group of the series of both, in order."""
    sides = None
    if first.sides is not None and then.sides is not None:
        left = _joined_tails(first.sides.left, then.sides.left)
        right = _joined_tails(first.sides.right, then.sides.right)
        # Which sides are told apart depends on how many series are asked about.
        heavier = heavier_sides(left, right, rows, dependent=dependent)
        sides = ColumnSides(left=left, right=right, heavier=heavier)
    return SeriesGroup(
        tails=_joined_tails(first.tails, then.tails),
        moments={
            order: np.concatenate([answers, then.moments[order]])
            for order, answers in first.moments.items()
        },
        sides=sides,
    )


def _joined_tails(first: ColumnTails, then: ColumnTails) -> ColumnTails:
    """Return the tails of the series of both, in order."""
    arrays = {
        field.name: read_only(
            np.concatenate([getattr(first, field.name), getattr(then, field.name)])
        )
        for field in fields(ColumnTails)
        if field.name not in ("threshold_count", "refused")
    }
    moved = tuple((first.gamma.size + place, reason) for place, reason in then.refused)
    return ColumnTails(
        **arrays, threshold_count=first.threshold_count, refused=(*first.refused, *moved)
    )
