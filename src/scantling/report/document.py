"""From report record to JSON document: schema scantling-report/1. Nothing is computed here."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from scantling.law.families import ErrorLaw, Fit
from scantling.planning.remedies import Remedy
from scantling.report.budget_document import beyond, budget_part, estimate, receipt_part, run_part
from scantling.report.diagnosis_document import diagnosis_part
from scantling.report.values import noted, number

if TYPE_CHECKING:
    from scantling.report.record import Diagnosed, HasLaw, Report

SCHEMA = "scantling-report/1"


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
        "budget": budget_part(report.budget, report.read.names),
        "stress": []
        if report.stress is None
        else [run_part(run, report.read.names) for run in report.stress.runs],
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
    proved = report.budget.assured
    assured = () if proved.columns is not None else (f"No columns are assured: {proved.note}.",)
    return (*report.diagnosis.warnings, *spans, *assured, *ALWAYS)


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
        **autoregression_part(law),
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


def autoregression_part(law: ErrorLaw) -> dict[str, Any]:
    """Coefficients of the levels, if they persist."""
    path = law.autoregression
    if path is None:
        return {"autoregression": None, "autoregression_note": "levels are not shown to persist"}
    return {
        "autoregression": {
            "coefficients": [number(float(value)) for value in path.coefficients],
            "root": number(path.root),
            "variance_gain": number(path.gain),
        }
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
        **noted("high", allowed.high, note if allowed.low is None else beyond(allowed)),
        "risk_at_design": estimate(remedy.risk_at_design),
        "answer": remedy.answer,
        **({"parts": list(remedy.parts)} if remedy.parts else {}),
        **({"dropped": [names[j] for j in remedy.dropped]} if remedy.dropped else {}),
        "note": "; ".join(notes),
    }
