"""The verdict: one answer, what covers it, and a sentence for each reason."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scantling.core.listing import listed
from scantling.diagnostics.battery import Diagnosis
from scantling.planning.budget import BORDERLINE, OVER, WITHIN, Budget, standing
from scantling.planning.case import Case
from scantling.planning.effects import impossible, impossible_words
from scantling.planning.plan import Plan
from scantling.planning.stress import Stress

NONE = "no budget"
ANSWERS = (WITHIN, BORDERLINE, OVER, NONE)
"""From mildest to most severe."""

VOLATILITY = "volatility"
PERSISTENCE = "persistent levels"
TAIL_COST = 1.05
"""Penalty ratio from which tails are said to cost something."""
LEAST_SHOWN = 0.0005
"""Smaller probabilities would be shown as 0.000."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """What the report says first."""

    answer: str
    """within budget | borderline | over budget | no budget."""
    cover: str
    """theory and simulation | simulation only | none."""
    reasons: tuple[str, ...]
    """One sentence each: a target that no response allows, then the binding limit, come first."""


def variance_missing(diagnosis: Diagnosis) -> str:
    """Why there is no budget at all; empty if there may be one."""
    if diagnosis.moment(2) == "missing":
        return "the errors have no variance, so least-squares selection has no footing"
    without = len(diagnosis.scores_without_variance)
    width = len(diagnosis.weight)
    if 2 * without > width:
        return f"the scores of {without:,} of {width:,} columns have no variance"
    return ""


def verdict(case: Case, diagnosis: Diagnosis, budget: Budget, stress: Stress | None) -> Verdict:
    """Judge the columns asked for against the allowed ones.

    within: at or below the low end of the band; over: above the high end (of any one limit
    where another is missing); borderline between; never within if a limit is missing or no
    response allows the target; no budget if order 2 is missing for the errors or for the scores
    of more than half of the columns.
    """
    return _judged(variance_missing(diagnosis), case, diagnosis, budget, stress)


def stated_verdict(plan: Plan, budget: Budget, stress: Stress | None) -> Verdict:
    """The same for a plan; no budget if its law has no variance."""
    lack = ""
    if not math.isfinite(plan.law.sd):
        lack = "the stated error law has no variance, so least-squares selection has no footing"
    return _judged(lack, plan, None, budget, stress)


def _judged(
    lack: str, case: Case | Plan, diagnosis: Diagnosis | None, budget: Budget,
    stress: Stress | None,
) -> Verdict:  # fmt: skip
    if lack:
        return Verdict(answer=NONE, cover="none", reasons=(_sentence(lack),))
    answer = standing(budget.allowed, budget.asked)
    if budget.allowed.columns is None:
        tops = [limit.high for limit in (budget.noise, budget.signal, budget.stability)]
        over = any(top is not None and budget.asked > top for top in tops)
        answer = OVER if over else BORDERLINE
    if answer == WITHIN and impossible(case.target):
        answer = BORDERLINE
    rate = budget.ceiling.columns
    covered = rate is not None and budget.asked <= rate
    return Verdict(
        answer=answer,
        cover="theory and simulation" if covered else "simulation only",
        reasons=tuple(_sentence(text) for text in _reasons(case, diagnosis, budget, stress)),
    )


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:] + "."


def _reasons(
    case: Case | Plan, diagnosis: Diagnosis | None, budget: Budget, stress: Stress | None
) -> list[str]:
    limits = {
        "noise": (budget.noise, lambda: _noise_reason(case, budget)),
        "signal": (budget.signal, lambda: _signal_reason(case, budget)),
        "stability": (budget.stability, lambda: _stability_reason(case, budget, stress)),
    }
    order = sorted(limits, key=lambda name: name != budget.binding)
    reasons = [impossible_words(case.target)] if impossible(case.target) else []
    said = len(reasons)
    for name in order:
        limit, words = limits[name]
        if limit.columns is None:
            reasons.append(f"the {name} limit could not be computed: {limit.note}")
        elif name == budget.binding or limit.columns < budget.asked:
            reasons.append(words())
    if len(reasons) == said:
        reasons.append(_nothing_binds(budget, stated=diagnosis is None))
    if diagnosis is None:
        return reasons
    if diagnosis.signal.answer == "dense":
        reasons.append("the signal looks dense, so a budget of columns may be the wrong question")
    if diagnosis.signal.answer == "no signal":
        reasons.append(
            "no fit finds a signal in these columns, so the verdict rests on the effects assumed in"
            " [target] alone"
        )
    return reasons


def _nothing_binds(budget: Budget, *, stated: bool) -> str:
    """No limit is reached under the law; under others, or with other draws, it may be."""
    limits = {"noise": budget.noise, "signal": budget.signal, "stability": budget.stability}
    open_ones = {
        name: limit.low
        for name, limit in limits.items()
        if limit.low is not None and limit.low < budget.asked
    }
    if open_ones:
        name = min(open_ones, key=lambda key: open_ones[key])
        return (
            f"under the {'stated' if stated else 'fitted'} law no limit is reached up to"
            f" {_columns(budget.asked)}, but"
            f" {'simulation error leaves it open' if stated else 'the sample does not settle it'}:"
            f" the {name} limit may be as low as {open_ones[name]:,}"
        )
    return (
        f"no limit is reached up to the {_columns(budget.asked)} at hand; noise passes the"
        f" penalty with probability {chance(budget.risk_at_design.value, budget.draws)}"
    )


def _columns(count: int) -> str:
    return "1 column" if count == 1 else f"{count:,} columns"


def chance(value: float, draws: int) -> str:
    """A simulated probability, no finer than its draws support."""
    if value * draws < 1:
        return f"below {3 / draws:.2g}"
    if value < LEAST_SHOWN:
        return f"below {LEAST_SHOWN}"
    return f"{value:.3f}" if value < 0.1 else f"{value:.2f}"


def _noise_reason(case: Case | Plan, budget: Budget) -> str:
    risk = chance(budget.risk_at_design.value, budget.draws)
    if risk == f"{case.target.risk:.3f}":
        risk = f"{budget.risk_at_design.value:.4f}"
    ratio = budget.penalty_ratio
    if ratio is not None and ratio > TAIL_COST:
        cause = f"{_sources(case)} ask for {ratio:.2f} times the penalty of normal errors"
        if _sources(case) == VOLATILITY:
            cause = cause.replace(" ask ", " asks ", 1)
    else:
        cause = "normal errors would need about the same penalty"
    return (
        f"noise binds: at {_columns(budget.asked)} a noise column passes the penalty with"
        f" probability {risk} ({case.target.risk:g} accepted);"
        f" {cause}"
    )


def _signal_reason(case: Case | Plan, budget: Budget) -> str:
    detectable = budget.detectable
    shown = "unknown" if detectable is None else f"{detectable:.3f}"
    return (
        f"effect size binds: at {_columns(budget.asked)} the smallest detectable effect is"
        f" {shown} sd of the response against {case.target.smallest_effect:g} asked for"
    )


def _stability_reason(case: Case | Plan, budget: Budget, stress: Stress | None) -> str:
    if stress is None:
        return "selection is unstable"
    last = next(run for run in reversed(stress.runs) if run.law == "fitted")
    words = {
        "stability": f"stability {last.stability.value:.2f} against {case.target.stability:g}",
        "power": f"power {last.power.value:.2f} against {case.target.power:g}",
        "false_share": (
            f"false share {last.false_share.value:.2f} against {case.target.false_share:g}"
        ),
    }
    missed = ", ".join(words[name] for name in stress.failing) or "a criterion near its bar"
    return (
        f"selection binds: refits at {_columns(budget.asked)} give {missed};"
        f" {_blame(budget, stress, _paths(case))}"
    )


def _sources(case: Case | Plan) -> str:
    """What sets the fitted errors apart from independent normal ones."""
    found = [] if case.law.family == "normal" and _paths(case) else ["tails"]
    return listed([*found, *_paths(case)])


def _paths(case: Case | Plan) -> list[str]:
    """What in the fitted errors carries over from one row to the next."""
    law = case.law
    return [VOLATILITY] * (law.volatility is not None) + [PERSISTENCE] * (
        law.autoregression is not None
    )


def _blame(budget: Budget, stress: Stress, paths: list[str]) -> str:
    """Whether geometry, what carries over, or tails are behind an unstable selection."""
    stability, geometry = budget.stability, budget.geometry
    if stability.columns is None or geometry.columns is None:
        return "the normal twin could not be run"
    # A band without an upper end reaches as far as any other.
    overlap = stability.high is None or (geometry.low or 0) <= stability.high
    close = geometry.columns <= 1.25 * stability.columns
    if (geometry.reached and (close or overlap)) or stability.high is None:
        return "normal errors do no better: geometry or effect size binds"
    better = f"{'at least ' if not geometry.reached else ''}{geometry.columns:,}"
    return f"normal errors would carry {better}: {_part_to_blame(stress, paths)} to blame"


def _part_to_blame(stress: Stress, paths: list[str]) -> str:
    """Normal innovations on the fitted path tell what carries over from tails."""
    last = {run.law: run.stability.value for run in stress.runs}
    if "normal-volatility" not in last:
        return "tails are"
    lost = last["twin"] - last["fitted"]
    by_volatility = last["twin"] - last["normal-volatility"]
    alone = "is" if paths == [VOLATILITY] else "are"
    if lost <= 0 or 0.25 < by_volatility / lost < 0.75:
        return f"{listed(['tails', *paths])} are"
    return f"{listed(paths)} {alone}" if by_volatility >= 0.75 * lost else "tails are"
