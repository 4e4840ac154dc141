"""Inverses changed column by column against inverses made afresh."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scantling.simulation.kept_inverse import KeptInverse


def change(kept, rng, scores, weights, coming, leaving):
    """Let in up to `coming` columns and out up to `leaving`, for responses drawn at random."""
    replicates, p = scores.shape
    rows = np.sort(rng.choice(replicates, rng.integers(1, replicates + 1), replace=False))
    leaves = np.zeros((len(rows), kept.columns.shape[1]), dtype=bool)
    new, column = [], []
    for i, r in enumerate(rows):
        active = np.flatnonzero(kept.terms[r, 1])
        gone = rng.choice(active, min(len(active), rng.integers(leaving + 1)), replace=False)
        leaves[i, gone] = True
        absent = np.setdiff1d(np.arange(p), kept.columns[r, active])
        some = rng.choice(absent, min(len(absent), rng.integers(1, coming + 1)), replace=False)
        new += [i] * len(some)
        column += some.tolist()
    new, column = np.array(new, dtype=int), np.array(column, dtype=int)
    signs = rng.choice([-1.0, 1.0], len(new))
    own = np.array([scores[rows[new], column], signs * weights[column]])
    kept.exchange(rows, leaves, new, column, kept.products(rows[new], column), own)


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    replicates=st.integers(1, 6),
    p=st.integers(1, 25),
    changes=st.integers(1, 12),
    coming=st.integers(1, 6),
    leaving=st.integers(0, 4),
    seed=st.integers(0, 2**32 - 1),
)
def test_changed_and_fresh_inverses_agree(replicates, p, changes, coming, leaving, seed):
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((3 * p + 10, p))
    X /= np.sqrt((X**2).mean(axis=0))
    gram = X.T @ X / len(X)
    scores, weights = rng.standard_normal((replicates, p)), rng.uniform(0.5, 2.0, p)
    kept = KeptInverse(gram, replicates)
    for _ in range(changes):
        change(kept, rng, scores, weights, coming, leaving)
    assert not kept.broken.any()
    b = kept.at(np.full(replicates, 0.3))
    for r in range(replicates):
        place = np.flatnonzero(kept.terms[r, 1])
        at = kept.columns[r, place]
        assert len(set(at.tolist())) == len(at)
        fresh = np.linalg.inv(gram[np.ix_(at, at)])
        np.testing.assert_allclose(kept.inverse[r][np.ix_(place, place)], fresh, atol=1e-9)
        np.testing.assert_allclose(kept.terms[r, 0, place], scores[r, at])
        np.testing.assert_allclose(np.abs(kept.terms[r, 1, place]), weights[at])
        wanted = fresh @ (scores[r, at] - 0.3 * kept.terms[r, 1, place])
        np.testing.assert_allclose(b[r, place], wanted, atol=1e-8)
        free = np.setdiff1d(np.arange(len(kept.inverse[r])), place)
        assert not b[r, free].any() and not kept.inverse[r][free].any()
        assert not kept.inverse[r][:, free].any()


@pytest.mark.parametrize("columns", [[0, 1], [0, 2]])
@pytest.mark.parametrize("together", [True, False])
def test_columns_that_depend_on_each_other_are_marked(columns, together):
    X = np.random.default_rng(1).standard_normal((40, 3))
    X[:, 1] = X[:, 0]
    X /= np.sqrt((X**2).mean(axis=0))
    kept = KeptInverse(X.T @ X / 40, 2)
    for some in [columns] if together else [[columns[0]], [columns[1]]]:
        rows, column = np.array([1]), np.array(some)
        new = np.zeros(len(some), dtype=int)
        leaves = np.zeros((1, kept.columns.shape[1]), dtype=bool)
        beside = kept.products(rows[new], column)
        kept.exchange(rows, leaves, new, column, beside, np.ones((2, len(some))))
    assert kept.broken.tolist() == [False, columns == [0, 1]]
