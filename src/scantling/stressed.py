"""The stress stage alone: selection at chosen rows and columns, of a design or on paper."""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from scantling.core.streams import MEMORY_BOUND, WORKER_TABLES, Mapper, Work, worker_pool
from scantling.design.spec import Design, TargetSpec
from scantling.design.stated import Statement
from scantling.design.table import read_tables
from scantling.errors import InputError
from scantling.law.diagnosed import Diagnosed, diagnosed
from scantling.law.families import ErrorLaw
from scantling.pipeline import Progress, make_case, receipt_of, with_simulation
from scantling.planned import plan_of
from scantling.planning.case import Case
from scantling.planning.effects import impossible, impossible_words
from scantling.planning.fitted_columns import fitted_plan
from scantling.planning.plan import Plan
from scantling.planning.refits import StressRun
from scantling.planning.rows import plan_cases
from scantling.planning.stress import SUPPORTS, CaseOf, laws_of, run_law
from scantling.planning.stress_verdict import Judgement, judge, no_variance
from scantling.planning.verdict import variance_missing
from scantling.report.stress_record import StressReport
from scantling.simulation.losses import LOSSES
from scantling.simulation.rules import RULES

SUPPORTED = ("random", "pilot")
LEAST_ROWS = 30
REFITTED_LOSSES = tuple(loss for loss in LOSSES if loss != "logistic")


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What is asked instead of what the source says; None: the source's own."""

    rows: int | None = None
    """n."""
    columns: int | None = None
    """p."""
    rule: str | None = None
    """Penalty rule."""
    loss: str | None = None
    """Loss of the regression."""
    compare: str | None = None
    """A second rule, on the same draws."""
    support: str | None = None
    """random | pilot."""
    seed: int | None = None
    """Of every random stream."""
    replicates: int | None = None
    """Refits."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """What is refitted."""

    case: Case
    """With the first table of columns."""
    case_of: CaseOf | None
    """The tables of the others, where columns are drawn."""
    columns: int
    """p of the refits."""
    names: tuple[str, ...]
    """Of the columns at hand."""


def stress_design(
    design: Design, asked: Asked, *, workers: int | Work = 1, progress: Progress | None = None,
    command: str = "scantling stress",
) -> StressReport:  # fmt: skip
    """Refit a design with data at chosen rows and columns.

    At the present rows and up to the columns at hand the columns are the design's own and so is
    the volatility path (conditional); elsewhere both are drawn from fitted laws (generative).

    Parameters
    ----------
    design : Design
    asked : Asked
    workers : int or Work
    progress : callable, optional
        Called with each stage's name.
    command : str
        The command line to put in the receipt.

    Raises
    ------
    InputError
        If the data are not usable, or what is asked is out of range.
    """
    started = time.monotonic()
    _check(asked)
    tell: Progress = progress or (lambda stage: None)
    tell("read")
    design = _changed(design, asked)
    _differs(asked, design.penalty.rule)
    table = read_tables((design,))[0]
    with worker_pool(1):  # one thread for linear algebra: sums in the same order everywhere
        found = diagnosed(design, table, tell)
        case = make_case(design, found.columns, found.residuals, found.law)
        setting = _setting(case, found, asked)
    lack = variance_missing(found.diagnosis)
    path = "" if setting.case.law.volatility is None else " and volatility path"
    where = (
        f"the design's own columns{path}"
        if setting.case.mode == "conditional"
        else "columns and errors drawn from the laws fitted to the data"
    )
    return _report(
        design.title, setting, asked, f"Response {design.data.response}; {where}", lack, tell,
        workers,
        lambda seed, replicates: receipt_of(
            seed, replicates,
            ((design.path.name, design.sha256), (table.file_name, table.sha256)), command, started,
        ),
        (f"{impossible_words(design.target)}.",) if impossible(design.target) else (),
    )  # fmt: skip


def stress_statement(
    statement: Statement, asked: Asked, *, workers: int | Work = 1,
    progress: Progress | None = None, command: str = "scantling stress",
) -> StressReport:  # fmt: skip
    """Refit a design on paper, or the laws of a saved report; parameters as in `stress_design`.

    Raises
    ------
    InputError
        If something is not said or out of range, or the pilot's support is asked for.
    """
    started = time.monotonic()
    _check(asked)
    if asked.support == "pilot":
        raise InputError("support: 'pilot': columns on paper have no pilot; random is needed")
    tell: Progress = progress or (lambda stage: None)
    said = {
        name: value
        for name in ("rows", "columns", "rule", "loss", "seed", "replicates")
        if (value := getattr(asked, name)) is not None
    }
    plan, facts = plan_of(statement.changed(said, {}))
    _differs(asked, plan.rule)
    _fits(plan.rows, plan.columns, plan.target)
    case_of = plan_cases(plan, plan.columns, SUPPORTS)
    setting = Setting(case=case_of(0), case_of=case_of, columns=plan.columns, names=())
    return _report(
        statement.title, setting, asked, "Columns and errors drawn from stated laws", "", tell,
        workers,
        lambda seed, replicates: receipt_of(seed, replicates, statement.inputs, command, started),
        facts,
    )  # fmt: skip


def _check(asked: Asked) -> None:
    """Refuse rules, losses and supports that there are not."""
    for name, known in (
        ("rule", RULES), ("compare", RULES), ("loss", REFITTED_LOSSES), ("support", SUPPORTED),
    ):  # fmt: skip
        value = getattr(asked, name)
        if value is not None and value not in known:
            raise InputError(f"{name}: one of {', '.join(known)} is needed; found {value!r}")
    for name, least in (("rows", LEAST_ROWS), ("columns", 2)):
        value = getattr(asked, name)
        if value is not None and value < least:
            raise InputError(f"{name}: a whole number of at least {least} is needed; found {value}")


def _differs(asked: Asked, rule: str) -> None:
    """Refuse to compare a rule with itself."""
    if asked.compare == rule:
        raise InputError(
            f"compare: {rule!r}: the rule that is judged is this one already; another one is needed"
        )


def _changed(design: Design, asked: Asked) -> Design:
    """The design with what is asked instead."""
    penalty = design.penalty
    penalty = replace(penalty, rule=asked.rule or penalty.rule, loss=asked.loss or penalty.loss)
    if penalty.adaptive and penalty.loss != "squared":
        raise InputError(
            f"loss: {penalty.loss!r}: the design's adaptive second fit takes squared loss only"
        )
    target = design.target
    if asked.support is not None:
        target = replace(target, support=asked.support)
    changed = replace(design, penalty=penalty, target=target)
    return with_simulation(changed, seed=asked.seed, replicates=asked.replicates)


def _setting(case: Case, found: Diagnosed, asked: Asked) -> Setting:
    """The columns at hand, or columns drawn from their fitted law."""
    rows, columns = asked.rows or case.rows, asked.columns or case.columns
    _fits(rows, columns, case.target)
    names = found.columns.names
    if rows == case.rows and columns <= case.columns:
        return Setting(case=case, case_of=None, columns=columns, names=names)
    plan: Plan = fitted_plan(case, found.columns, found.residuals)
    # All at hand are drawn even if fewer are refitted: each support takes its own among them.
    most = max(columns, case.columns)
    _fits(rows, most, case.target)
    case_of = plan_cases(replace(plan.at(rows), columns=most), most, SUPPORTS)
    return Setting(case=case_of(0), case_of=case_of, columns=columns, names=names)


def _fits(rows: int, columns: int, target: TargetSpec) -> None:
    """Refuse what leaves no columns over, or what would exceed the memory bound."""
    if columns <= target.relevant:
        raise InputError(
            f"columns: {columns}: more than the {target.relevant} relevant columns are needed"
        )
    size = 8 * rows * columns * (SUPPORTS + WORKER_TABLES)
    if size > MEMORY_BOUND:
        raise InputError(
            f"columns: {columns:,} columns of {rows:,} rows need {size / 2**30:.1f} GiB; the bound"
            f" is {MEMORY_BOUND / 2**30:.0f} GiB"
        )


def _report(
    title: str, setting: Setting, asked: Asked, where: str, lack: str, tell: Progress,
    workers: int | Work, receipt: Any, facts: tuple[str, ...],
) -> StressReport:  # fmt: skip
    """Refit, judge, put together."""
    case = setting.case
    if not lack and not math.isfinite(case.law.sd):
        lack = "the error law has no variance"
    runs: tuple[StressRun, ...] = ()
    judgement: Judgement = no_variance(lack[:1].upper() + lack[1:])
    compared: Judgement | None = None
    if not lack:
        tell("stress")
        with worker_pool(workers, case.X.nbytes) as mapper:
            runs = _runs(setting, asked, mapper)
        judgement = judge(runs[0], case.target)
        if asked.compare is not None:  # under the same law, on the same draws
            compared = judge(runs[1], case.target)
    return StressReport(
        title=title,
        rows=case.rows,
        columns=setting.columns,
        rule=case.rule,
        compare=asked.compare,
        loss=case.loss,
        facts=(*facts, *_facts(setting, where, runs)),
        target=case.target,
        law=case.law,
        names=setting.names,
        runs=runs,
        judgement=judgement,
        compared=compared,
        receipt=receipt(case.seed, case.replicates),
    )


def _runs(setting: Setting, asked: Asked, mapper: Mapper) -> tuple[StressRun, ...]:
    """Every law with the rule, then with the one compared: the same draws, as streams are named
    by the law."""
    rules = [setting.case.rule, *([] if asked.compare is None else [asked.compare])]

    def under(law: ErrorLaw, name: str, rule: str) -> tuple[StressRun, ...]:
        def own(number: int) -> Case:
            return replace(drawn(number), rule=rule)

        case, drawn = replace(setting.case, rule=rule), setting.case_of or (lambda _: setting.case)
        return run_law(case, law, name, [setting.columns], mapper, own)

    return tuple(
        run for name, law in laws_of(setting.case) for rule in rules
        for run in under(law, name, rule)
    )  # fmt: skip


SUPPORT_WORDS: Mapping[str, str] = {
    "random": "drawn at random",
    "pilot": "the pilot's, filled up at random",
    "named": "the named ones, filled up at random",
}


def _facts(setting: Setting, where: str, runs: tuple[StressRun, ...]) -> tuple[str, ...]:
    case = setting.case
    refits = f"{runs[0].replicates:,} refits" if runs else "No refits"
    return (
        f"{where}: {case.rows:,} rows and {setting.columns:,} columns ({case.mode}).",
        f"{refits} under each law, over {SUPPORTS} sets of {case.target.relevant} relevant columns"
        f" ({SUPPORT_WORDS[case.support]}) of effect {case.target.smallest_effect:g} sd of the"
        f" response per sd of a column; {case.loss} loss, {case.rule} penalty"
        f"{', adaptive' if case.adaptive else ''}.",
    )
