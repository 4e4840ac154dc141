"""The verdict: one answer, what covers it, and a sentence for each reason."""

from __future__ import annotations

from dataclasses import dataclass

from scantling.diagnostics.battery import Diagnosis
from scantling.planning.budget import Budget
from scantling.planning.case import Case
from scantling.planning.limit import Limit
from scantling.planning.stress import Stress

WITHIN = "within budget"
BORDERLINE = "borderline"
OVER = "over budget"
NONE = "no budget"
ANSWERS = (WITHIN, BORDERLINE, OVER, NONE)
"""From mildest to most severe."""

TAIL_COST = 1.05
"""Penalty ratio from which tails are said to cost something."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """What the report says first."""

    answer: str
    """within budget | borderline | over budget | no budget."""
    cover: str
    """theory and simulation | simulation only | none."""
    reasons: tuple[str, ...]
    """One sentence each, the binding limit first."""


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

    within: at or below the low end of the band; over: above the high end; borderline between;
    never within if a limit is missing; no budget if order 2 is missing for the errors or for
    the scores of more than half of the columns.
    """
    lack = variance_missing(diagnosis)
    if lack:
        return Verdict(answer=NONE, cover="none", reasons=(_sentence(lack),))
    allowed = budget.allowed
    if allowed.low is not None and budget.asked <= allowed.low:
        answer = WITHIN
    elif allowed.high is not None and budget.asked > allowed.high:
        answer = OVER
    else:
        answer = BORDERLINE
    rate = budget.ceiling.columns
    covered = rate is not None and budget.asked <= rate
    return Verdict(
        answer=answer,
        cover="theory and simulation" if covered else "simulation only",
        reasons=tuple(_sentence(text) for text in _reasons(case, budget, stress)),
    )


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:] + "."


def _reasons(case: Case, budget: Budget, stress: Stress | None) -> list[str]:
    limits = {
        "noise": (budget.noise, lambda: _noise_reason(case, budget)),
        "signal": (budget.signal, lambda: _signal_reason(case, budget)),
        "stability": (budget.stability, lambda: _stability_reason(case, budget, stress)),
    }
    order = sorted(limits, key=lambda name: name != budget.binding)
    reasons = []
    for name in order:
        limit, words = limits[name]
        if limit.columns is None:
            reasons.append(f"the {name} limit could not be computed: {limit.note}")
        elif name == budget.binding or limit.columns < budget.asked:
            reasons.append(words())
    if not reasons:
        reasons.append(_nothing_binds(budget))
    return reasons


def _nothing_binds(budget: Budget) -> str:
    return (
        f"no limit is reached up to the {budget.asked:,} columns at hand; noise passes the"
        f" penalty with probability {budget.risk_at_design.value:.3f}"
    )


def _noise_reason(case: Case, budget: Budget) -> str:
    risk = budget.risk_at_design
    ratio = budget.penalty_ratio
    if ratio is not None and ratio > TAIL_COST:
        cause = f"tails ask for {ratio:.2f} times the penalty of normal errors"
    else:
        cause = "normal errors would need about the same penalty"
    return (
        f"noise binds: at {budget.asked:,} columns a noise column passes the penalty with"
        f" probability {risk.value:.2f} ({case.target.risk:g} accepted); {cause}"
    )


def _signal_reason(case: Case, budget: Budget) -> str:
    detectable = budget.detectable
    shown = "unknown" if detectable is None else f"{detectable:.3f}"
    return (
        f"effect size binds: at {budget.asked:,} columns the smallest detectable effect is"
        f" {shown} sd of the response against {case.target.smallest_effect:g} asked for"
    )


def _stability_reason(case: Case, budget: Budget, stress: Stress | None) -> str:
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
        f"selection binds: refits at {budget.asked:,} columns give {missed};"
        f" {_blame(budget.stability, budget.geometry)}"
    )


def _blame(stability: Limit, geometry: Limit) -> str:
    """Whether tails or geometry and effect size are behind an unstable selection."""
    if stability.columns is None or geometry.columns is None:
        return "the normal twin could not be run"
    if geometry.reached and (
        geometry.columns <= 1.25 * stability.columns or (geometry.low or 0) <= (stability.high or 0)
    ):
        return "normal errors do no better, so geometry or effect size is to blame, not tails"
    return (
        f"normal errors would carry {'at least ' if not geometry.reached else ''}"
        f"{geometry.columns:,} columns, so tails are to blame"
    )
