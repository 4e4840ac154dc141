"""First autocorrelations of columns: exact cases, known bias, which count as random walks."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from scantling.diagnostics.column_levels import first_autocorrelations, near_random_walks
from scantling.errors import InputError


def test_by_hand() -> None:
    """1, 2, 3, 4: (-1.5)(-0.5) + (-0.5)(0.5) + (0.5)(1.5) over 5; and -1, 1, ... is -(n-1)/n."""
    X = np.column_stack([[1.0, 2.0, 3.0, 4.0], [-1.0, 1.0, -1.0, 1.0]])
    assert first_autocorrelations(X) == pytest.approx([0.25, -0.75], abs=1e-14)


def test_units_do_not_matter() -> None:
    X = np.random.default_rng(1).standard_normal((200, 3)).cumsum(axis=0)
    found = first_autocorrelations(X)
    assert first_autocorrelations(1e-300 * X + 1e-299) == pytest.approx(found, rel=1e-6)
    assert np.all(np.abs(found) <= 1)
    assert not found.flags.writeable


def test_an_estimated_mean_pulls_it_down() -> None:
    """Kendall (1954), Biometrika 41: mean rho - (1 + 4 rho)/n; 1,000 columns, tolerance 0.01."""
    rng = np.random.default_rng(2)
    for rho in (0.0, 0.6):
        X = lfilter([1], [1, -rho], rng.standard_normal((150, 1000)), axis=0)[50:]
        assert first_autocorrelations(X).mean() == pytest.approx(
            rho - (1 + 4 * rho) / 100, abs=0.01
        )


def test_which_are_like_random_walks() -> None:
    assert near_random_walks(np.array([0.97, 0.949, -0.99, 0.95])) == (0, 3)
    assert near_random_walks(np.array([0.2])) == ()
    walks = np.random.default_rng(3).standard_normal((2000, 20)).cumsum(axis=0)
    assert near_random_walks(first_autocorrelations(walks)) == tuple(range(20))
    # A series of differences of one is none.
    assert near_random_walks(first_autocorrelations(np.diff(walks, axis=0))) == ()


def test_a_constant_column_is_refused() -> None:
    with pytest.raises(InputError, match="column 2 is constant"):
        first_autocorrelations(np.column_stack([np.arange(9.0), np.ones(9)]))
