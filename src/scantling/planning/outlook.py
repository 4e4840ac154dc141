"""What a design at hand would be with other rows or another target, and what of it is proved."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from scantling.core.streams import Mapper
from scantling.design.expand import Columns
from scantling.design.spec import Design
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.residuals import Residuals
from scantling.planning.assured import assured
from scantling.planning.breakthrough import BreakThrough
from scantling.planning.case import Case
from scantling.planning.effects import EffectEntry, effects_table
from scantling.planning.fitted_columns import fitted_plan
from scantling.planning.limit import Limit
from scantling.planning.rows import BRIEF, RowsPlan, rows_plan
from scantling.planning.signal import signal_limit_of


@dataclass(frozen=True, slots=True, kw_only=True)
class Outlook:
    """Beyond the design as it stands."""

    assured: Limit
    """Columns proved safe, given the law and the columns."""
    rows: RowsPlan | None
    """Rows needed and the table by rows; None where the errors lack a variance."""
    effects: tuple[EffectEntry, ...]
    """Allowed columns by effect and relevant columns; empty where refits are not run."""


def outlook(
    design: Design, case: Case, columns: Columns, residuals: Residuals, diagnosis: Diagnosis,
    noise: BreakThrough, mapper: Mapper, *, refits: bool,
) -> Outlook:  # fmt: skip
    """Assured columns, rows needed and the two tables.

    Parameters
    ----------
    design : Design
    case : Case
        The design as the simulations see it.
    columns, residuals, diagnosis
        What it was made from.
    noise : BreakThrough
        Its scores.
    mapper : callable
    refits : bool
        Whether selection can be simulated: the errors have a variance.
    """
    proved = assured(
        case.X, case.law, case.law_draws, target=case.target, response_sd=case.response_sd,
        loss=case.loss, mode=case.mode, dependence=_dependence(design, diagnosis),
    )  # fmt: skip
    if not refits:
        return Outlook(assured=proved, rows=None, effects=())
    rows = rows_plan(fitted_plan(case, columns, residuals), mapper, refits=True, effort=BRIEF)
    effects = effects_table(
        case,
        float(noise.noise.columns or 0) if noise.noise.reached else math.inf,
        lambda target: signal_limit_of(replace(case, target=target), case.law, noise.fitted),
        mapper,
        columns=case.columns,
    )
    return Outlook(assured=proved, rows=rows, effects=effects)


def _dependence(design: Design, diagnosis: Diagnosis) -> str:
    """What stands against errors that are independent given the columns."""
    if design.expand.own_lags:
        return "lags of the response hold past errors"
    if any(found.valid and found.result.p_value < 0.05
           for found in diagnosis.dependence):  # fmt: skip
        return "a test finds serial dependence"
    return ""
