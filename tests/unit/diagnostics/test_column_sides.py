"""Left and right tails of many series."""

from __future__ import annotations

import numpy as np

from scantling.diagnostics.column_sides import column_sides
from scantling.diagnostics.tail_index import tail_index


def test_each_side_is_that_of_the_single_series() -> None:
    series = np.random.default_rng(1).standard_t(3, (600, 3))
    found = column_sides(series, dependent=True)
    assert found is not None
    for j in range(3):
        for name in ("left", "right"):
            single = tail_index(series[:, j], side=name)
            assert np.isclose(getattr(found, name).gamma[j], single.gamma, rtol=1e-12)


def test_the_heavier_side_is_named_and_changes_with_the_sign() -> None:
    """Pareto gains of index 1.3 over normal losses; the third series is symmetric."""
    rng = np.random.default_rng(2)
    gains, losses = rng.pareto(1.3, (3000, 2)), -np.abs(rng.standard_normal((3000, 2)))
    skewed = np.where(rng.random((3000, 2)) < 0.5, gains, losses) * [1, -1]
    series = np.column_stack([skewed, rng.standard_t(3, 3000)])
    found = column_sides(series, dependent=True)
    assert found is not None and found.heavier.tolist() == [1, -1, 0]
    mirrored = column_sides(-series, dependent=True)
    assert mirrored is not None and mirrored.heavier.tolist() == [-1, 1, 0]


def test_series_without_an_index_are_not_told_apart() -> None:
    rng = np.random.default_rng(3)
    series = np.column_stack([rng.random(600) < 0.5, rng.standard_normal(600)]).astype(float)
    found = column_sides(series, dependent=False)
    assert found is not None
    assert not found.left.assessed[0] and found.left.assessed[1]
    assert found.heavier[0] == 0


def test_below_500_rows_sides_are_not_told_apart() -> None:
    assert column_sides(np.random.default_rng(4).standard_t(3, (499, 2)), dependent=True) is None


def test_few_families_of_symmetric_series_have_one_called_heavier() -> None:
    """30 t(3) series of 500 rows: at most 5 % nominal, 2.5 % found of 120; 5 of 60 are two errors
    above that."""
    rng = np.random.default_rng(5)
    called = 0
    for _ in range(60):
        found = column_sides(rng.standard_t(3, (500, 30)), dependent=True)
        assert found is not None
        called += bool(np.any(found.heavier))
    assert called <= 5
