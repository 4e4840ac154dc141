"""JSON of the stress stage alone: schema scantling-stress/1."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from scantling.report.budget_document import receipt_part, run_part
from scantling.report.document import law_part
from scantling.report.values import number

if TYPE_CHECKING:
    from scantling.report.stress_record import StressReport

SCHEMA = "scantling-stress/1"
TARGET = ("relevant", "smallest_effect", "risk", "power", "stability", "false_share")


def stress_json(report: StressReport) -> str:
    """The document as text."""
    support = report.target.support
    document = {
        "schema": SCHEMA,
        "title": report.title,
        "design": {
            "rows": report.rows,
            "columns": report.columns,
            "loss": report.loss,
            "rule": report.rule,
            "compare": report.compare,
            **({"compare_note": "one rule only"} if report.compare is None else {}),
            "support": support if isinstance(support, str) else list(support),
            "facts": list(report.facts),
            "target": {key: number(getattr(report.target, key)) for key in TARGET},
            "replicates": report.receipt.replicates,
        },
        "law": law_part(report),
        "stress": [run_part(run, report.names) for run in report.runs],
        "verdict": {
            "answer": report.judgement.answer,
            "criteria": dict(report.judgement.by_criterion),
            "reasons": list(report.judgement.reasons),
        },
        **_compared(report),
        "receipt": receipt_part(report.receipt),
    }
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _compared(report: StressReport) -> dict[str, Any]:
    """How the rule that is compared fares."""
    found = report.compared
    if found is None:
        note = "one rule only" if report.compare is None else "nothing was refitted"
        return {"compared": None, "compared_note": note}
    return {
        "compared": {
            "rule": report.compare,
            "answer": found.answer,
            "criteria": dict(found.by_criterion),
            "reasons": list(found.reasons),
        }
    }
