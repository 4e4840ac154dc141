"""How laws are written: what is read, what is refused and with which words."""

from __future__ import annotations

import math

import pytest

from scantling.errors import InputError
from scantling.law.facts import families, law_facts
from scantling.law.notation import WRITTEN, parse_law, stated_law


@pytest.mark.parametrize("text", WRITTEN.values())
def test_every_example_is_read_and_has_variance_one_or_none(text: str) -> None:
    found = parse_law(text)
    assert found.sd == (math.inf if found.family == "stable" else pytest.approx(1, rel=1e-12))
    assert found.volatility is None
    assert found.spread is None


def test_stated_laws() -> None:
    student = parse_law("student-t:df=3")
    assert (student.family, student.df, student.tail_index) == ("student-t", 3, 3)
    heavy = parse_law("student-t: df = 1.5")
    assert (heavy.df, heavy.scale, heavy.sd) == (1.5, 1.0, math.inf)
    assert parse_law("student-t:df=2").scale == 1
    skewed = parse_law("skewed-t:df=4,skew=-0.3")
    assert skewed.parameters == pytest.approx({"scale": 0.677285, "df": 4, "skew": -0.3}, abs=1e-6)
    assert parse_law("stable:index=1.7").parameters == {"scale": 1.0, "index": 1.7, "skew": 0.0}
    assert stated_law("student-t", {"df": 3}) == student
    # The keys of a table may be numbers, those of a line are text.
    assert stated_law("ged", {"shape": "1.5"}) == parse_law("ged:shape=1.5")


def test_stated_volatility_has_mean_level_one() -> None:
    found = parse_law("student-t:df=5,alpha=0.08,beta=0.85,leverage=0.05")
    path = found.volatility
    assert path is not None
    assert (path.alpha, path.beta, path.leverage, path.kind) == (0.08, 0.85, 0.05, "gjr")
    assert path.persistence == pytest.approx(0.955, abs=1e-9)
    assert path.omega == pytest.approx(0.045, abs=1e-9)
    assert found.sd == pytest.approx(1)
    assert found.tail_index == path.tail_index < 5
    arch = parse_law("normal:alpha=0.5").volatility
    assert arch is not None
    assert (arch.kind, arch.beta) == ("garch", 0.0)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("gauss", "one of normal, laplace, ged:shape=1.5, student-t:df=5"),
        ("", "one of normal"),
        ("Normal", "one of normal"),
        ("spliced", "one of normal"),
        ("normal:df=3", "normal has no parameter 'df'; accepted: alpha, beta, leverage"),
        ("student-t", "student-t needs df, as in student-t:df=5"),
        ("student-t:", "student-t needs df"),
        ("student-t:df", "key=value is needed after the family; found 'df'"),
        ("student-t:df=", "df: a number is needed; found ''"),
        ("student-t:df=three", "df: a number is needed; found 'three'"),
        ("student-t:df=0", "df: a number between 0 and 1e\\+06 is needed; found '0'"),
        ("student-t:df=-1", "df: a number between"),
        ("student-t:df=nan", "df: a number between"),
        ("student-t:df=inf", "df: a number between"),
        ("student-t:df=3,nu=4", "student-t has no parameter 'nu'; accepted: df, alpha"),
        ("student-t:df=3,df=4", "df is given twice"),
        ("ged", "ged needs shape, as in ged:shape=1.5"),
        ("ged:shape=0.1", "shape: a number between 0.2 and 20"),
        ("skewed-t:df=4", "skewed-t needs skew, as in skewed-t:df=4,skew=-0.3"),
        ("skewed-t:df=4,skew=1", "skew: a number between -1 and 1"),
        ("skewed-t:df=2,skew=0", "df: a number between 2 and"),
        ("stable:index=2", "index: a number between 1.1 and 2"),
        ("stable:index=0.9", "index: a number between 1.1 and 2"),
        ("stable:index=1.7,alpha=0.1", "volatility needs innovations with a variance; stable"),
        ("student-t:df=2,alpha=0.1", "volatility needs innovations with a variance; student-t"),
        ("normal:beta=0.9", "normal needs alpha, as in normal:alpha=0.08,beta=0.9"),
        ("normal:alpha=-0.1", "alpha: a number between"),
        ("normal:alpha=0.1,beta=0.9", "alpha \\+ beta \\+ leverage/2 below 1 is needed; found 1"),
    ],
)
def test_laws_that_cannot_be_read(text: str, words: str) -> None:
    with pytest.raises(InputError, match=f"^error law: {words}") as refusal:
        parse_law(text, "error law")
    assert "\n" not in str(refusal.value)


def test_facts_of_stated_laws() -> None:
    """exact: excess kurtosis 6/(df - 4); Laplace 3 and -ln(2 p)/sqrt(2); ARCH(1) index at
    alpha = 1/sqrt(3) is 4, so that order 4 is missing."""
    student = law_facts("student-t:df=5")
    assert student.excess_kurtosis == pytest.approx(6)
    assert student.exists == (True, True, True, True)
    assert law_facts("student-t:df=4").exists == (True, True, True, False)
    assert law_facts("student-t:df=4").excess_kurtosis == math.inf
    laplace = law_facts("laplace")
    assert laplace.excess_kurtosis == 3
    assert laplace.quantiles[1] == pytest.approx(math.log(0.02) / math.sqrt(2), abs=1e-9)
    arch = law_facts(f"normal:alpha={1 / math.sqrt(3)!r}")
    assert arch.tail_index == pytest.approx(4, abs=1e-7)
    assert arch.exists == (True, True, True, False)
    assert arch.excess_kurtosis == 0
    stable = law_facts("stable:index=1.7")
    assert (stable.exists, stable.in_scale) == ((True, False, False, False), True)


def test_every_family_is_listed() -> None:
    found = families()
    assert [each.family for each in found if not each.written] == ["spliced"]
    assert all(each.meaning.endswith(".") for each in found)
