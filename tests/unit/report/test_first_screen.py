"""The first screen from constructed records: cover, columns, rows, remedies, page width."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scantling.core.estimate import Estimate
from scantling.design.spec import TargetSpec
from scantling.planning.budget import Allowed, Budget, combine, standing
from scantling.planning.ceiling import Ceiling
from scantling.planning.limit import make_limit, missing_limit
from scantling.planning.remedies import Remedy
from scantling.planning.verdict import ANSWERS, Verdict
from scantling.report.document import remedy_part
from scantling.report.first_screen import first_screen, helps, instead, outcome, reason_is_cut
from scantling.report.limits_section import reasons, remedies
from scantling.report.wording import between_words, in_lines, labelled

SHORT = "Noise binds: at 100 columns a noise column passes."
LONG = "Noise binds: " + "a reason that takes more than its three lines of the page " * 6


def limit(columns, low=None, high=None, most=100):
    """A limit with a band; math.inf is not reached."""
    low, high = columns if low is None else low, columns if high is None else high
    return make_limit(columns, [low] * 3 + [columns] * 44 + [high] * 3, most, mode="conditional")


OPEN = limit(math.inf)


def budget_of(*, noise=OPEN, signal=OPEN, stability=OPEN, **changes):
    allowed, binding = combine({"noise": noise, "signal": signal, "stability": stability}, 100)
    budget = Budget(
        asked=100, rows=1000, noise=noise, signal=signal, stability=stability, geometry=OPEN,
        assured=missing_limit("not computed"),
        ceiling=Ceiling(columns=31, low=31, high=31, regime="", capped=False),
        allowed=allowed, binding=binding, level=3.3,
        risk_at_design=Estimate(value=0.21, low=0.1, high=0.3), draws=400, curve=(),
        penalty_ratio=1.3, equivalent_rows=592, rows_needed=1900, rows_note="",
        detectable=0.22, detectable_worst=0.3, worst_columns=(), worst_shares=(),
    )  # fmt: skip
    return replace(budget, **changes)


def remedy_of(columns, low=None, high=None, *, name="no powers", most=100, **changes):
    allowed, binding = combine({"noise": limit(columns, low, high, most)}, most)
    remedy = Remedy(
        name=name, columns=most, answer=standing(allowed, most), allowed=allowed, binding=binding,
        risk_at_design=Estimate(value=0.02, low=0.01, high=0.03), draws=400, refitted=True,
        dropped=(), price="a price",
    )  # fmt: skip
    return replace(remedy, **changes)


@dataclass(frozen=True, slots=True, kw_only=True)
class Made:
    """As much of a report as the first screen reads."""

    design: Any
    """As asked for."""
    target: TargetSpec
    """What has to be achieved."""
    title: str = "Cargo"
    """Shown first."""
    verdict: Verdict
    """What is said first."""
    budget: Budget
    """The figures."""
    stress: Any = None
    """Refits."""
    read: Any = None
    """Names of the columns."""
    remedies: tuple[Remedy, ...] = ()
    """What would help."""


def report(answer="over budget", *, budget=None, why=(SHORT,), **changes):
    verdict = Verdict(answer=answer, cover="simulation only", reasons=why)
    made = Made(
        design=SimpleNamespace(title="Cargo"), target=TargetSpec(), verdict=verdict,
        budget=budget or budget_of(noise=limit(40.0, 20, 60)),
    )  # fmt: skip
    return replace(made, **changes)


def line(made, label):
    """The text beside a label, its lines joined."""
    lines = first_screen(made, 80)
    start = next(k for k, text in enumerate(lines) if text.startswith(f"{label} "))
    more = [text[12:] for text in lines[start + 1 :]]
    count = next((k for k, text in enumerate(lines[start + 1 :]) if text[:1] != " "), len(more))
    return " ".join([lines[start][12:], *more[:count]])


@pytest.mark.parametrize("answer", ANSWERS)
def test_cover_is_said_where_there_is_something_to_cover(answer):
    covered = answer in ("within budget", "borderline")
    ending = " (cover: simulation only)" if covered else ""
    assert line(report(answer), "Verdict") == answer.upper() + ending


def test_rows_say_what_errors_cost_and_what_effects_need():
    cost = "these errors cost 408 of them"
    needed = "needed for all 100: about 1,900"
    assert line(report(), "Rows") == f"1,000 used; {cost}; {needed}"
    cheap = budget_of(noise=limit(40.0), equivalent_rows=980)
    assert line(report(budget=cheap), "Rows") == f"1,000 used; {needed}"
    note = "not within 64 times the present rows, at the present penalty"
    hopeless = budget_of(noise=limit(40.0), equivalent_rows=1000, rows_needed=None, rows_note=note)
    assert line(report(budget=hopeless), "Rows") == f"1,000 used; needed: {note}"
    assert line(report("no budget"), "Rows") == "1,000 used"


def test_the_ceiling_is_a_rate():
    words = "noise 40 binds; signal and stability at least 100; ceiling 31 (a rate)"
    assert line(report(), "Limits") == words
    none = Ceiling(columns=None, low=None, high=None, regime="", capped=False)
    unknown = report(budget=budget_of(noise=limit(40.0), ceiling=none))
    assert line(unknown, "Limits").endswith("; ceiling unknown")


NOT_LIFTED = "more rows do not lift the noise and stability limits (tried up to 8 times)"


@pytest.mark.parametrize(
    ("note", "words"),
    [
        # All of it fits.
        (NOT_LIFTED, f"1,000 used; these errors cost 408 of them; needed: {NOT_LIFTED}"),
        # Without what the errors cost it fits.
        (f"{NOT_LIFTED} {'e' * 25}", f"1,000 used; needed: {NOT_LIFTED} {'e' * 25}"),
        # Without the remark in brackets.
        (f"{'a' * 45} {'b' * 45} (tried {'c' * 30})", f"1,000 used; needed: {'a' * 45} {'b' * 45}"),
        # Without the last clause, and saying so.
        (f"{NOT_LIFTED}; {'d' * 70}",
         "1,000 used; needed: more rows do not lift the noise and stability limits (more below)"),
        # One clause that is too long by itself.
        (" ".join(["more", *["than"] * 40]), "1,000 used (more below)"),
    ],
)  # fmt: skip
def test_a_long_note_on_rows_never_ends_in_mid_sentence(note, words):
    budget = budget_of(noise=limit(40.0), rows_needed=None, rows_note=note)
    assert line(report(budget=budget), "Rows") == words


@given(st.lists(st.text("abc;(). ", min_size=1, max_size=40), min_size=1, max_size=12))
@settings(max_examples=200, deadline=None)
def test_text_on_few_lines_is_whole_or_says_that_it_is_not(parts):
    text = " ".join("; ".join(parts).split()) or "a"
    for most in (1, 2, 3):
        lines = in_lines("Rows", text, 80, most)
        assert len(lines) <= most and max(map(len, lines)) <= 80
        shown = " ".join(each[12:] for each in lines).rstrip()
        bare = re.sub(r" \([^()]*\)", "", text)
        whole = [" ".join(labelled("", each, 10**6)).strip() for each in (text, bare)]
        assert shown in whole or shown.endswith("(more below)")


def test_phrases_are_cut_between_words():
    assert between_words("drop five columns", 17) == "drop five columns"
    assert between_words("drop five columns", 16) == "drop five ..."
    assert between_words("d" * 20, 10) == "d" * 7 + "..."


def test_a_long_reason_is_cut_at_a_clause():
    made = report(why=("Noise binds: " + "so much of it " * 8 + "for sure; " + "tails ask " * 20,))
    assert line(made, "Because") == (
        "Noise binds: " + "so much of it " * 8 + "for sure (more below)"
    )


def test_columns_allowed():
    assert line(report(), "Columns") == "100 asked for; 40 allowed (90 % band 20 to 60)"
    nothing = budget_of(noise=limit(0.0))
    assert line(report(budget=nothing), "Columns") == (
        "100 asked for; none allowed, 1 being the fewest tried"
    )
    # Refits start at the relevant columns, and nothing is known of fewer.
    stress = SimpleNamespace(runs=(SimpleNamespace(columns=7), SimpleNamespace(columns=100)))
    unstable = report(budget=budget_of(stability=limit(0.0)), stress=stress)
    assert line(unstable, "Columns").endswith("none allowed, 7 being the fewest tried")
    noisy = report(budget=nothing, stress=stress)
    assert line(noisy, "Columns").endswith("none allowed, 1 being the fewest tried")
    perhaps = report(budget=budget_of(noise=limit(0.0, 0, 12)))
    assert line(perhaps, "Columns") == "100 asked for; 0 allowed (90 % band 0 to 12)"


@pytest.mark.parametrize(
    ("remedy", "words"),
    [
        (remedy_of(math.inf), "within, all 100"),
        (remedy_of(math.inf, 30), "borderline, 100 of 100 (low end 30)"),
        (remedy_of(60.0, 60, 60), "over, 60 of 100"),
        (remedy_of(60.0, 40, 80), "over, 60 of 100 (low end 40)"),
        (remedy_of(1500.0, 40, math.inf, most=2000), "borderline, 1,500 of 2,000 (low end 40)"),
    ],
)
def test_what_a_remedy_makes_of_the_design(remedy, words):
    assert outcome(remedy) == words


def test_only_remedies_whose_selection_was_simulated_are_shown():
    sure, unsure = remedy_of(math.inf, name="a"), remedy_of(math.inf, name="b", refitted=False)
    made = report(remedies=(sure, unsure))
    assert helps(made, sure)
    assert not helps(made, unsure)
    assert line(made, "Remedies") == "1. a: within, all 100"
    rows = "; about 1,900 rows would carry it"
    assert line(report(remedies=(unsure,)), "Remedies") == "none of the 1 computed helps" + rows
    assert line(report(), "Remedies") == "none computed applies" + rows
    assert line(report("within budget", remedies=(sure,)), "Remedies") == "none needed"
    worse = remedy_of(40.0, 10, 60)
    assert not helps(made, worse)
    assert helps(made, remedy_of(40.0, 21, 60))


def test_where_none_helps_rows_and_effects_that_would_do_are_said():
    unsure = remedy_of(math.inf, refitted=False)
    weak = budget_of(signal=limit(40.0), detectable=0.2201)
    words = "none of the 1 computed helps; about 1,900 rows would carry it; effects of 0.23 sd"
    made = report(budget=weak, remedies=(unsure,))
    assert line(made, "Remedies") == words + " show as it is"
    assert len(first_screen(made, 80)) <= 12
    # Rows that are not known, or are there already, are not said.
    for needed in (None, 800):
        weak = budget_of(signal=limit(40.0), rows_needed=needed)
        assert instead(report(budget=weak)) == "effects of 0.22 sd show as it is"
    # Nor effects where their size is not what binds.
    assert instead(report()) == "about 1,900 rows would carry it"
    assert instead(report(budget=budget_of(noise=limit(40.0), rows_needed=None))) == ""


def section(made):
    made = replace(made, read=SimpleNamespace(names=tuple(f"x{j}" for j in range(100))))
    return " ".join(text.strip() for text in remedies(made, 80))


def test_the_section_agrees_with_the_first_screen():
    sure = remedy_of(math.inf, name="a")
    unsure = remedy_of(60.0, name="b", refitted=False, dropped=(3, 5))
    both = section(report(remedies=(sure, unsure)))
    ranked = (
        "Ranked: those whose selection was simulated first; then by columns allowed, the low end of"
        " their band, fewer changes and lower risk."
    )
    assert f"1 of the 2 computed helps, marked *. {ranked} 1.* a: " in both
    assert " 2. b: 60 of 100 columns" in both
    assert "2 of the 2 computed help, each marked *." in section(report(remedies=(sure, sure)))
    within = section(report("within budget", remedies=(sure,)))
    assert "No change is needed, as the design is within budget; each is computed" in within
    assert " 1. a: " in within and "*" not in within
    weak = report(budget=budget_of(signal=limit(40.0)), remedies=(unsure,))
    assert f"The one computed does not help; {instead(weak)}." in section(weak)
    text = section(report(remedies=(unsure, unsure)))
    assert "Of 2 computed not one helps; about 1,900 rows would carry it." in text
    assert "None computed applies." in section(report())


def test_the_section_names_what_is_dropped_and_says_if_no_pair_does_better():
    alone = (remedy_of(60.0, name="a", dropped=(3, 5, 7, 9)), remedy_of(50.0, name="b"))
    text = section(report(remedies=alone))
    assert "Dropped: x3, x5, x7 and 1 more. Price: a price." in text
    assert "No pair of the best does better than one of its changes alone." in text
    pair = remedy_of(70.0, name="a and b", parts=("a", "b"))
    assert "No pair" not in section(report(remedies=(pair, *alone)))
    assert "No pair" not in section(report(remedies=alone[:1]))


def test_more_rows_have_no_band():
    allowed = Allowed(columns=100, low=None, high=None, note="at least")
    rows = remedy_of(math.inf, name="2 times the rows (2,000)")
    rows = replace(rows, allowed=allowed, answer="borderline")
    made = report(remedies=(rows,))
    assert line(made, "Remedies") == "1. 2 times the rows (2,000): 100 of 100 (no band)"
    fewer = Allowed(columns=60, low=None, high=None, note="")
    assert outcome(replace(rows, allowed=fewer, answer="over budget")) == (
        "over, 60 of 100 (no band)"
    )
    assert "100 of 100 columns (no band)" in section(made)
    (shown,) = [remedy_part(rows, ())]
    assert (shown["low"], shown["low_note"], shown["high_note"]) == (None, *["a point value"] * 2)
    assert "parts" not in shown
    assert remedy_part(replace(rows, parts=("a", "b")), ())["parts"] == ["a", "b"]


def test_a_long_remedys_name_is_cut_and_not_its_outcome():
    """Between two words, if that is possible."""
    made = report(remedies=(remedy_of(math.inf, 30, name="no " * 30),))
    (text,) = [text for text in first_screen(made, 80) if text.startswith("Remedies")]
    assert text.endswith("no no ...: borderline, 100 of 100 (low end 30)")
    assert 76 < len(text) <= 80


def test_reasons_are_given_below_only_if_the_first_screen_does_not_show_them_all():
    assert not reason_is_cut(report(), 80)
    assert reasons(report(), 80) == []
    cut = report(why=(LONG,))
    assert reason_is_cut(cut, 80)
    assert " ".join(text.strip() for text in reasons(cut, 80)).endswith(LONG.strip())
    two = reasons(report(why=(SHORT, "Effect size binds.")), 80)
    assert [text.strip() for text in two if text.strip()][-1] == "Effect size binds."
    assert any(SHORT in text for text in two)


@pytest.mark.parametrize("answer", ANSWERS)
@pytest.mark.parametrize("why", [SHORT, LONG])
def test_never_more_than_twelve_lines_of_eighty_columns(answer, why):
    note = "not within 64 times the present rows, at the present penalty"
    budget = budget_of(
        noise=limit(40.0, 20, 60), signal=missing_limit("x"), rows_needed=None, rows_note=note
    )
    many = tuple(remedy_of(math.inf, 30, name=f"remedy {'n' * 80} {k}") for k in range(5))
    made = report(answer, budget=budget, why=(why,), remedies=many)
    lines = first_screen(made, 80)
    assert len(lines) <= 12
    assert max(map(len, lines)) <= 80
