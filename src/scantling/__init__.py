"""Sizes a sparse regression for the tails it will meet, before anyone fits it.

The stages, one record each, in the order in which they run:

    read_design   a design file           -> Design
    read_table    the data it names       -> design.table.Table
    expand        raw columns             -> design.expand.Columns
    fit_pilot     columns and response    -> diagnostics.residuals.Residuals
    diagnose      residuals and columns   -> diagnostics.battery.Diagnosis
    error_law     residuals               -> law.families.ErrorLaw
    break_through, signal                 -> planning.breakthrough, planning.signal
    stress        refits, fresh errors    -> planning.stress.Stress
    assemble      all limits              -> planning.budget.Budget
    remedies      changes, recomputed     -> planning.remedies.Remedy
    verdict       what binds, and why     -> planning.verdict.Verdict
    render        the report              -> text

`vet` runs them all. Public names are resolved on first use, so that the command
line answers before numpy is loaded.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "read_design": "scantling.design.parse",
    "vet": "scantling.pipeline",
    "render": "scantling.report.text",
    "tail_index": "scantling.diagnostics.tail_index",
    "moment_exists": "scantling.diagnostics.moments",
    "fit_law": "scantling.law.fit",
    "budget": "scantling.planning.paper",
    "lasso_batch": "scantling.simulation.lasso",
    "InputError": "scantling.errors",
    "NotAvailableError": "scantling.errors",
    "ScantlingError": "scantling.errors",
}

__all__ = [
    "InputError",
    "NotAvailableError",
    "ScantlingError",
    "budget",
    "fit_law",
    "lasso_batch",
    "moment_exists",
    "read_design",
    "render",
    "tail_index",
    "vet",
]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("scantling")
    if name not in _HOMES:
        raise AttributeError(f"module 'scantling' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
