"""The verdict from constructed records: answers, cover, reasons and who is blamed."""

from __future__ import annotations

import math
from dataclasses import replace
from types import SimpleNamespace

import pytest

from scantling.core.estimate import Estimate
from scantling.design.spec import TargetSpec
from scantling.planning.budget import Allowed, Budget, combine
from scantling.planning.ceiling import Ceiling
from scantling.planning.limit import Limit, make_limit, missing_limit
from scantling.planning.stress import Stress, StressRun
from scantling.planning.verdict import (
    ANSWERS,
    BORDERLINE,
    NONE,
    OVER,
    WITHIN,
    stated_verdict,
    variance_missing,
    verdict,
)

TAILS = SimpleNamespace(volatility=None, autoregression=None, family="student-t")
CASE = SimpleNamespace(target=TargetSpec(), replicates=400, rows=200, columns=100, law=TAILS)


def limit(columns, low=None, high=None):
    """A limit with a band; math.inf is not reached."""
    low, high = columns if low is None else low, columns if high is None else high
    return make_limit(columns, [low] * 3 + [columns] * 44 + [high] * 3, 100, mode="conditional")


OPEN = limit(math.inf)


def budget_of(*, noise=OPEN, signal=OPEN, stability=OPEN, geometry=OPEN, rate=1000, **changes):
    allowed, binding = combine({"noise": noise, "signal": signal, "stability": stability}, 100)
    budget = Budget(
        asked=100, rows=200, noise=noise, signal=signal, stability=stability, geometry=geometry,
        assured=missing_limit("not computed"),
        ceiling=Ceiling(columns=rate, low=rate, high=rate, regime="", capped=False),
        allowed=allowed, binding=binding,
        level=3.61,
        risk_at_design=Estimate(value=0.21, low=0.1, high=0.3), draws=400, curve=(),
        penalty_ratio=1.3,
        equivalent_rows=118, rows_needed=900, rows_note="", detectable=0.22,
        detectable_worst=0.3, worst_columns=(), worst_shares=(),
    )  # fmt: skip
    return replace(budget, **changes)


def diagnosis_of(*, variance="exists", broken=0, width=100, signal="sparse"):
    return SimpleNamespace(
        signal=SimpleNamespace(answer=signal),
        moment=lambda order: variance if order == 2 else "exists",
        scores_without_variance=tuple(range(broken)),
        weight=("heavy",) * width,
    )


def estimate(value):
    return Estimate(value=value, low=value - 0.05, high=value + 0.05)


def stress_of(*, failing=("power",), power=0.41, on_path=None):
    run = StressRun(
        rows=200, columns=100, law="fitted", rule="plug-in", mode="conditional", support="random",
        replicates=400, replicates_asked=400, stability=estimate(0.62), power=estimate(power),
        false_share=estimate(0.11), exact=estimate(0.0), sign_errors=estimate(0.0),
        size=estimate(5.0), prediction_loss=None, inclusion=((0, 0.4),),
    )  # fmt: skip
    runs = (run, replace(run, law="twin", power=estimate(0.99), stability=estimate(0.92)))
    if on_path is not None:
        runs += (replace(run, law="normal-volatility", stability=estimate(on_path)),)
    return Stress(runs=runs, stability=OPEN, geometry=OPEN, failing=failing)


def judge(diagnosis=None, stress=None, **limits):
    return verdict(CASE, diagnosis or diagnosis_of(), budget_of(**limits), stress)


def test_answers_are_ordered_by_severity():
    assert ANSWERS == ("within budget", "borderline", "over budget", "no budget")


@pytest.mark.parametrize(
    ("low", "high", "answer"),
    [
        (100, None, WITHIN),
        (99, None, BORDERLINE),
        (40, 120, BORDERLINE),
        (40, 100, BORDERLINE),  # not above the high end
        (40, 99, OVER),
        (0, 0, OVER),
        (None, None, BORDERLINE),  # unknown is never within
    ],
)
def test_the_answer_follows_the_band(low, high, answer):
    columns = None if low is None else max(low, 50)
    changed = Allowed(columns=columns, low=low, high=high)
    assert judge(noise=limit(50.0, 40, math.inf), allowed=changed).answer == answer


