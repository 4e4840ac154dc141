"""Several responses: the table, the names of their files, the line between their reports."""

from __future__ import annotations

import json
import math
import re
from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from scantling.core.estimate import Estimate
from scantling.errors import InputError
from scantling.planning.budget import Allowed
from scantling.report.summary import (
    ANSWERS,
    file_stems,
    json_list,
    most_severe,
    render_summary,
    separator,
)

MOST = 499_999
NAMES = st.text(st.characters(exclude_categories=["C", "Zl", "Zp"]), min_size=1, max_size=150)


def fake(
    answer: str = "over budget",
    allowed: Allowed | None = None,
    *,
    name: str = "y",
    asked: int = 390,
    binding: str | None = "noise",
    risk: float = 0.24,
) -> Any:
    """What the table looks at in a report."""
    found = allowed or Allowed(columns=23, low=9, high=61)
    data = SimpleNamespace(response=name)
    return SimpleNamespace(
        design=SimpleNamespace(title=f"Freight: {name}", data=data),
        verdict=SimpleNamespace(answer=answer),
        budget=SimpleNamespace(
            asked=asked,
            allowed=found,
            binding=binding,
            risk_at_design=Estimate(value=risk, low=risk, high=risk),
        ),
    )


def test_the_table_of_three() -> None:
    reports = [
        fake(name="spread_change"),
        fake("within budget", Allowed(columns=390, low=390, high=None, note="at least"),
             name="grain_price", binding=None, risk=0.0004),
        fake("no budget", Allowed(columns=None, low=None, high=None, note="no variance"),
             name="bunker_cost", binding=None, risk=math.pi / 4),
    ]  # fmt: skip
    stems = ["d-spread_change", "d-grain_price", "d-bunker_cost"]
    assert (
        render_summary(reports, stems)
        == """\
scantling: Freight (3 responses)
Verdict     NO BUDGET, the most severe: 1 no budget, 1 over budget and 1 within
            budget

Response             Verdict  Asked  Allowed (band)  Binds    Risk
spread_change    OVER BUDGET    390    23 (9 to 61)  noise    0.24
grain_price    WITHIN BUDGET    390            390+      -  <0.001
bunker_cost        NO BUDGET    390            none      -    0.79

Band: 90 %. Risk: break-through at the columns asked for. +: at least so many,
all that were examined.
In full (.txt and .json): d-spread_change, d-grain_price, d-bunker_cost
"""
    )


@pytest.mark.parametrize(
    ("allowed", "cell"),
    [
        (Allowed(columns=23, low=9, high=61), "23 (9 to 61)"),
        (Allowed(columns=0, low=0, high=0), "0 (0 to 0)"),
        (Allowed(columns=1390, low=300, high=None, note="at least"), "1,390+ (from 300)"),
        (Allowed(columns=1390, low=1390, high=None, note="at least"), "1,390+"),
        (Allowed(columns=700, low=300, high=None), "700 (from 300)"),
        (Allowed(columns=None, low=None, high=None, note="reason"), "unknown"),
    ],
)
def test_allowed_columns_in_a_cell(allowed: Allowed, cell: str) -> None:
    text = render_summary([fake("borderline", allowed, asked=1390), fake()], ["a", "b"])
    (row,) = [line for line in text.splitlines() if line.startswith("y") and "BORDERLINE" in line]
    assert f" {cell}  noise " in row
    # A mark is explained where it is used, and only there.
    assert ("+: at least" in text) is ("+" in cell)


@pytest.mark.parametrize("answer", ANSWERS)
def test_one_answer_for_all(answer: str) -> None:
    text = render_summary([fake(answer), fake(answer)], ["a", "b"])
    assert text.split("\n")[1] == f"Verdict     {answer.upper()}, all of them"


@pytest.mark.parametrize("worst", range(4))
def test_the_most_severe_stands_for_all(worst: int) -> None:
    some = [fake(ANSWERS[k]) for k in (0, worst, 0)]
    assert most_severe(some) == ANSWERS[worst]
    assert ANSWERS == ("within budget", "borderline", "over budget", "no budget")


@example(names=["n" * 90, "m"], columns=MOST, closed=True, answer="within budget")
@example(names=["n" * 90, "m"], columns=MOST, closed=False, answer="within budget")
@given(
    names=st.lists(NAMES, min_size=2, max_size=4),
    columns=st.integers(0, MOST),
    closed=st.booleans(),
    answer=st.sampled_from(ANSWERS),
)
def test_never_wider_than_a_page(names: list[str], columns: int, closed: bool, answer: str) -> None:
    high = columns if closed else None
    allowed = Allowed(columns=columns, low=max(0, columns - 1), high=high)
    if columns == MOST and not closed:
        allowed = replace(allowed, note="at least")
    reports = [
        fake(answer, allowed, name=name, asked=MOST, binding="stability", risk=1e-5)
        for name in names
    ]
    stems = [f"d-{place}" for place in range(len(names))]
    lines = render_summary(reports, stems).split("\n")
    assert max(map(len, lines)) <= 80
    head = next(place for place, line in enumerate(lines) if line.startswith("Resp"))
    assert all(answer.upper() in line for line in lines[head + 1 : head + 1 + len(names)])
    for place, name in enumerate(names, start=1):
        line, blank, rest = separator(place, len(names), name).split("\n")
        assert len(line) == 80 and line.startswith(f"===== {place} of ") and line.endswith("=")
        assert blank == rest == ""


@pytest.mark.parametrize(
    ("name", "safe"),
    [
        ("spread_change", "spread_change"),
        ("10y - 2y (bp)", "10y_-_2y_bp"),
        ("a/b", "a_b"),
        ("../../etc/passwd", ".._.._etc_passwd"),
        ("C:\\x", "C_x"),
        ("Größe", "Größe"),
        ("Gro\u0308sse", "Grösse"),
        ("%", "_"),
        ("n" * 200, "n" * 120),
    ],
)
def test_names_of_files(name: str, safe: str) -> None:
    assert file_stems("d", [name, "other"]) == (f"d-{safe}", "d-other")
    assert file_stems("d", [name]) == ("d",)


@pytest.mark.parametrize(
    ("one", "two"), [("a/b", "a b"), ("Rate", "rate"), ("%", "&"), ("n" * 130, "n" * 131)]
)
def test_two_responses_in_one_file_are_refused(one: str, two: str) -> None:
    with pytest.raises(InputError, match=r"would both be written as d-.*\.json; rename one"):
        file_stems("d", ["x", one, two])


@given(names=st.lists(NAMES, min_size=2, max_size=6, unique=True))
def test_names_of_files_are_safe_and_differ_or_are_refused(names: list[str]) -> None:
    try:
        stems = file_stems("d", names)
    except InputError:
        return
    assert len({stem.casefold() for stem in stems}) == len(names)
    for stem in stems:
        assert re.fullmatch(r"d-[\w.\-]+", stem) or all(c.isalnum() or c in "._-" for c in stem)
        assert len(f".{stem}.json.12345678".encode()) <= 255


def test_a_list_of_documents_is_one_document() -> None:
    parts = ['{\n  "a": 1\n}\n', '{\n  "a": 2\n}\n']
    assert json.loads(json_list(parts)) == [{"a": 1}, {"a": 2}]
    assert all(part.rstrip() in json_list(parts) for part in parts)
