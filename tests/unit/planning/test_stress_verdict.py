"""One run judged by the intervals of its criteria."""

from __future__ import annotations

import pytest

from scantling.design.spec import TargetSpec
from scantling.planning.refits import StressRun
from scantling.planning.stress_verdict import judge, no_variance
from scantling.simulation.selection import Measured

TARGET = TargetSpec(stability=0.75, power=0.8, false_share=0.2)


def measured(low, high):
    return Measured(value=(low + high) / 2, low=low, high=high, error=0.01)


def run_of(stability=(0.8, 0.9), power=(0.85, 0.9), false_share=(0.05, 0.1)):
    other = measured(0.1, 0.2)
    return StressRun(
        rows=100, columns=50, law="fitted", rule="plug-in", mode="conditional", support="random",
        replicates=400, replicates_asked=400, stability=measured(*stability),
        power=measured(*power), false_share=measured(*false_share), exact=other, sign_errors=other,
        size=other, prediction_loss=None, inclusion=((0, 0.5), (3, 0.9), (4, 0.7)),
    )  # fmt: skip


@pytest.mark.parametrize(
    ("intervals", "answer", "failing"),
    [
        ({}, "met", ()),
        # Ends on the bar are on its right side.
        ({"stability": (0.75, 0.9), "power": (0.8, 0.9), "false_share": (0.1, 0.2)}, "met", ()),
        ({"stability": (0.74, 0.9)}, "undecided", ("stability",)),
        ({"power": (0.7, 0.8)}, "undecided", ("power",)),
        ({"power": (0.7, 0.79)}, "missed", ("power",)),
        ({"false_share": (0.19, 0.21)}, "undecided", ("false_share",)),
        ({"false_share": (0.21, 0.3)}, "missed", ("false_share",)),
        # One clearly missed settles it, whatever is open.
        ({"stability": (0.7, 0.8), "power": (0.1, 0.2)}, "missed", ("stability", "power")),
    ],
)
def test_answers(intervals, answer, failing):
    found = judge(run_of(**intervals), TARGET)
    assert found.answer == answer
    assert tuple(k for k, v in found.by_criterion.items() if v != "met") == failing
    assert len(found.reasons) == max(1, len(failing))


def test_reasons_name_the_criterion_its_interval_and_its_bar():
    found = judge(run_of(false_share=(0.21, 0.31), power=(0.75, 0.85)), TARGET)
    assert found.reasons == (
        "Power is 0.80 (0.75 to 0.85) against at least 0.8: undecided and more replicates would"
        " tell.",
        "False share is 0.26 (0.21 to 0.31) against at most 0.2: missed.",
    )
    assert no_variance("The errors have none").reasons == ("The errors have none.",)


def test_range_of_inclusion():
    assert run_of().inclusion_range == (0.5, 0.7, 0.9)
