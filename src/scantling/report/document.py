"""From report record to JSON document: schema scantling-report/1. Nothing is computed here."""

from __future__ import annotations

import json
import math
from typing import TYPE_CHECKING, Any

import numpy as np

from scantling.core.estimate import Estimate
from scantling.diagnostics.battery import SeriesGroup
from scantling.diagnostics.error_findings import Finding
from scantling.diagnostics.moments import ORDERS
from scantling.diagnostics.tail_index import TailIndex, index_from_gamma
from scantling.planning.budget import Allowed
from scantling.planning.limit import Limit
from scantling.planning.remedies import Remedy
from scantling.planning.stress import StressRun

if TYPE_CHECKING:
    from scantling.report.record import Diagnosed, HasLaw, Receipt, Report

SCHEMA = "scantling-report/1"
DIGITS = 10
"""Significant digits kept; far below any simulation error, above rounding noise."""
ABOVE = "above 50"
UNBOUNDED = "no upper end"


def number(value: float | int | None) -> float | int | None:
    """A JSON number; None for what is unknown or infinite."""
    if value is None or isinstance(value, int):
        return value
    value = float(value)
    if not math.isfinite(value):
        return None
    rounded = float(f"{value:.{DIGITS}g}")
    return rounded if math.isfinite(rounded) else value


def noted(key: str, value: float | int | None, note: str) -> dict[str, Any]:
    """The key with its number, and beside a null the note that explains it."""
    shown = number(value)
    return {key: shown} if shown is not None else {key: None, f"{key}_note": note}


def estimate(value: Estimate) -> dict[str, Any]:
    """value, low, high."""
    return {k: number(getattr(value, k)) for k in ("value", "low", "high")}


def report_json(report: Report) -> str:
    """The document as text, two-space indent, keys in the order of the contract."""
    return json.dumps(document(report), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def document(report: Report) -> dict[str, Any]:
    """The document as plain dictionaries and lists."""
    return {
        "schema": SCHEMA,
        "title": report.design.title,
        "design": design_part(report),
        "diagnosis": diagnosis_part(report),
        "law": law_part(report),
        "budget": _budget(report),
        "stress": [] if report.stress is None else [_run(run) for run in report.stress.runs],
        "remedies": [_remedy(remedy, report.read.names) for remedy in report.remedies],
        "verdict": {
            "answer": report.verdict.answer,
            "cover": report.verdict.cover,
            "reasons": list(report.verdict.reasons),
        },
        "cautions": list(cautions(report)),
        "receipt": receipt_part(report.receipt),
    }


def cautions(report: Report) -> tuple[str, ...]:
    """What always has to be said, and what this sample adds."""
    from scantling.report.wording import ALWAYS

    spans: tuple[str, ...] = ()
    if report.read.rows_dropped and report.read.rows_lost:
        spans = ("Rows were dropped, so lags may span more than one step of time.",)
    if report.read.rows_lost and report.design.data.time is None:
        spans += ("There is no time column: lags follow the order of rows in the file.",)
    assured = f"No columns are assured: {report.budget.assured.note}."
    return (*report.diagnosis.warnings, *spans, assured, *ALWAYS)


def design_part(report: Diagnosed) -> dict[str, Any]:
    """The design as read."""
    design, read = report.design, report.read
    return {
        "rows": read.rows,
        "columns": len(read.names),
        "kind": design.kind,
        "response": design.data.response,
        "loss": design.penalty.loss,
        "rule": design.penalty.rule,
        "raw_columns": read.raw_columns,
        "rows_dropped": read.rows_dropped,
        "rows_lost": read.rows_lost,
        "skipped": list(read.skipped),
        "dropped": [{"column": name, "reason": reason} for name, reason in read.dropped],
        "time_ordered": read.time_ordered,
        "explained": number(read.explained),
        "pilot_columns": list(read.pilot_columns),
        "target": {
            key: number(getattr(design.target, key))
            for key in ("relevant", "smallest_effect", "risk", "power", "stability", "false_share")
        },
        "replicates": design.simulation.replicates,
    }


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
        },
        "columns": _group(found.columns, names, found.weight),
        "scores": _group(found.scores, names, None),
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
        "co_movement": {
            "median": number(float(np.median(found.co_movement))),
            "largest": number(float(found.co_movement.max())),
            "largest_column": names[int(found.co_movement.argmax())],
        },
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
        **({"lacks": finding.lacks} if finding.lacks else {}),
    }


def _group(group: SeriesGroup, names: tuple[str, ...], weight: tuple[str, ...] | None) -> dict:
    tails = group.tails
    refused = dict(tails.refused)
    middle = tails.median_column()

    def tail(j: int) -> dict[str, Any]:
        if j in refused:
            return unknown_tail(refused[j])
        low, high = tails.interval(j)
        return {
            **noted("index", index_from_gamma(float(tails.gamma[j])), ABOVE),
            **noted("low", low, ABOVE),
            **noted("high", high, UNBOUNDED),
            "finite": bool(tails.p_value[j] <= 0.05),
            "threshold_count": tails.threshold_count,
            "side": "both",
        }

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
                **({"weight": weight[j]} if weight else {}),
            }
            for j, name in enumerate(names)
        ],
    }


