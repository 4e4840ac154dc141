"""How laws are written: what is read, what is refused and with which words."""

from __future__ import annotations

import math

import numpy as np
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


def test_leverage_may_be_negative_down_to_minus_alpha() -> None:
    """exact: persistence alpha + beta + leverage/2 of a symmetric law; below it, an index above
    that of the same law without leverage."""
    found = parse_law("student-t:df=5,alpha=0.08,beta=0.85,leverage=-0.05").volatility
    assert found is not None
    assert found.persistence == pytest.approx(0.905, abs=1e-9)
    assert (found.leverage, found.omega) == (-0.05, pytest.approx(0.095, abs=1e-9))
    plain = parse_law("student-t:df=5,alpha=0.08,beta=0.85").volatility
    assert plain is not None
    assert 5 > found.tail_index > plain.tail_index > 4
    # Ten digits of a report: the sum is below 0 by rounding alone.
    edge = parse_law("normal:alpha=0.0828244195,beta=0.89,leverage=-0.0828244196").volatility
    assert edge is not None
    assert edge.alpha + edge.leverage == 0
    none = parse_law("normal:alpha=-1e-10,beta=0.5,leverage=0.1").volatility
    assert none is not None
    assert (none.alpha, none.leverage) == (0, 0.1)


def test_lags_make_an_autoregression_of_variance_one() -> None:
    """exact: AR(1) of coefficient a varies 1/(1 - a^2) times as much as its shocks; AR(2)
    (1 - b)/((1 + b)((1 - b)^2 - a^2)) times; autocorrelation a/(1 - b) at lag 1."""
    found = parse_law("student-t:df=5,lag1=0.6")
    assert found.autoregression is not None
    assert found.autoregression.draws.tolist() == [[0.6]]
    assert found.sd == pytest.approx(1, abs=1e-12)
    assert found.innovation_variance == pytest.approx(1 - 0.36, abs=1e-12)
    assert found.parameters["lag1"] == 0.6
    second = parse_law("normal:lag1=0.5,lag2=0.2,lag3=0").autoregression
    assert second is not None
    assert second.coefficients.tolist() == [0.5, 0.2]
    assert second.gain == pytest.approx(0.8 / (1.2 * (0.64 - 0.25)), abs=1e-12)
    assert parse_law("normal:lag4=0.3").autoregression.coefficients.tolist() == [0, 0, 0, 0.3]
    assert parse_law("normal:lag1=0").autoregression is None
    law = parse_law("normal:alpha=0.1,beta=0.6,lag1=0.5,lag2=0.2")
    assert law.sd == pytest.approx(1, abs=1e-12)
    drawn = law.draw((2000, 200), np.random.default_rng(3))
    assert drawn.var() == pytest.approx(1, abs=0.03)
    assert (drawn[1:] * drawn[:-1]).mean() / drawn.var() == pytest.approx(0.625, abs=0.01)
    assert stated_law("normal", {"lag1": 0.5}).parameters == parse_law("normal:lag1=0.5").parameters


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
        ("student-t:df=0", "df: a number above 0 and below 1e\\+06 is needed; found '0'"),
        ("student-t:df=-1", "df: a number above 0"),
        ("student-t:df=nan", "df: a number above 0"),
        ("student-t:df=inf", "df: a number above 0"),
        ("student-t:df=3,nu=4", "student-t has no parameter 'nu'; accepted: df, alpha"),
        ("student-t:df=3,df=4", "df is given twice"),
        ("ged", "ged needs shape, as in ged:shape=1.5"),
        ("ged:shape=0.1", "shape: a number above 0.2 and below 20"),
        ("skewed-t:df=4", "skewed-t needs skew, as in skewed-t:df=4,skew=-0.3"),
        ("skewed-t:df=4,skew=1", "skew: a number above -1 and below 1"),
        ("skewed-t:df=2,skew=0", "df: a number above 2 and below"),
        ("stable:index=2", "index: a number above 1.1 and below 2"),
        ("stable:index=0.9", "index: a number above 1.1 and below 2"),
        ("stable:index=1.7,alpha=0.1", "volatility needs innovations with a variance; stable"),
        ("student-t:df=2,alpha=0.1", "volatility needs innovations with a variance; student-t"),
        ("studnt-t:df=3", ".*found 'studnt-t:df=3'; did you mean student-t\\?$"),
        ("Gaussian", ".*found 'Gaussian'; did you mean normal\\?$"),
        ("xyzzy", ".*found 'xyzzy'$"),
        ("normal:alpha=nan", "alpha: a number of at least 0 and below 1 is needed; found 'nan'"),
        ("normal:alpha=0.05,leverage=-0.06", "alpha \\+ leverage of at least 0 is needed; found"),
        ("normal:alpha=-1e-8", "alpha: a number of at least 0"),
        ("normal:lag1=1", "lag1: a stationary autoregression is needed, of largest root at most"),
        ("normal:lag1=0.6,lag2=0.5", "lag1 to lag2: a stationary .*; found 1.06811$"),
        ("normal:lag11=0.1", "normal has no parameter 'lag11'; accepted: .*, lag1 to lag10"),
        ("normal:lag1=x", "lag1: a number is needed; found 'x'"),
        ("normal:beta=0.9", "normal needs alpha, as in normal:alpha=0.08,beta=0.9"),
        ("normal:alpha=-0.1", "alpha: a number of at least 0 and below 1"),
        ("normal:alpha=0.1,beta=0.9", "alpha \\+ beta \\+ 0.5 leverage below 1 is needed; found 1"),
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
