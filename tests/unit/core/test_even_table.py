"""Looking functions up: exact on straight lines and at the nodes, held beyond the ends."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scantling.core.even_table import EvenTable


@given(
    st.floats(-5, 5), st.floats(-3, 3),
    st.lists(st.floats(-7.99, 7.99), min_size=1, max_size=20),
)  # fmt: skip
def test_straight_lines_are_exact(slope: float, level: float, at: list[float]) -> None:
    table = EvenTable.of(lambda z: level + slope * z, 8.0, 64)
    x = np.array(at)
    assert table(x) == pytest.approx(level + slope * x, abs=1e-12)


def test_error_falls_with_the_square_of_the_step() -> None:
    x = np.linspace(-7, 7, 1001)
    wrong = [np.abs(EvenTable.of(np.sin, 8.0, cells)(x) - np.sin(x)).max() for cells in (64, 256)]
    # Linear interpolation: at most h^2/8 times the second derivative, here 1.
    assert wrong[0] <= (16 / 64) ** 2 / 8
    assert wrong[1] <= (16 / 256) ** 2 / 8
    assert wrong[0] / wrong[1] == pytest.approx(16, rel=0.1)


def test_beyond_the_ends_the_end_values_hold_and_shapes_are_kept() -> None:
    table = EvenTable.of(lambda z: z**3, 2.0, 10)
    x = np.array([[-50.0, -2.0, 0.0], [2.0, 2.1, 1e9]])
    assert table(x) == pytest.approx(np.array([[-8.0, -8.0, 0.0], [8.0, 8.0, 8.0]]), abs=1e-12)
    assert x[0, 0] == -50.0
