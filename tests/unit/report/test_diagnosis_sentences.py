"""Sentences and JSON of the diagnosis: every number with what it means, at 80 columns."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.diagnostics.autoregression import Autoregression
from scantling.diagnostics.battery import Diagnosis, diagnose
from scantling.diagnostics.error_findings import Worth
from scantling.diagnostics.extremes import extreme_clustering
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.structure import DEPENDENT
from scantling.report.dependence_section import co_movement, counts_lines, variance, worth_lines
from scantling.report.diagnosis_document import diagnosis_part, worth_part
from scantling.report.sections import signal, structure
from scantling.report.tails_section import moments, opinion_lines, side_lines, tails


def standard(columns: np.ndarray) -> np.ndarray:
    return np.asarray((columns - columns.mean(axis=0)) / columns.std(axis=0))


@pytest.fixture(scope="module")
def found() -> Diagnosis:
    """600 rows in time order: a column, its square, a dummy, one that shares the errors' scale."""
    rng = np.random.default_rng(1)
    scale = np.exp(0.6 * rng.standard_normal(600))
    e = scale * rng.standard_t(5, 600)
    x = rng.standard_t(5, 600)
    columns = np.column_stack(
        [x, x**2, rng.random(600) < 0.5, scale * rng.standard_normal(600), rng.standard_normal(600)]
    )
    residuals = Residuals(
        values=read_only(e - e.mean()), fitted=read_only(x), explained=0.5, selected=(0,),
        folds="contiguous", response_sd=1.0,
    )  # fmt: skip
    parents = ((0,), (0, 0), (2,), (3,), (4,))
    return diagnose(standard(columns), residuals, time_ordered=True, seed=1, parents=parents)


NAMES = ("x.lag1", "x^2.lag1", "dummy.lag1", "shared.lag1", "plain.lag1")


def report(diagnosis: Diagnosis) -> Any:
    return SimpleNamespace(
        diagnosis=diagnosis,
        read=SimpleNamespace(names=NAMES, rows=600),
        law=SimpleNamespace(tail_index=4.2),
    )


def joined(lines: list[str]) -> str:
    return " ".join(" ".join(lines).split())


def test_no_line_is_wider_than_the_page(found: Diagnosis) -> None:
    for section in (tails, moments, variance, structure, signal):
        assert max(map(len, section(report(found), 80))) <= 80


def test_the_ranking_names_the_column_that_moves_with_the_errors(found: Diagnosis) -> None:
    lines = co_movement(report(found), 80)
    assert "by itself 1 of 5 columns (shared.lag1) is so beyond chance" in joined(lines)
    top = next(line for line in lines if line.startswith("  shared.lag1"))
    ratio = found.co_movement.ratio[3]
    ends = (found.co_movement.low[3], found.co_movement.high[3])
    assert top.split() == [
        "shared.lag1", f"{ratio:.2f}", f"{ends[0]:.2f}", "to", f"{ends[1]:.2f}", "0.005",
    ]  # fmt: skip
    assert lines.index(top) == next(i for i, s in enumerate(lines) if "penalty times" in s) + 1


def test_clear_columns_come_first_in_the_table(found: Diagnosis) -> None:
    """Two clear ones with the smallest ratios of all, before three unclear ones."""
    ratio = read_only(np.array([1.5, 1.1, 1.4, 1.2, 1.3]))
    chance = read_only(np.array([0.4, 0.01, 0.3, 0.02, 0.2]))
    ranked = replace(found.co_movement, ratio=ratio, family_p_value=chance)
    assert ranked.ranked.tolist() == [0, 2, 4, 3, 1]
    assert ranked.clear_first.tolist() == [3, 1, 0, 2, 4]
    lines = co_movement(report(replace(found, co_movement=ranked)), 80)
    shown = [line.split()[0] for line in lines[-5:]]
    assert shown == ["shared.lag1", "x^2.lag1", "x.lag1", "dummy.lag1", "plain.lag1"]