def test_a_missing_limit_is_never_within_and_its_reason_is_given():
    found = judge(signal=missing_limit("the fitted error law has no variance"))
    assert found.answer == BORDERLINE
    assert found.reasons == (
        "The signal limit could not be computed: the fitted error law has no variance.",
    )


@pytest.mark.parametrize(
    ("rate", "cover"),
    [
        (100, "theory and simulation"),
        (99, "simulation only"),
        (None, "simulation only"),
        (10**12, "theory and simulation"),
    ],
)
def test_cover_is_theorys_up_to_the_ceiling(rate, cover):
    assert judge(rate=rate).cover == cover


@pytest.mark.parametrize("answer", ["missing", "unclear", "exists"])
def test_errors_without_variance_have_no_budget(answer):
    found = judge(diagnosis_of(variance=answer), noise=limit(5.0))
    if answer == "missing":
        assert (found.answer, found.cover) == (NONE, "none")
        assert found.reasons == (
            "The errors have no variance, so least-squares selection has no footing.",
        )
    else:
        assert found.answer == OVER


def test_more_than_half_of_the_scores_without_variance_have_no_budget():
    assert variance_missing(diagnosis_of(broken=50)) == ""
    assert judge(diagnosis_of(broken=50)).answer == WITHIN
    found = judge(diagnosis_of(broken=51))
    assert (found.answer, found.cover) == (NONE, "none")
    assert found.reasons == ("The scores of 51 of 100 columns have no variance.",)
    assert variance_missing(diagnosis_of(broken=1, width=1)) != ""


def test_the_binding_limit_comes_first_and_each_reason_is_one_sentence():
    found = judge(stress=stress_of(), noise=limit(60.0), signal=limit(80.0), stability=limit(20.0))
    assert [reason.split()[0] for reason in found.reasons] == ["Selection", "Noise", "Effect"]
    for reason in found.reasons:
        assert reason.endswith(".")
        assert ". " not in reason
        assert "\n" not in reason
        assert reason[0].isupper()
    swapped = judge(stress=stress_of(), noise=limit(10.0), stability=limit(20.0))
    assert [reason.split()[0] for reason in swapped.reasons] == ["Noise", "Selection"]


def test_limits_that_do_not_bite_are_not_mentioned():
    found = judge(signal=limit(30.0))
    assert len(found.reasons) == 1
    assert found.reasons[0].startswith("Effect size binds")


def test_nothing_binds():
    found = judge()
    assert found.answer == WITHIN
    assert len(found.reasons) == 1
    assert found.reasons[0].startswith("No limit is reached up to the 100 columns")


@pytest.mark.parametrize("signal", ["sparse", "dense", "undecided", "no signal"])
def test_a_dense_signal_is_named_last_and_changes_no_answer(signal):
    words = {
        "dense": "The signal looks dense, so a budget of columns may be the wrong question.",
        "no signal": (
            "No fit finds a signal in these columns, so the verdict rests on the effects assumed in"
            " [target] alone."
        ),
    }
    for limits in ({}, {"noise": limit(10.0)}):
        found, plain = judge(diagnosis_of(signal=signal), **limits), judge(**limits)
        assert found.answer == plain.answer
        assert found.reasons == plain.reasons + ((words[signal],) if signal in words else ())


def test_noise_names_the_tails_only_if_they_cost_something():
    tails = judge(noise=limit(10.0)).reasons[0]
    assert "0.21 (0.05 accepted)" in tails
    assert "tails ask for 1.30 times the penalty of normal errors" in tails
    for ratio in (1.05, 1.0, 0.9, None):
        calm = judge(noise=limit(10.0), penalty_ratio=ratio).reasons[0]
        assert "tails" not in calm
        assert "normal errors would need about the same penalty" in calm


