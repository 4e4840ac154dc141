"""Sections of the text report from constructed records: the table of tests, tails in words."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.diagnostics.battery import diagnose
from scantling.diagnostics.dependence import TestResult as Result
from scantling.diagnostics.error_findings import Finding
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.tail_index import tail_index
from scantling.report.dependence_section import findings_table
from scantling.report.document import cautions
from scantling.report.tails_section import tail_words
from scantling.report.wording import two


@pytest.fixture(scope="module")
def names():
    """The names of all tests of the battery, as it gives them."""
    rng = np.random.default_rng(2)
    e, X = rng.standard_t(4, 300), rng.standard_normal((300, 3))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    residuals = Residuals(
        values=read_only(e - e.mean()), fitted=read_only(X[:, 0]), explained=0.5, selected=(0,),
        folds="contiguous", response_sd=1.0,
    )  # fmt: skip
    found = diagnose(X, residuals, time_ordered=True, seed=1)
    return sorted(f.result.test for f in (*found.variance, *found.dependence))


def finding(name="White", lacks="", statistic=0.5, p_value=0.5):
    result = Result(test=name, statistic=statistic, p_value=p_value, needs_moment=4,
                        method="asymptotic")  # fmt: skip
    return Finding(result=result, valid=not lacks, lacks=lacks)


@pytest.mark.parametrize("lacks", ["", "4th moment", "constant variance", "independent errors"])
def test_the_table_of_tests_is_never_wider_than_the_page(names, lacks):
    assert len(names) == 10
    rows = [finding(name, lacks, -123456.0, 1e-9) for name in names]
    lines = findings_table(tuple(rows))
    assert max(map(len, lines)) <= 80
    # And no name is cut for it.
    assert all(line.startswith(f"  {name} ") for name, line in zip(names, lines[1:], strict=True))


def test_each_test_says_what_its_p_value_lacks():
    unsteady = finding("Ljung-Box", "constant variance", 12.0, 1e-4)
    head, *lines = findings_table((finding(), unsteady))
    assert head.split() == ["Test", "statistic", "p", "lacks"]
    assert lines[0].split() == ["White", "0.5", "0.500", "nothing"]
    assert lines[1].split() == ["Ljung-Box", "12", "<", "0.001", "constant", "variance"]


def test_thin_tails_are_excluded_or_not():
    tail = tail_index(np.random.default_rng(1).standard_t(3, 600))
    shown = replace(tail, index=2.96, low=2.2, high=4.1, finite=True, p_value=0.001)
    assert tail_words(shown) == ("index 3.0 (90 % 2.2 to 4.1); thin tails are excluded (p = 0.001)")
    thin = tail_words(replace(shown, finite=False, p_value=0.4))
    assert thin.endswith("; thin tails are not excluded (p = 0.400)")


@pytest.mark.parametrize(("value", "words"), [(-0.001, "0.00"), (0.0, "0.00"), (-0.126, "-0.13")])
def test_two_decimals_without_minus_zero(value, words):
    assert two(value) == words


LAGS = "There is no time column: lags follow the order of rows in the file."
GAPS = "Rows were dropped, so lags may span more than one step of time."


@pytest.mark.parametrize(
    ("lost", "dropped", "time", "relevant", "expected"),
    [
        (4, 0, "day", 3, ()),
        (4, 0, None, 3, (LAGS,)),
        (0, 0, None, 3, ()),
        (4, 2, "day", 3, (GAPS,)),
        (4, 2, None, 2, (GAPS, LAGS)),
        (0, 2, None, 2, ()),
    ],
)
def test_cautions_of_this_design(lost, dropped, time, relevant, expected):
    made = SimpleNamespace(
        read=SimpleNamespace(rows_dropped=dropped, rows_lost=lost, names=("a", "b", "c")),
        design=SimpleNamespace(
            data=SimpleNamespace(time=time), target=SimpleNamespace(relevant=relevant)
        ),
        budget=SimpleNamespace(assured=SimpleNamespace(columns=None, note="a reason")),
        diagnosis=SimpleNamespace(warnings=("A warning.",)),
    )
    first, *rest = cautions(made)
    assert first == "A warning."
    assured = rest.index("No columns are assured: a reason.")
    assert tuple(rest[:assured]) == expected
