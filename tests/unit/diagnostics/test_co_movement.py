"""Columns ranked by how large they are where the errors are: by hand, by twin, by property."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scantling.diagnostics.co_movement import (
    DRAWS,
    GROUPS,
    CoMovement,
    capped_squares,
    column_co_movement,
)


def standard(columns: np.ndarray) -> np.ndarray:
    return np.asarray((columns - columns.mean(axis=0)) / columns.std(axis=0))


def found(
    X: np.ndarray, e: np.ndarray, *, block: int | None = None, free: tuple[int, ...] = ()
) -> CoMovement:
    uncapped = np.isin(np.arange(X.shape[1]), free)
    return column_co_movement(X, e - e.mean(), uncapped, seed=3, block=block)


def test_the_largest_hundredth_is_capped_at_the_next_size() -> None:
    column = np.arange(1.0, 201.0)[:, None]
    squares = capped_squares(column, np.array([False]))[:, 0]
    by_hand = np.minimum(column[:, 0], 198.0) ** 2
    assert squares == pytest.approx(by_hand / by_hand.mean())
    plain = capped_squares(column, np.array([True]))[:, 0]
    assert plain == pytest.approx(column[:, 0] ** 2 / np.mean(column**2))


def test_the_ratio_and_its_error_are_those_of_their_plain_twin() -> None:
    rng = np.random.default_rng(1)
    X, e = standard(rng.standard_t(4, (300, 3))), rng.standard_t(4, 300)
    e -= e.mean()

    def ratio(rows: np.ndarray) -> np.ndarray:
        def capped(values: np.ndarray) -> np.ndarray:
            size = np.abs(values)
            return np.asarray(np.minimum(size, np.sort(size)[-1 - int(np.ceil(rows.size / 100))]))

        out = []
        for j in range(3):
            a, b = capped(X[rows, j]) ** 2, capped(e[rows]) ** 2
            out.append(np.sqrt(np.mean(a * b) / a.mean() / b.mean()))
        return np.array(out)

    rows = np.arange(300)
    expected = ratio(rows)
    without = np.log([ratio(rows[rows * GROUPS // 300 != g]) for g in range(GROUPS)])
    error = np.sqrt((GROUPS - 1) * without.var(axis=0))
    ours = found(X, e)
    assert ours.ratio == pytest.approx(expected, rel=1e-12)
    assert np.log(ours.high / ours.low) == pytest.approx(2 * 1.729133 * error, rel=1e-6)
    assert np.sqrt(ours.low * ours.high) == pytest.approx(ours.ratio)
    measured = np.sqrt(np.mean(X**2 * e[:, None] ** 2, axis=0) / np.mean(e**2))
    assert ours.measured == pytest.approx(measured)


def test_a_column_that_shares_the_errors_scale_comes_first_and_is_clear() -> None:
    rng = np.random.default_rng(2)
    scale = np.exp(0.7 * rng.standard_normal(800))
    others = rng.standard_normal((800, 20))
    shared = scale * rng.standard_normal(800)
    ours = found(standard(np.column_stack([others, shared])), scale * rng.standard_normal(800))
    assert ours.ranked[0] == 20
    assert np.flatnonzero(ours.clear).tolist() == [20]
    assert ours.low[20] > 1.1
    assert ours.family_p_value[20] == 1 / (DRAWS + 1)
    assert np.all(ours.family_p_value >= ours.p_value - 0.03)


def test_one_row_does_not_decide() -> None:
    """A shock that falls on a column's outlier: measured 5 times, with caps no connection."""
    rng = np.random.default_rng(4)
    X, e = rng.standard_normal((500, 4)), rng.standard_normal(500)
    X[100, 0], e[100] = 40.0, 40.0
    ours = found(standard(X), e)
    assert ours.measured[0] > 5
    assert ours.ratio[0] == pytest.approx(1, abs=0.15)
    assert not ours.clear.any()


def test_the_few_rows_of_a_sparse_column_are_kept_if_asked() -> None:
    rng = np.random.default_rng(5)
    sparse = np.zeros(600)
    sparse[:4] = 1
    e = rng.standard_normal(600)
    e[:4] = 3.0
    X = standard(np.column_stack([sparse, rng.standard_normal(600)]))
    ours = found(X, e, free=(0,))
    assert ours.ratio[0] > 2
    assert ours.p_value[0] <= 0.05


@given(
    scale=st.floats(1e-3, 1e3),
    signs=st.lists(st.sampled_from([-1.0, 1.0]), min_size=3, max_size=3),
    block=st.sampled_from([None, 10]),
)
def test_units_and_signs_do_not_matter(scale: float, signs: list[float], block: int | None) -> None:
    rng = np.random.default_rng(6)
    X, e = standard(rng.standard_t(3, (120, 3))), rng.standard_t(3, 120)
    plain, changed = found(X, e, block=block), found(X * signs, scale * e, block=block)
    for name in ("ratio", "low", "high", "measured", "p_value", "family_p_value"):
        assert getattr(changed, name) == pytest.approx(getattr(plain, name), rel=1e-9)


def test_how_many_columns_are_worked_on_at_once_does_not_matter(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    rng = np.random.default_rng(7)
    X, e = standard(rng.standard_t(4, (100, 9))), rng.standard_t(4, 100)
    whole = found(X, e)
    monkeypatch.setattr("scantling.diagnostics.structure.CHUNK", 200)
    parts = found(X, e)
    for name in ("ratio", "p_value", "family_p_value"):
        assert getattr(parts, name) == pytest.approx(getattr(whole, name), rel=1e-12)


def test_a_column_active_in_one_stretch_has_the_widest_interval() -> None:
    rng = np.random.default_rng(8)
    pair = np.zeros(200)
    pair[[3, 4]] = 1, -1
    X = standard(np.column_stack([pair, rng.standard_normal(200)]))
    ours = found(X, rng.standard_t(3, 200), free=(0,))
    assert ours.high[0] / ours.ratio[0] == pytest.approx(1000)
    assert all(np.isfinite(getattr(ours, name)).all() for name in ("ratio", "low", "high"))