def test_effect_size_names_what_is_detectable_and_asked_for():
    reason = judge(signal=limit(10.0)).reasons[0]
    assert "0.220 sd of the response against 0.15 asked for" in reason
    assert "tails" not in reason


def test_selection_names_what_fails():
    reason = judge(stress=stress_of(failing=("stability", "power")), stability=limit(10.0)).reasons[
        0
    ]
    assert "stability 0.62 against 0.75" in reason
    assert "power 0.41 against 0.8" in reason
    assert "false share" not in reason


def blamed(stability: Limit, geometry: Limit) -> str:
    reason = judge(stress=stress_of(), stability=stability, geometry=geometry).reasons[0]
    if "tails are to blame" in reason:
        return "tails"
    return "geometry" if "geometry or effect size binds" in reason else reason


@pytest.mark.parametrize(
    ("stability", "geometry", "culprit"),
    [
        (limit(20.0), limit(20.0), "geometry"),
        (limit(20.0), limit(15.0), "geometry"),  # the twin does worse
        (limit(20.0), limit(25.0), "geometry"),  # within a quarter
        (limit(20.0), limit(60.0), "tails"),
        (limit(20.0, 10, 45), limit(60.0, 40, 80), "geometry"),  # bands overlap
        (limit(20.0, 10, 39), limit(60.0, 40, 80), "tails"),
        (limit(20.0), OPEN, "tails"),
        (limit(20.0, 10, math.inf), limit(60.0, 40, 80), "geometry"),  # so wide a band may reach it
        (limit(90.0, 80, math.inf), OPEN, "geometry"),
        (limit(0.0), limit(0.0), "geometry"),
    ],
)
def test_tails_are_blamed_only_where_the_twin_does_better(stability, geometry, culprit):
    assert blamed(stability, geometry) == culprit


def test_a_twin_that_was_not_run_blames_nobody():
    reason = blamed(limit(20.0), missing_limit("x"))
    assert "the normal twin could not be run" in reason


@pytest.mark.parametrize(
    ("on_path", "culprit"),
    [
        (0.91, "tails are to blame"),  # normal innovations on the path do as well as the twin
        (0.77, "tails and volatility are to blame"),
        (0.63, "volatility is to blame"),  # they do as badly as the fitted law
    ],
)
def test_volatility_is_told_from_tails(on_path, culprit):
    law = SimpleNamespace(volatility=1, autoregression=None, family="student-t")
    case = SimpleNamespace(**vars(CASE) | {"law": law})
    budget = budget_of(stability=limit(20.0), geometry=OPEN)
    reason = verdict(case, diagnosis_of(), budget, stress_of(on_path=on_path)).reasons[0]
    assert reason.endswith(f": {culprit}.")
    law.volatility, law.autoregression = None, 1
    reason = verdict(case, diagnosis_of(), budget, stress_of(on_path=on_path)).reasons[0]
    culprit = culprit.replace("volatility is", "persistent levels are")
    assert reason.endswith(f": {culprit.replace('volatility', 'persistent levels')}.")


@pytest.mark.parametrize(
    ("family", "volatility", "levels", "words"),
    [
        ("normal", 1, None, "; volatility asks for 1.30"),
        ("spliced", 1, None, "; tails and volatility ask for 1.30"),
        ("normal", None, 1, "; persistent levels ask for 1.30"),
        ("student-t", 1, 1, "; tails, volatility and persistent levels ask for 1.30"),
    ],
)
def test_noise_names_what_carries_over_where_it_is_fitted(family, volatility, levels, words):
    law = SimpleNamespace(volatility=volatility, autoregression=levels, family=family)
    case = SimpleNamespace(**vars(CASE) | {"law": law})
    found = verdict(case, diagnosis_of(), budget_of(noise=limit(10.0)), None)
    assert words in found.reasons[0]


