"""Index of a score from its parents: by hand, and how it is held against the estimate."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from scantling.core.record import read_only
from scantling.diagnostics.column_tails import ColumnTails, column_tails
from scantling.diagnostics.implied_tails import (
    ImpliedTails,
    implied_score_tails,
    reconciled,
    widened,
)

ERRORS: Any = SimpleNamespace(gamma=0.25, low=1 / 0.35, high=1 / 0.15)


def tails(gammas: list[float], active: list[float] | None = None) -> ColumnTails:
    """Given gammas with ends 0.1 off."""
    gamma = np.array(gammas)
    base = column_tails(np.random.default_rng(1).standard_t(3, (60, gamma.size)), dependent=False)
    share = np.ones(gamma.size) if active is None else np.array(active)
    return replace(
        base,
        gamma=read_only(gamma),
        gamma_low=read_only(gamma - 0.1),
        gamma_high=read_only(gamma + 0.1),
        active_share=read_only(share),
    )


def implied(
    gammas: list[float],
    parents: list[tuple[int, ...]] | None = None,
    together: list[bool] | None = None,
    X: np.ndarray | None = None,
    active: list[float] | None = None,
) -> ImpliedTails:
    width = len(gammas)
    X = np.random.default_rng(2).standard_normal((400, width)) if X is None else X
    moving = np.zeros(width, dtype=bool) if together is None else np.array(together)
    return implied_score_tails(X, tails(gammas, active), ERRORS, moving, parents)


def test_independent_factors_have_the_heavier_index() -> None:
    found = implied([0.20, 0.40])
    assert found.gamma.tolist() == [0.25, 0.40]
    assert found.low == pytest.approx([0.15, 0.30])
    assert found.high == pytest.approx([0.35, 0.50])


def test_factors_that_move_together_add() -> None:
    found = implied([0.20, 0.40], together=[True, False])
    assert found.gamma == pytest.approx([0.45, 0.40])
    # Ends 0.1 off each: 0.1 sqrt(2) off together.
    assert found.low[0] == pytest.approx(0.45 - 0.1 * 2**0.5)
    assert found.high[0] == pytest.approx(0.45 + 0.1 * 2**0.5)
    assert found.together.tolist() == [True, False]


def test_powers_divide_the_index_whatever_the_columns_own_estimate() -> None:
    found = implied([0.20, 0.90, 0.90], parents=[(0,), (0, 0), (0, 0, 0)])
    assert found.gamma == pytest.approx([0.25, 0.40, 0.60])
    assert found.low == pytest.approx([0.15, 0.20, 0.30])


def test_a_product_of_columns_adds_where_they_move_together() -> None:
    rng = np.random.default_rng(3)
    scale = np.exp(rng.standard_normal(400))
    apart = rng.standard_normal((400, 3))
    shared = apart * np.column_stack([scale, scale, np.ones(400)])
    parents = [(0,), (1,), (0, 1)]
    assert implied([0.3, 0.2, 0.9], parents, X=apart).gamma[2] == pytest.approx(0.3)
    assert implied([0.3, 0.2, 0.9], parents, X=shared).gamma[2] == pytest.approx(0.5)


def test_sparse_and_unassessed_columns_add_nothing() -> None:
    found = implied([np.nan, 0.9, 0.4], active=[0.5, 0.01, 1.0], parents=[(0,), (1,), (0, 2)])
    assert found.gamma == pytest.approx([0.25, 0.25, 0.40])
    assert found.high == pytest.approx([0.35, 0.35, 0.50])


def test_intervals_reach_over_both_but_only_where_asked() -> None:
    own = tails([0.6, 0.6])
    found = ImpliedTails(
        gamma=np.array([0.3, 0.3]), low=np.array([0.2, 0.2]), high=np.array([0.4, 0.8]),
        together=np.zeros(2, dtype=bool),
    )  # fmt: skip
    wide = widened(own, found, np.array([True, False]))
    assert wide.gamma.tolist() == own.gamma.tolist()
    assert wide.gamma_low == pytest.approx([0.2, 0.5])
    assert wide.gamma_high == pytest.approx([0.7, 0.7])
    assert widened(own, found, np.array([True, True])).gamma_high[1] == pytest.approx(0.8)


@pytest.mark.parametrize(
    ("answer", "low", "together", "expected"),
    [
        (-1, 0.51, False, -1),  # both beyond order 2
        (-1, 0.49, False, 0),  # the parents leave room for a variance
        (-1, 0.49, True, 0),
        (0, 0.80, True, 0),
        (1, 0.51, True, 0),  # the parents deny it
        (1, 0.51, False, 1),  # but not where column and error are unconnected
        (1, 0.40, True, 1),
    ],
)
def test_answers_stand_only_where_the_parents_do_not_object(
    answer: int, low: float, together: bool, expected: int
) -> None:
    found = ImpliedTails(
        gamma=np.array([low + 0.1]), low=np.array([low]), high=np.array([low + 0.2]),
        together=np.array([together]),
    )  # fmt: skip
    moments = {2: np.array([answer])}
    assert reconciled(moments, found, np.array([True]))[2].tolist() == [expected]
    assert reconciled(moments, found, np.array([False]))[2].tolist() == [answer]
    assert moments[2].tolist() == [answer]
