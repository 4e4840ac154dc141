"""From report record to JSON document: schema scantling-report/1. Nothing is computed here."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from scantling.core.estimate import Estimate
from scantling.law.families import Fit
from scantling.planning.budget import Allowed
from scantling.planning.limit import Limit
from scantling.planning.remedies import Remedy
from scantling.planning.stress import StressRun
from scantling.report.diagnosis_document import diagnosis_part
from scantling.report.values import UNBOUNDED, noted, number

if TYPE_CHECKING:
    from scantling.report.record import Diagnosed, HasLaw, Receipt, Report

SCHEMA = "scantling-report/1"


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
        "remedies": [remedy_part(remedy, report.read.names) for remedy in report.remedies],
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


def law_part(report: HasLaw) -> dict[str, Any]:
    """The error law and its fit."""
    law = report.law
    path = law.volatility
    volatility: dict[str, Any] = {"volatility": None, "volatility_note": "constant"}
    if path is not None:
        volatility = {
            "volatility": {
                "kind": path.kind,
                "omega": number(path.omega),
                "alpha": number(path.alpha),
                "beta": number(path.beta),
                "leverage": number(path.leverage),
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
                {
                    "family": each.family,
                    "score": number(each.score),
                    "tail_score": number(each.tail_score),
                }
                for each in law.fit.candidates
            ],
            "note": law.fit.note,
        },
        **_runner_up(law.fit),
    }


def _runner_up(fit: Fit) -> dict[str, Any]:
    """The family next in line and by how much, in log-likelihood out of sample."""
    if not fit.runner_up:
        return {"runner_up": None, "runner_up_note": "no other family was tried"}
    note = "the law was taken because the runner-up is rejected"
    return {
        "runner_up": {
            "family": fit.runner_up,
            **noted("margin", fit.margin, note),
            **noted("margin_error", fit.margin_error, note),
        }
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


def remedy_part(remedy: Remedy, names: tuple[str, ...]) -> dict[str, Any]:
    """One remedy; `names` are those of the present columns."""
    allowed = remedy.allowed
    notes = [remedy.price]
    if not remedy.refitted:
        notes.append("noise and signal only; selection not simulated")
    note = allowed.note if allowed.columns is None else "a point value"
    return {
        "remedy": remedy.name,
        "columns": remedy.columns,
        "allowed_columns": allowed.columns,
        **({"allowed_columns_note": allowed.note} if allowed.note else {}),
        **noted("low", allowed.low, note),
        **noted("high", allowed.high, note if allowed.low is None else _beyond(allowed)),
        "risk_at_design": estimate(remedy.risk_at_design),
        "answer": remedy.answer,
        **({"parts": list(remedy.parts)} if remedy.parts else {}),
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
