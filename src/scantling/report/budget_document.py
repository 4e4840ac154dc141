"""From budget records to JSON: the part of the report, and the document of a plan."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from scantling.core.estimate import Estimate
from scantling.planning.budget import Allowed, Budget
from scantling.planning.generative import ColumnSource, StatedColumns
from scantling.planning.limit import Limit
from scantling.planning.refits import StressRun
from scantling.planning.rows import RowsEntry
from scantling.report.values import UNBOUNDED, noted, number

if TYPE_CHECKING:
    from scantling.law.families import ErrorLaw
    from scantling.report.record import PlanReport, Receipt

WORST = 50
"""Columns listed by their share of the break-throughs, at most."""
SCHEMA = "scantling-budget/1"
IMPOSSIBLE = "no response allows it: the relevant columns would explain all its variance or more"


def estimate(value: Estimate) -> dict[str, Any]:
    """value, low, high."""
    return {k: number(getattr(value, k)) for k in ("value", "low", "high")}


def beyond(limit: Limit | Allowed) -> str:
    """Why there is no upper end: the limit is unknown, or beyond the columns examined."""
    return limit.note if limit.columns is None else "not reached"


def _limit(limit: Limit) -> dict[str, Any]:
    out: dict[str, Any] = {"columns": limit.columns}
    if limit.note:
        out["columns_note"] = limit.note
    out |= noted("low", limit.low, limit.note)
    out |= noted("high", limit.high, beyond(limit))
    return out | {"mode": limit.mode}


def budget_part(budget: Budget, names: Sequence[str] = ()) -> dict[str, Any]:
    """All limits and what follows from them; `names` are those of the columns, if they have any."""
    rate = budget.ceiling
    allowed = budget.allowed
    unknown = budget.signal.note or "unknown"
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
            **noted("high", allowed.high, beyond(allowed)),
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
        "worst_columns": [
            {"column": names[j], "share": number(share)}
            for j, share in zip(budget.worst_columns, budget.worst_shares, strict=True)
        ][:WORST],
        "penalty_level": number(budget.level),
        **noted("penalty_ratio", budget.penalty_ratio, "no quantile of the largest score found"),
        **noted("equivalent_rows", budget.equivalent_rows, "the penalty ratio is unknown"),
        **noted("rows_needed", budget.rows_needed, budget.rows_note or "unknown"),
        **_range(budget),
        **_rows(budget),
        "effects": [
            {
                "smallest_effect": number(entry.smallest_effect),
                "relevant": entry.relevant,
                **noted("allowed_columns", entry.allowed, IMPOSSIBLE),
                **(
                    {"binding": entry.binding}
                    if entry.binding
                    else {
                        "binding": None,
                        "binding_note": IMPOSSIBLE if entry.allowed is None else "at least",
                    }
                ),
            }
            for entry in budget.effects
        ],
        **noted("detectable_effect", budget.detectable, unknown),
        **noted("detectable_effect_worst_tenth", budget.detectable_worst, unknown),
    }


def _range(budget: Budget) -> dict[str, Any]:
    """Rows needed within and beyond simulation error."""
    note = budget.rows_note or "not searched"
    if budget.rows_range is None:
        return {"rows_needed_low": None, "rows_needed_low_note": note,
                "rows_needed_high": None, "rows_needed_high_note": note}  # fmt: skip
    low, high = budget.rows_range
    return {
        "rows_needed_low": low,
        **noted("rows_needed_high", high, "none tried has a risk accepted beyond simulation error"),
    }


def _rows(budget: Budget) -> dict[str, Any]:
    """Rows needed by limit, and the table by rows."""
    plan = budget.rows_plan
    if plan is None:
        note = budget.rows_note or "not searched"
        return {"rows_needed_by": None, "rows_needed_by_note": note, "by_rows": []}
    return {
        "rows_needed_by": {
            name: noted("rows", needed.rows, needed.note or "unknown")
            for name, needed in plan.by_limit
        },
        "rows_searched_to": plan.searched_to,
        "by_rows": [_entry(entry) for entry in plan.table],
    }


def _entry(entry: RowsEntry) -> dict[str, Any]:
    note = "not simulated, or the law has no variance"
    return {
        "rows": entry.rows,
        **noted("noise", entry.noise, note),
        **noted("signal", entry.signal, note),
        **noted("stability", entry.stability, note),
        **noted("allowed_columns", entry.allowed, note),
        "risk": number(entry.risk),
        "risk_error": number(entry.risk_error),
        "mode": "generative",
    }


def run_part(run: StressRun, names: Sequence[str] = ()) -> dict[str, Any]:
    """One set of refits; `names` are those of the columns."""
    return {
        "rows": run.rows,
        "columns": run.columns,
        "law": run.law,
        "rule": run.rule,
        "mode": run.mode,
        "support": run.support,
        "replicates": run.replicates,
        "replicates_asked": run.replicates_asked,
        "stability": estimate(run.stability),
        "power": estimate(run.power),
        "false_share": estimate(run.false_share),
        "exact": number(run.exact.value),
        "exact_low": number(run.exact.low),
        "exact_high": number(run.exact.high),
        "sign_errors": estimate(run.sign_errors),
        "mean_size": number(run.size.value),
        "size": estimate(run.size),
        **(
            {"prediction_loss": None, "prediction_loss_note": "least squares has no error here"}
            if run.prediction_loss is None
            else {"prediction_loss": estimate(run.prediction_loss)}
        ),
        "inclusion": _inclusion(run, names),
    }


def _inclusion(run: StressRun, names: Sequence[str]) -> dict[str, Any]:
    """How often relevant columns are selected; by column where they are not drawn at random."""
    low, median, high = run.inclusion_range
    out: dict[str, Any] = {
        "relevant": len(run.inclusion), "low": number(low), "median": number(median),
        "high": number(high),
    }  # fmt: skip
    if run.support != "random" and names:
        out["by_column"] = [
            {"column": names[j % len(names)], "share": number(share)} for j, share in run.inclusion
        ]
    return out


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


def _law_part(law: ErrorLaw) -> dict[str, Any]:
    return {
        "family": law.family,
        "parameters": {k: number(v) for k, v in law.parameters.items()},
    }


def _columns_part(source: ColumnSource) -> dict[str, Any]:
    """The law of stated columns, so that the budget can be taken up from its document."""
    if not isinstance(source, StatedColumns):
        return {}
    return {"column_law": _law_part(source.law), "correlation": number(source.correlation)}


def plan_json(report: PlanReport) -> str:
    """The document of a budget on paper, as text."""
    plan = report.plan
    document = {
        "schema": SCHEMA,
        "title": report.title,
        "design": {
            "rows": plan.rows,
            "columns": plan.columns,
            "loss": plan.loss,
            "rule": plan.rule,
            "facts": list(report.facts),
            "target": {
                key: number(getattr(plan.target, key))
                for key in (
                    "relevant", "smallest_effect", "risk", "power", "stability", "false_share",
                )
            },
            "replicates": plan.replicates,
            **_columns_part(plan.source),
        },
        "law": {
            **_law_part(plan.law),
            **noted("tail_index", plan.law.tail_index, "no finite index"),
        },
        "budget": budget_part(report.budget),
        "stress": [] if report.stress is None else [run_part(run) for run in report.stress.runs],
        "verdict": {
            "answer": report.verdict.answer,
            "cover": report.verdict.cover,
            "reasons": list(report.verdict.reasons),
        },
        "receipt": receipt_part(report.receipt),
    }  # fmt: skip
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
