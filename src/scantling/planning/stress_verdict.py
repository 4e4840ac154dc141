"""Whether one run meets the criteria of selection, beyond simulation error or not."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from scantling.design.spec import TargetSpec
from scantling.planning.refits import StressRun

MET, UNDECIDED, MISSED, NO_VARIANCE = "met", "undecided", "missed", "no variance"


@dataclass(frozen=True, slots=True, kw_only=True)
class Judgement:
    """Selection at one number of rows and columns, judged."""

    answer: str
    """met | undecided | missed | no variance."""
    reasons: tuple[str, ...]
    """One sentence each."""
    by_criterion: Mapping[str, str]
    """met | undecided | missed, of stability, power and false share."""


def judge(run: StressRun, target: TargetSpec) -> Judgement:
    """Judge a run by its criteria' intervals.

    met: every interval lies wholly on the right side of its bar; missed: one lies wholly on the
    wrong side; undecided otherwise.
    """
    found = {
        "stability": _side(run.stability.low, run.stability.high, target.stability),
        "power": _side(run.power.low, run.power.high, target.power),
        "false_share": _side(-run.false_share.high, -run.false_share.low, -target.false_share),
    }
    answers = set(found.values())
    answer = MISSED if MISSED in answers else UNDECIDED if UNDECIDED in answers else MET
    return Judgement(answer=answer, reasons=_reasons(run, target, found), by_criterion=found)


def no_variance(reason: str) -> Judgement:
    """The answer where refits by least squares have no footing."""
    return Judgement(answer=NO_VARIANCE, reasons=(f"{reason}.",), by_criterion={})


def _side(low: float, high: float, bar: float) -> str:
    return MET if low >= bar else MISSED if high < bar else UNDECIDED


def _reasons(run: StressRun, target: TargetSpec, found: Mapping[str, str]) -> tuple[str, ...]:
    out = []
    for name, answer in found.items():
        if answer == MET:
            continue
        value, bar = getattr(run, name), getattr(target, name)
        word = "at most" if name == "false_share" else "at least"
        doubt = " and more replicates would tell" if answer == UNDECIDED else ""
        out.append(
            f"{name.replace('_', ' ').capitalize()} is {value.value:.2f} ({value.low:.2f} to"
            f" {value.high:.2f}) against {word} {bar:g}: {answer}{doubt}."
        )
    return tuple(out) or ("Stability, power and false share meet what is asked of them.",)