def test_lags_and_permutations_are_said_once(found: Diagnosis) -> None:
    words = joined(variance(report(found), 80))
    said = (
        "Tests of dependence take 5 lags together. P-values by permutation come from 999"
        " permutations (co-movement from 199) and are never smaller than 0.001 and 0.005: read"
        " these as at most."
    )
    assert words.count(said) == 1
    part = diagnosis_part(report(found))
    by_name = {test["test"]: test for test in (*part["variance"], *part["dependence"])}
    assert by_name["Ljung-Box of signs"]["lags"] == 5
    assert by_name["Ljung-Box of signs"]["permutations"] == 999
    assert by_name["co-movement of |x| and |e|, rank corr."]["permutations"] == 199
    assert "lags" not in by_name["White"] and "permutations" not in by_name["White"]
    assert by_name["McLeod-Li"]["lags"] == 5 and "permutations" not in by_name["McLeod-Li"]
    # Findings without any number of either say nothing.
    assert counts_lines((), 80) == []


def test_a_variance_not_shown_to_move_is_no_proof(found: Diagnosis) -> None:
    first = found.variance[0]
    calm = replace(first, result=replace(first.result, p_value=0.4))
    words = joined(variance(report(replace(found, variance=(calm, *found.variance[1:]))), 80))
    assert "(p = 0.400), so equal loadings are not shown to lose anything there." in words


def test_columns_like_random_walks_are_counted_and_named(found: Diagnosis) -> None:
    levels = read_only(np.array([0.97, 0.2, 0.95, 0.99, 0.96]))
    made = report(replace(found, column_levels=levels))
    words = joined(variance(made, 80))
    assert (
        "4 of 5 columns keep 95 % or more of their level from row to row (x.lag1, dummy.lag1,"
        " shared.lag1 and 1 more): like random walks, their scores vary more than rows suggest"
        " wherever errors persist as well."
    ) in words
    path = Autoregression(coefficients=read_only(np.array([0.5])), draws=read_only(np.ones((1, 1))))
    assert found.levels is not None
    persistent = replace(
        found, column_levels=levels, levels=replace(found.levels, autoregression=path)
    )
    assert "wherever errors persist as well, as these do." in joined(
        variance(report(persistent), 80)
    )
    one = replace(found, column_levels=read_only(np.array([0.97, 0.2, 0.9499, 0.5, 0.1])))
    assert (
        "1 of 5 columns keeps 95 % or more of its level from row to row (x.lag1): like a random"
        " walk, its scores vary"
    ) in joined(variance(report(one), 80))
    assert diagnosis_part(made)["column_autocorrelations"] == [0.97, 0.2, 0.95, 0.99, 0.96]
    for none in (found, replace(found, column_levels=None)):
        assert "or more of" not in joined(variance(report(none), 80))
    part = diagnosis_part(report(replace(found, column_levels=None)))
    assert part["column_autocorrelations"] is None
    assert part["column_autocorrelations_note"] == "no order"


def test_columns_that_depend_on_each_other_are_said_to(found: Diagnosis) -> None:
    assert "drop one" not in joined(structure(report(found), 80))
    shape = replace(found.structure, condition=None, condition_note=DEPENDENT)
    words = joined(structure(report(replace(found, structure=shape)), 80))
    assert (
        "The columns are linearly dependent: some are sums of multiples of others, so a fit cannot"
        " tell them apart; drop one of each such group."
    ) in words
    # More columns than rows is another matter.
    wide = replace(shape, condition_note="700 columns on 600 rows: the correlation is singular")
    assert "drop one" not in joined(structure(report(replace(found, structure=wide)), 80))
    alike = replace(found.structure, largest_correlation=0.9912, largest_pair=(1, 3))
    words = joined(structure(report(replace(found, structure=alike)), 80))
    assert words.endswith(
        "x^2.lag1 and shared.lag1 are all but the same (correlation 0.991 in size): a fit cannot"
        " tell them apart; drop one."
    )
    less = replace(alike, largest_correlation=0.9899)
    assert "drop one" not in joined(structure(report(replace(found, structure=less)), 80))


def test_the_powers_sentence_speaks_of_the_column_before_powers(found: Diagnosis) -> None:
    words = joined(signal(report(found), 80))
    assert "the median column before powers (index " in words and "raw" not in words


