"""The budget of a design that exists only on paper: rows, columns and laws, no data."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from scantling.core.checks import between
from scantling.core.streams import worker_pool
from scantling.design.spec import TargetSpec
from scantling.errors import InputError
from scantling.law.families import ErrorLaw
from scantling.law.notation import parse_law
from scantling.planning.budget import Budget
from scantling.planning.case import loadings_of
from scantling.planning.ceiling import Ceiling, rate_by_regime
from scantling.planning.effects import explained_by, impossible
from scantling.planning.generative import StatedColumns
from scantling.planning.plan import Plan
from scantling.planning.stated import budget_of
from scantling.simulation.loss_scores import LOSSES
from scantling.simulation.rules import RULES


def budget(
    *,
    rows: int,
    columns: int,
    law: ErrorLaw | str,
    column_law: ErrorLaw | str | None = None,
    correlation: float = 0.0,
    rule: str = "plug-in",
    loss: str = "squared",
    relevant: int = 10,
    smallest_effect: float = 0.15,
    risk: float = 0.05,
    power: float = 0.80,
    stability: float = 0.75,
    false_share: float = 0.20,
    explained: float | None = None,
    replicates: int = 400,
    seed: int = 1,
    workers: int = 1,
    refits: bool = True,
    tables: bool = True,
) -> Budget:
    """How many columns so many rows can carry, for columns of a named law.

    Parameters
    ----------
    rows, columns : int
        n (at least 30) and the p asked for.
    law : ErrorLaw or str
        Of the errors: 'normal', 'student-t:df=3', or a fitted law.
    column_law : ErrorLaw or str, optional
        Of the columns; default: that of the errors, as lags of the response would have.
    correlation : float
        Between every two columns, 0 to below 1.
    rule : {'plug-in', 'self-normalised', 'bic', 'extended-bic', 'cross-validated', \
'cross-validated-sparse'}
    loss : {'squared', 'huber', 'absolute', 'square-root'}
    relevant : int
        Columns expected to matter.
    smallest_effect : float
        To be detected, sd of the response per sd of a column.
    risk : float
        Accepted break-through risk.
    power, stability, false_share : float
        Criteria of the selection.
    explained : float, optional
        Share of the response's variance that the relevant columns explain; default: what so many
        independent columns of the smallest effect do, relevant * smallest_effect^2, which has to
        be below 1.
    replicates : int
        Draws of errors, each with fresh columns where that is affordable.
    seed, workers : int
    refits, tables : bool
        Whether selection is simulated, and whether rows needed and the tables by rows and
        effects are computed; both take seconds.

    Returns
    -------
    Budget
        Mode 'generative'. Bands hold simulation error only: the law is stated.

    Raises
    ------
    InputError
        If an argument is out of range, the target is one that no response allows or no column
        is left over beside the relevant ones, or the run would exceed the memory bound.
    """
    workers = _whole(workers, "workers", 1)
    plan = stated_plan(
        rows=rows, columns=columns, law=law, column_law=column_law, correlation=correlation,
        rule=rule, loss=loss, explained=explained, replicates=replicates, seed=seed,
        target=target_of(
            relevant=relevant, smallest_effect=smallest_effect, risk=risk, power=power,
            stability=stability, false_share=false_share,
        ),
    )  # fmt: skip
    with worker_pool(workers) as mapper:
        return budget_of(
            plan, stated_ceiling(plan), mapper, refits=bool(refits), tables=bool(tables)
        ).budget


def target_of(
    *, relevant: Any, smallest_effect: Any, risk: Any, power: Any, stability: Any,
    false_share: Any,
) -> TargetSpec:  # fmt: skip
    """The target, each part checked.

    Raises
    ------
    InputError
        If one is out of range.
    """
    return TargetSpec(
        relevant=_whole(relevant, "relevant", 1),
        smallest_effect=between(smallest_effect, "smallest_effect", 0, 5, closed="high"),
        risk=between(risk, "risk", 0, 0.5),
        power=between(power, "power", 0, 1),
        stability=between(stability, "stability", 0, 1, closed=True),
        false_share=between(false_share, "false_share", 0, 1, closed="low"),
    )


def _refuse_impossible(target: TargetSpec, relevant: str, effect: str) -> None:
    """Refuse a target of which the relevant columns alone would be the whole response or more."""
    if impossible(target):
        raise InputError(
            f"{relevant} {target.relevant} x {effect} {target.smallest_effect:g}: they would"
            f" explain {100 * explained_by(target):,.0f} % of the response's variance; under 100 %"
            " is needed"
        )


def stated_plan(
    *, rows: Any, columns: Any, law: Any, column_law: Any, correlation: Any, rule: Any, loss: Any,
    explained: Any, replicates: Any, seed: Any, target: TargetSpec,
    named: tuple[str, str] = ("relevant", "smallest_effect"),
) -> Plan:  # fmt: skip
    """A plan from what is stated, each part checked; `named` is what a refusal of the target calls
    its relevant columns and their effect.

    Raises
    ------
    InputError
        If one is out of range.
    """
    rows, columns = _whole(rows, "rows", 30), _whole(columns, "columns", 1)
    for value, name, known in ((rule, "rule", RULES), (loss, "loss", LOSSES)):
        if value not in known:
            raise InputError(f"{name}: one of {', '.join(known)} is needed; found {value!r}")
    if target.relevant >= max(2, columns):
        raise InputError(
            f"relevant: {target.relevant}: there are {columns} columns; a number below"
            f" {max(2, columns)} is needed"
        )
    errors = _law(law, "law")
    drawn = errors if column_law is None else _law(column_law, "column_law")
    if explained is None:
        _refuse_impossible(target, *named)
        explained = explained_by(target)
    explained = between(explained, "explained", 0, 1, closed="low")
    sd = errors.sd if math.isfinite(errors.sd) else 1.0
    return Plan(
        rows=rows,
        columns=columns,
        source=StatedColumns(
            law=drawn,
            correlation=between(correlation, "correlation", 0, 1, closed="low"),
            ordered_errors=errors.ordered,
        ),
        law=errors,
        target=target,
        rule=rule,
        loss=loss,
        response_sd=sd / math.sqrt(1 - explained),
        residual_sd=sd,
        replicates=_whole(replicates, "replicates", 50),
        seed=_whole(seed, "seed", 0),
    )


def stated_ceiling(plan: Plan) -> Ceiling:
    """The rate for stated laws, whose tail indices are known."""
    assert isinstance(plan.source, StatedColumns)
    errors, drawn = plan.law.tail_index, plan.source.law.tail_index
    return rate_by_regime(
        rows=plan.rows,
        rule=loadings_of(plan.rule),
        loss=plan.loss,
        heavy_share=float(math.isfinite(drawn)),
        errors=(errors,) * 3,
        scores=(min(errors, drawn),) * 3,
    )


def _whole(value: Any, name: str, least: int) -> int:
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
        raise InputError(f"{name}: a whole number of at least {least} is needed; found {value!r}")
    return int(value)


def _law(law: Any, name: str) -> ErrorLaw:
    if isinstance(law, str):
        return parse_law(law, name)
    if not isinstance(law, ErrorLaw):
        raise InputError(
            f"{name}: a fitted law, or text such as 'student-t:df=3', is needed; found {law!r}"
        )
    return law