@pytest.mark.parametrize(
    ("noise", "answer"),
    [
        (limit(10.0), OVER),
        (limit(10.0, 5, 99), OVER),
        (limit(10.0, 5, 100), BORDERLINE),  # it may yet carry all that is asked for
        (limit(10.0, 5, math.inf), BORDERLINE),
        (OPEN, BORDERLINE),
    ],
)
@pytest.mark.parametrize("missing", ["signal", "stability"])
def test_one_limit_above_its_band_is_over_though_another_is_missing(noise, answer, missing):
    found = judge(noise=noise, **{missing: missing_limit("x")})
    assert found.answer == answer
    assert f"The {missing} limit could not be computed: x." in found.reasons


@pytest.mark.parametrize(
    ("risk", "draws", "words"),
    [
        (0.0, 400, "below 0.0075"),
        (0.0, 4000, "below 0.00075"),
        (0.0002, 4000, "below 0.00075"),  # not even one draw
        (0.00025, 4000, "below 0.0005"),  # not 0.000
        (0.0005, 40_000, "0.001"),
        (0.031, 400, "0.031"),
        (0.21, 4000, "0.21"),
    ],
)
def test_a_risk_is_no_finer_than_its_draws(risk, draws, words):
    estimate_ = Estimate(value=risk, low=0.0, high=0.3)
    found = judge(risk_at_design=estimate_, draws=draws)
    assert found.reasons[0].endswith(f"noise passes the penalty with probability {words}.")


def test_the_twins_open_limit_is_said_to_be_open():
    reason = judge(stress=stress_of(), stability=limit(20.0), geometry=OPEN).reasons[0]
    assert "normal errors would carry at least 100: tails are to blame" in reason


def for_target(**changes):
    return SimpleNamespace(**vars(CASE) | {"target": TargetSpec(**changes)})


@pytest.mark.parametrize(
    ("relevant", "effect", "words"),
    [
        (10, 0.9, "10 relevant columns of effect 0.9 would explain 810 % of the response's"),
        (4, 0.5, "4 relevant columns of effect 0.5 would explain 100 % of the response's"),
        (1, 1.2, "1 relevant column of effect 1.2 would explain 144 % of the response's"),
    ],
)
def test_a_target_that_no_response_allows_is_never_within(relevant, effect, words):
    case = for_target(relevant=relevant, smallest_effect=effect)
    found = verdict(case, diagnosis_of(), budget_of(), None)
    assert found.answer == BORDERLINE
    assert found.reasons[0] == (f"{words} variance, which no response allows: lower one of them.")
    assert found.reasons[1].startswith("No limit is reached up to the 100 columns")
    over = verdict(case, diagnosis_of(), budget_of(noise=limit(10.0)), None)
    assert over.answer == OVER
    assert [reason.split()[0] for reason in over.reasons] == [str(relevant), "Noise"]
    lacking = verdict(case, diagnosis_of(variance="missing"), budget_of(), None)
    assert lacking.answer == NONE


def test_a_target_just_possible_is_not_mentioned():
    found = verdict(
        for_target(relevant=10, smallest_effect=0.316), diagnosis_of(), budget_of(), None
    )
    assert (found.answer, len(found.reasons)) == (WITHIN, 1)


def test_an_open_end_is_the_samples_or_the_simulations():
    budget = budget_of(noise=limit(math.inf, 40, math.inf))
    fitted = verdict(CASE, diagnosis_of(), budget, None).reasons
    assert fitted == (
        "Under the fitted law no limit is reached up to 100 columns, but the sample does not settle"
        " it: the noise limit may be as low as 40.",
    )
    plan = SimpleNamespace(**vars(CASE) | {"law": SimpleNamespace(**vars(TAILS), sd=1.0)})
    assert stated_verdict(plan, budget, None).reasons == (
        "Under the stated law no limit is reached up to 100 columns, but simulation error leaves it"
        " open: the noise limit may be as low as 40.",
    )
