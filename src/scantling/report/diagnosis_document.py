"""The diagnosis in JSON: tails, moments, tests, co-movement, geometry. Nothing is computed here."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from scantling.core.record import FloatArray
from scantling.diagnostics.battery import SeriesGroup
from scantling.diagnostics.co_movement import CoMovement
from scantling.diagnostics.column_tails import ColumnTails
from scantling.diagnostics.error_findings import Finding, Worth
from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.second_opinion import Opinion
from scantling.diagnostics.tail_index import TailIndex, index_ends, index_from_gamma
from scantling.report.values import ABOVE, UNBOUNDED, noted, number

if TYPE_CHECKING:
    from scantling.report.record import Diagnosed


def diagnosis_part(report: Diagnosed) -> dict[str, Any]:
    """What the data say."""
    found = report.diagnosis
    names = report.read.names
    errors = tail_part(found.errors) if found.errors else unknown_tail(found.errors_note)
    structure = found.structure
    return {
        "errors": {
            "tail": errors,
            "moments": {str(m.order): m.answer for m in found.error_moments},
            "moment_reasons": {str(m.order): m.reason for m in found.error_moments},
            "sides": [tail_part(side) for side in found.sides],
            "opinions": [opinion_part(opinion) for opinion in found.opinions],
            **worth_part(found.worth),
        },
        "columns": _group(found.columns, names, found.weight),
        "scores": _group(found.scores, names, None),
        **_column_levels(found.column_levels),
        "variance": [finding_part(f) for f in found.variance],
        "dependence": [finding_part(f) for f in found.dependence],
        "structure": {
            "factors": structure.factors,
            **noted("condition", structure.condition, structure.condition_note or ""),
            "effective_rank": number(structure.effective_rank),
            "leading_share": number(structure.leading_share),
            "largest_correlation": number(structure.largest_correlation),
        },
        "signal": {
            "answer": found.signal.answer,
            "reason": found.signal.reason,
            "sparse_explained": number(found.signal.sparse_explained),
            "ridge_explained": number(found.signal.ridge_explained),
            "factor_explained": number(found.signal.factor_explained),
        },
        **(
            {"powers": None, "powers_note": "a tail index is unknown"}
            if found.powers is None
            else {
                "powers": {
                    "keeping_variance": found.powers.keeping_variance,
                    "keeping_fourth": found.powers.keeping_fourth,
                    "shared_volatility": found.powers.shared_volatility,
                }
            }
        ),
        "co_movement": _co_movement(found.co_movement, names),
    }


def _column_levels(levels: FloatArray | None) -> dict[str, Any]:
    """First autocorrelation of every column, in their order."""
    if levels is None:
        return {"column_autocorrelations": None, "column_autocorrelations_note": "no order"}
    return {"column_autocorrelations": [number(float(value)) for value in levels]}


def tail_part(tail: TailIndex) -> dict[str, Any]:
    """One tail index."""
    return {
        **noted("index", tail.index, ABOVE),
        **noted("low", tail.low, ABOVE),
        **noted("high", tail.high, UNBOUNDED),
        "finite": tail.finite,
        "threshold_count": tail.threshold_count,
        "side": tail.side,
        "p_value": number(tail.p_value),
        **({"note": tail.note} if tail.note else {}),
    }


def unknown_tail(note: str) -> dict[str, Any]:
    """The keys of a tail index that could not be assessed, and why."""
    return {
        "index": None, "index_note": note, "low": None, "low_note": note, "high": None,
        "high_note": note, "finite": None, "finite_note": note, "threshold_count": None,
        "threshold_count_note": note, "side": "both",
    }  # fmt: skip


def opinion_part(opinion: Opinion) -> dict[str, Any]:
    """The tail index by another estimator."""
    return {
        "estimator": opinion.estimator,
        **noted("index", opinion.index, ABOVE),
        **noted("low", opinion.low, ABOVE),
        **noted("high", opinion.high, UNBOUNDED),
        "agrees": opinion.agrees,
    }


def worth_part(worth: Worth | None) -> dict[str, Any]:
    """Clustering of extremes and effective rows; no keys where there are none."""
    if worth is None:
        return {}
    seen = worth.extremes
    ties = "ties leave too few of the largest values"
    return {
        **noted("extremal_index", None if seen is None else seen.index, ties),
        **noted("extremal_index_low", None if seen is None else seen.low, ties),
        **noted("extremal_index_high", None if seen is None else seen.high, ties),
        "effective_rows": number(worth.rows),
        "tail_effective_rows": number(worth.tail_rows),
        "effective_rows_reference": number(worth.rows_reference),
        "tail_effective_rows_reference": number(worth.tail_rows_reference),
    }


def finding_part(finding: Finding) -> dict[str, Any]:
    """One test."""
    result = finding.result
    return {
        "test": result.test,
        "statistic": number(result.statistic),
        "p_value": number(result.p_value),
        "valid": finding.valid,
        "method": result.method,
        "needs_moment": result.needs_moment,
        **({} if result.lags is None else {"lags": result.lags}),
        **({} if result.permutations is None else {"permutations": result.permutations}),
        **({"lacks": finding.lacks} if finding.lacks else {}),
    }


def _co_movement(found: CoMovement, names: tuple[str, ...]) -> dict[str, Any]:
    ranked = [int(j) for j in found.ranked]
    return {
        "median": number(float(np.median(found.ratio))),
        "largest": number(float(found.ratio[ranked[0]])),
        "largest_column": names[ranked[0]],
        "clear": int(found.clear.sum()),
        "ranked": [
            {
                "column": names[j],
                "ratio": number(float(found.ratio[j])),
                "low": number(float(found.low[j])),
                "high": number(float(found.high[j])),
                "measured": number(float(found.measured[j])),
                "p_value": number(float(found.p_value[j])),
                "family_p_value": number(float(found.family_p_value[j])),
            }
            for j in ranked
        ],
    }


def _group(group: SeriesGroup, names: tuple[str, ...], weight: tuple[str, ...] | None) -> dict:
    tails = group.tails
    refused = dict(tails.refused)
    middle = tails.median_column()

    def tail(j: int) -> dict[str, Any]:
        return unknown_tail(refused[j]) if j in refused else _column_tail(tails, j, "both")

    def moments(j: int) -> dict[str, str]:
        return {str(order): group.answer(order, j) for order in ORDERS}

    note = "no column has a tail index"
    return {
        "tail": unknown_tail(note) if middle is None else tail(middle),
        "moments": dict.fromkeys(map(str, ORDERS), "unclear")
        if middle is None
        else moments(middle),
        "median_column": None if middle is None else names[middle],
        **({"median_column_note": note} if middle is None else {}),
        "by_column": [
            {
                "column": name,
                "tail": tail(j),
                "moments": moments(j),
                **_sides(group, j),
                **_implied(group, j),
                **({"weight": weight[j]} if weight else {}),
            }
            for j, name in enumerate(names)
        ],
    }


def _column_tail(tails: ColumnTails, j: int, side: str) -> dict[str, Any]:
    low, high = tails.interval(j)
    return {
        **noted("index", index_from_gamma(float(tails.gamma[j])), ABOVE),
        **noted("low", low, ABOVE),
        **noted("high", high, UNBOUNDED),
        "finite": bool(tails.p_value[j] <= 0.05),
        "threshold_count": tails.threshold_count,
        "side": side,
    }


def _sides(group: SeriesGroup, j: int) -> dict[str, Any]:
    """Left and right tail of one series, where they can be told apart."""
    sides = group.sides
    if sides is None or (group.borrowed is not None and group.borrowed[j]):
        return {"sides": []}
    both = (("left", sides.left), ("right", sides.right))
    known = [(side, tails) for side, tails in both if tails.assessed[j]]
    heavier = {-1: "left", 1: "right", 0: "neither"}[int(sides.heavier[j])]
    return {
        "sides": [_column_tail(tails, j, side) for side, tails in known],
        **({"heavier_side": heavier} if len(known) == 2 else {}),
    }


def _implied(group: SeriesGroup, j: int) -> dict[str, Any]:
    """What column and error imply for the index of one score; no keys for columns."""
    implied = group.implied
    if implied is None or (group.borrowed is not None and group.borrowed[j]):
        return {}
    ends = index_ends(float(implied.low[j]), float(implied.high[j]))
    return {
        "implied": {
            **noted("index", index_from_gamma(float(implied.gamma[j])), ABOVE),
            **noted("low", ends[0], ABOVE),
            **noted("high", ends[1], UNBOUNDED),
            "together": bool(implied.together[j]),
        }
    }
