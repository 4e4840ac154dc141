"""Sentences and JSON of the diagnosis: every number with what it means, at 80 columns."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.diagnostics.battery import Diagnosis, diagnose
from scantling.diagnostics.error_findings import Worth
from scantling.diagnostics.extremes import extreme_clustering
from scantling.diagnostics.residuals import Residuals
from scantling.report.dependence_section import co_movement, variance, worth_lines
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
    assert "Hill, largest 5 %: index" in words and "which agrees." in words
    assert "index above 50 (90 % above 50), which disagrees: rely on what both" in words


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
    worth = Worth(extremes=extreme_clustering(values), rows=800.0, tail_rows=402.0)
    words = joined(worth_lines(worth, 800, "values", 80))
    assert words.startswith("Extremes come in clusters of ")
    assert words.endswith(
        "For means these 800 values are worth 800 independent ones, for the tail index 402."
    )
    assert worth_part(None) == {}
    tied = worth_part(replace(worth, extremes=None))
    assert tied["extremal_index"] is None
    assert tied["extremal_index_note"] == "ties leave too few of the largest values"
    assert tied["tail_effective_rows"] == 402


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