def test_without_any_clear_column_it_says_so(found: Diagnosis) -> None:
    calm = replace(found.co_movement, family_p_value=read_only(np.ones(5)))
    words = joined(co_movement(report(replace(found, co_movement=calm)), 80))
    assert "by itself no column is so beyond chance" in words


def test_sides_and_opinions_say_what_they_mean(found: Diagnosis) -> None:
    left, right = found.sides
    assert joined(side_lines((left, right), "left", 80)).endswith(
        "the left is clearly heavier, so its moments count."
    )
    assert "so both are taken together" in joined(side_lines((left, right), "", 80))
    assert side_lines((), "", 80) == []
    hill, pareto = found.opinions
    apart = replace(pareto, agrees=False, index=np.inf, low=60.0, high=np.inf)
    words = joined(opinion_lines((replace(hill, agrees=True), apart), 80))
    assert "Hill, largest 5 %: index" in words and ", whose interval overlaps." in words
    assert "50 (90 % above 50), whose interval does not overlap: rely on what both" in words


def test_doubted_scores_are_told_from_missing_ones(found: Diagnosis) -> None:
    answers = {**found.scores.moments, 2: np.array([-1, 0, 0, 0, 1])}
    doubted = np.array([False, True, False, True, False])
    scores = replace(found.scores, moments=answers, doubted=doubted)
    words = joined(moments(report(replace(found, scores=scores)), 80))
    assert "The scores of 1 column have no variance" in words
    assert "For 2 more scores the largest products alone look as if" in words
    none = replace(scores, moments={**answers, 2: np.zeros(5)}, doubted=None)
    assert "scores of" not in joined(moments(report(replace(found, scores=none)), 80))


def test_extremes_that_come_twice_are_said_to() -> None:
    values = np.repeat(np.random.default_rng(2).standard_t(3, 400), 2)
    worth = Worth(
        extremes=extreme_clustering(values), rows=800.0, tail_rows=402.0, rows_reference=700.0,
        tail_rows_reference=510.0,
    )  # fmt: skip
    words = joined(worth_lines(worth, 800, "values", 80))
    assert words.startswith("Extremes come in clusters of ")
    assert words.endswith(
        "Worth of these 800 values in independent ones: for means no loss shown, for the tail index"
        " 402. A loss is shown below what all but 5 % of random orders of the same values give (700"
        " and 510)."
    )
    # At the reference none is shown yet.
    level = replace(worth, rows=699.0, tail_rows=510.0)
    assert "for means 699, for the tail index no loss shown." in joined(
        worth_lines(level, 800, "values", 80)
    )
    both = joined(worth_lines(replace(level, rows=701.0), 800, "values", 80))
    assert "ones: no loss shown, neither for means nor for the tail index. A loss" in both
    assert worth_part(None) == {}
    tied = worth_part(replace(worth, extremes=None))
    assert tied["extremal_index"] is None
    assert tied["extremal_index_note"] == "ties leave too few of the largest values"
    assert tied["tail_effective_rows"] == 402
    assert tied["effective_rows_reference"] == 700
    assert tied["tail_effective_rows_reference"] == 510


def test_json_holds_sides_implied_index_and_the_whole_ranking(found: Diagnosis) -> None:
    part = diagnosis_part(report(found))
    ranked = part["co_movement"]["ranked"]
    assert ranked[0]["column"] == "shared.lag1"
    assert len(ranked) == 5
    assert [row["ratio"] for row in ranked] == sorted((r["ratio"] for r in ranked), reverse=True)
    assert part["co_movement"]["clear"] == 1
    square, dummy = part["scores"]["by_column"][1:3]
    assert [side["side"] for side in square["sides"]] == ["left", "right"]
    assert square["heavier_side"] in ("left", "right", "neither")
    x = found.columns.tails.gamma[0]
    assert square["implied"]["index"] == pytest.approx(1 / max(2 * x, found.errors.gamma), rel=1e-9)  # type: ignore[union-attr]
    # A dummy's score has the errors' tail: it has no sides of its own.
    assert dummy["sides"] == [] and "implied" not in dummy
    assert "implied" not in part["columns"]["by_column"][1]
    assert len(part["errors"]["opinions"]) == 2
    assert part["errors"]["effective_rows"] <= 600
