"""The case, its twin, its drawn laws and the grid of column counts."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from scantling.design.spec import TargetSpec
from scantling.law.families import ErrorLaw, student_law
from scantling.law.fit import fit_law
from scantling.planning.case import LAW_DRAWS, Case, column_grid, draw_laws


def case_of(law: ErrorLaw) -> Case:
    return Case(
        X=np.ones((40, 7)), law=law, law_draws=(law,), response_sd=2.0, residual_sd=1.7,
        target=TargetSpec(), rule="plug-in", replicates=100, seed=1,
    )  # fmt: skip


def test_rows_and_columns_are_the_tables():
    case = case_of(student_law(5))
    assert (case.rows, case.columns) == (40, 7)


def test_the_twin_is_normal_and_has_the_laws_variance():
    twin = case_of(student_law(5, sd=3.0)).twin
    assert twin.family == "normal"
    assert twin.sd == pytest.approx(3.0, rel=1e-12)
    assert twin.volatility is None
    draws = twin.draw_given_path(40, 20_000, np.random.default_rng(0))
    assert draws.std() == pytest.approx(3.0, rel=0.01)


def test_a_law_without_variance_has_a_twin_as_spread_as_the_residuals():
    assert case_of(student_law(1.5)).twin.sd == pytest.approx(1.7)


def test_law_draws_are_fifty_repeat_and_spread_about_the_fit():
    law = fit_law(np.random.default_rng(3).standard_t(4, 400))
    draws = draw_laws(law, 9)
    assert len(draws) == LAW_DRAWS == 50
    assert [d.df for d in draws] == [d.df for d in draw_laws(law, 9)]
    assert [d.df for d in draws] != [d.df for d in draw_laws(law, 10)]
    assert len({d.df for d in draws}) > 5
    assert min(d.df for d in draws) < law.df < max(d.df for d in draws)


def test_a_stated_law_is_its_own_only_draw():
    law = student_law(4)
    assert set(draw_laws(law, 1)) == {law}


@pytest.mark.parametrize("most", [1, 2, 7, 31, 800, 100_000])
def test_the_grid_runs_from_the_fewest_to_all_in_even_log_steps(most):
    grid = column_grid(most)
    assert grid[0] == 1
    assert grid[-1] == most
    assert all(a < b for a, b in itertools.pairwise(grid))
    wide = [b / a for a, b in itertools.pairwise(grid) if a > 50]
    assert all(r == pytest.approx(most ** (1 / 31), rel=0.03) for r in wide)


def test_the_grid_of_few_columns_is_those_columns():
    assert column_grid(5, fewest=5).tolist() == [5]
    assert column_grid(3, fewest=8).tolist() == [3]
    grid = column_grid(90, fewest=10, points=3)
    assert grid.tolist() == [10, round(math.sqrt(900)), 90]