def law_part(report: HasLaw) -> dict[str, Any]:
    """The error law and its fit."""
    law = report.law
    path = law.volatility
    volatility: dict[str, Any] = {"volatility": None, "volatility_note": "constant"}
    if path is not None:
        volatility = {
            "volatility": {
                "kind": "garch",
                "omega": number(path.omega),
                "alpha": number(path.alpha),
                "beta": number(path.beta),
                "persistence": number(path.persistence),
                **noted("tail_index", path.tail_index, "no finite index implied"),
            }
        }
    note = law.fit.note or "not tested"
    return {
        "family": law.family,
        "parameters": {k: number(v) for k, v in law.parameters.items()},
        **volatility,
        **noted("tail_index", law.tail_index, "no finite index"),
        "fit": {
            **noted("distance", law.fit.distance, note),
            **noted("p_value", law.fit.p_value, note),
            "candidates": [
                {"family": family, "bic": number(value)} for family, value in law.fit.candidates
            ],
            "note": law.fit.note,
        },
    }


def _beyond(limit: Limit | Allowed) -> str:
    """Why there is no upper end: the limit is unknown, or beyond the columns examined."""
    return limit.note if limit.columns is None else "not reached"


def _limit(limit: Limit) -> dict[str, Any]:
    out: dict[str, Any] = {"columns": limit.columns}
    if limit.note:
        out["columns_note"] = limit.note
    out |= noted("low", limit.low, limit.note)
    out |= noted("high", limit.high, _beyond(limit))
    return out | {"mode": limit.mode}


def _budget(report: Report) -> dict[str, Any]:
    budget = report.budget
    rate = budget.ceiling
    allowed = budget.allowed
    return {
        "noise": _limit(budget.noise),
        "signal": _limit(budget.signal),
        "stability": _limit(budget.stability),
        "geometry": _limit(budget.geometry),
        "assured": _limit(budget.assured),
        "ceiling": {
            **noted("columns", rate.columns, rate.regime),
            **({"columns_note": "at least"} if rate.capped else {}),
            **noted("low", rate.low, rate.regime),
            **noted("high", rate.high, UNBOUNDED),
            "mode": "rate",
            "regime": rate.regime,
        },
        "allowed": {
            "columns": allowed.columns,
            **({"columns_note": allowed.note} if allowed.note else {}),
            **noted("low", allowed.low, allowed.note),
            **noted("high", allowed.high, _beyond(allowed)),
        },
        **(
            {"binding": budget.binding}
            if budget.binding
            else {"binding": None, "binding_note": allowed.note}
        ),
        "risk_at_design": estimate(budget.risk_at_design),
        "curve": [
            {"p": c.p, "risk": number(c.risk), "low": number(c.low), "high": number(c.high)}
            for c in budget.curve
        ],
        **noted("penalty_ratio", budget.penalty_ratio, "no quantile of the largest score found"),
        **noted("equivalent_rows", budget.equivalent_rows, "the penalty ratio is unknown"),
        **noted("rows_needed", budget.rows_needed, budget.rows_note),
        "rows_needed_covers": "signal",
        **noted("detectable_effect", budget.detectable, budget.rows_note),
        **noted("detectable_effect_worst_tenth", budget.detectable_worst, budget.rows_note),
    }


def _run(run: StressRun) -> dict[str, Any]:
    return {
        "rows": run.rows,
        "columns": run.columns,
        "law": run.law,
        "mode": run.mode,
        "replicates": run.replicates,
        "stability": estimate(run.stability),
        "power": estimate(run.power),
        "false_share": estimate(run.false_share),
        "exact": number(run.exact),
        "mean_size": number(run.mean_size),
    }


def _remedy(remedy: Remedy, names: tuple[str, ...]) -> dict[str, Any]:
    allowed = remedy.allowed
    notes = [remedy.price]
    if not remedy.refitted:
        notes.append("noise and signal only; selection not simulated")
    return {
        "remedy": remedy.name,
        "columns": remedy.columns,
        "allowed_columns": allowed.columns,
        **({"allowed_columns_note": allowed.note} if allowed.note else {}),
        **noted("low", allowed.low, allowed.note),
        **noted("high", allowed.high, _beyond(allowed)),
        "risk_at_design": estimate(remedy.risk_at_design),
        "answer": remedy.answer,
        **({"dropped": [names[j] for j in remedy.dropped]} if remedy.dropped else {}),
        "note": "; ".join(notes),
    }


def receipt_part(receipt: Receipt) -> dict[str, Any]:
    """The receipt's keys."""
    return {
        "version": receipt.version,
        "seed": receipt.seed,
        "inputs": dict(receipt.inputs),
        "libraries": dict(receipt.libraries),
        "command": receipt.command,
        "wall_clock": {"seconds": receipt.seconds, "finished": receipt.finished},
    }
