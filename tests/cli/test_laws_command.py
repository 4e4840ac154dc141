"""`scantling laws`: the list, the facts of one law, refusals, JSON."""

from __future__ import annotations

import json

import pytest

from scantling.cli.main import run
from scantling.law.catalogue import FAMILIES
from scantling.law.notation import WRITTEN


def said(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> tuple[int, str, str]:
    status = run(arguments)
    streams = capsys.readouterr()
    return status, streams.out, streams.err


def test_every_law_is_listed_as_it_is_written(capsys: pytest.CaptureFixture[str]) -> None:
    status, out, err = said(["laws"], capsys)
    assert (status, err) == (0, "")
    assert max(map(len, out.splitlines())) <= 80
    assert all(text in out.splitlines() for text in WRITTEN.values())
    assert "spliced (fitted only)" in out
    found = json.loads(said(["laws", "--json"], capsys)[1])
    assert tuple(each["family"] for each in found["families"]) == FAMILIES


@pytest.mark.parametrize(
    "law",
    [
        *WRITTEN.values(),
        "student-t:df=5,alpha=0.08,beta=0.85,leverage=0.05",
        "student-t:df=0.8",
        "student-t:df=5,alpha=0.08,beta=0.85,leverage=-0.05",
        "normal:alpha=0.1,beta=0.5,lag1=0.4",
    ],
)
def test_facts_fit_the_page_and_agree_with_the_json(
    law: str, capsys: pytest.CaptureFixture[str]
) -> None:
    status, out, err = said(["laws", law], capsys)
    assert (status, err) == (0, "")
    assert max(map(len, out.splitlines())) <= 80
    found = json.loads(said(["laws", law, "--json"], capsys)[1])
    assert found["law"] == law
    for key, value in found.items():
        assert value is not None or found[f"{key}_note"]
    if found["tail_index"] is not None:
        assert f"Tail index  {found['tail_index']:.3f}" in out


def test_facts_of_a_student_law(capsys: pytest.CaptureFixture[str]) -> None:
    """exact: sd 1, order 4 missing at df 4, t(4) quantile 7.1732 over sqrt(2) at 0.1 %."""
    found = json.loads(said(["laws", "student-t:df=4", "--json"], capsys)[1])
    assert (found["sd"], found["tail_index"]) == (1.0, 4)
    assert found["moments"] == {"1": "exists", "2": "exists", "3": "exists", "4": "missing"}
    assert found["excess_kurtosis"] is None
    assert found["quantiles"][0]["value"] == pytest.approx(-7.17318 / 2**0.5, abs=1e-5)
    text = said(["laws", "student-t:df=4"], capsys)[1]
    assert "Moments     1, 2 and 3 exist; 4 missing" in text


def test_persistent_levels_are_said(capsys: pytest.CaptureFixture[str]) -> None:
    """exact: 1/(1 - 0.6^2) = 1.5625."""
    text = said(["laws", "laplace:lag1=0.6"], capsys)[1]
    assert "Levels      persist: largest root 0.6 in size, variance 1.562 times that" in text
    turned = said(["laws", "laplace:lag1=-0.6"], capsys)[1]
    assert "Levels      alternate: largest root 0.6 in size, variance 1.562 times that" in turned
    found = json.loads(said(["laws", "laplace:lag1=0.6", "--json"], capsys)[1])
    assert found["autoregression"] == {
        "coefficients": [0.6], "root": 0.6, "variance_gain": 1.5625,
    }  # fmt: skip
    assert found["sd"] == 1


@pytest.mark.parametrize("law", ["gauss", "ged", "student-t:df=x", "normal:alpha=0.5,beta=0.5"])
def test_what_cannot_be_read_is_one_line(law: str, capsys: pytest.CaptureFixture[str]) -> None:
    status, out, err = said(["laws", law], capsys)
    assert (status, out) == (2, "")
    assert err.startswith("scantling: law: ")
    assert err.count("\n") == 1
