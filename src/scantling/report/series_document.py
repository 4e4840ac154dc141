"""JSON of the diagnostics stage alone: schema scantling-diagnosis/1."""

from __future__ import annotations

import json
from typing import Any

from scantling.report.diagnosis_document import (
    diagnosis_part,
    finding_part,
    opinion_part,
    tail_part,
    unknown_tail,
    worth_part,
)
from scantling.report.document import design_part, law_part, receipt_part
from scantling.report.record import DesignDiagnosis, SeriesReport
from scantling.report.values import number

SCHEMA = "scantling-diagnosis/1"


def design_diagnosis_json(report: DesignDiagnosis) -> str:
    """The diagnostics of a design."""
    return _text(
        {
            "schema": SCHEMA,
            "title": report.design.title,
            "design": design_part(report),
            "diagnosis": diagnosis_part(report),
            "law": law_part(report),
            "cautions": list(report.diagnosis.warnings),
            "receipt": receipt_part(report.receipt),
        }
    )


def series_json(report: SeriesReport) -> str:
    """The diagnostics of one series."""
    found = report.diagnosis
    series: dict[str, Any] = {
        "rows": found.rows,
        "time_ordered": report.time_ordered,
        "tail": tail_part(found.tail) if found.tail else unknown_tail(found.note),
        "sides": [tail_part(side) for side in found.sides],
        "opinions": [opinion_part(opinion) for opinion in found.opinions],
        "moments": {str(m.order): m.answer for m in found.moments},
        "moment_reasons": {str(m.order): m.reason for m in found.moments},
        "dependence": [finding_part(finding) for finding in found.dependence],
        "extremes_against_law": [
            {"rank": rank, "observed": number(seen), "median": number(median), "high": number(high)}
            for rank, seen, median, high in report.extremes
        ],
    }
    series |= worth_part(found.worth)
    return _text(
        {
            "schema": SCHEMA,
            "title": report.source.name,
            "series": series,
            "law": law_part(report),
            "cautions": list(found.warnings),
            "receipt": receipt_part(report.receipt),
        }
    )


def _text(document: dict[str, Any]) -> str:
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
