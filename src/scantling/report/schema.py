"""The JSON schema of the report's JSON twin, shipped beside this module."""

from __future__ import annotations

import json
from importlib.resources import files
from typing import Any


def report_schema() -> dict[str, Any]:
    """Return the schema of scantling-report/1 (JSON Schema, draft 2020-12) as a fresh dictionary.

    Top-level keys are closed; a null is accepted only beside a `<key>_note` with the reason.
    """
    text = files("scantling.report").joinpath("schema.json").read_text(encoding="utf-8")
    schema: dict[str, Any] = json.loads(text)
    return schema
