"""Geometry of the columns: plain twins, factor counts, exact incoherence, bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import norm

from scantling.diagnostics import structure
from scantling.errors import InputError


def factor_panel(
    rng: np.random.Generator, n: int, p: int, factors: int, noise: np.ndarray
) -> np.ndarray:
    """Columns of which factors carry half of the variance; noise of variance 1."""
    common = rng.standard_normal((n, factors)) @ rng.standard_normal((factors, p))
    return common / np.sqrt(max(factors, 1)) + noise


@pytest.mark.parametrize("shape", [(60, 20), (30, 70), (40, 40)])
def test_geometry_agrees_with_the_correlation_matrix(shape: tuple[int, int]) -> None:
    rng = np.random.default_rng(1)
    X = rng.standard_normal(shape) + rng.standard_normal((shape[0], 1))
    got = structure.column_structure(X)
    correlation = np.corrcoef(X, rowvar=False)
    values = np.linalg.eigvalsh(correlation)
    if shape[1] < shape[0]:
        assert got.condition == pytest.approx(values[-1] / values[0], rel=1e-8)
        assert got.condition_note is None
    else:
        assert got.condition is None
        assert f"{shape[1]} columns on {shape[0]} rows" in str(got.condition_note)
    shares = values[values > 1e-10] / shape[1]
    assert got.effective_rank == pytest.approx(np.exp(-np.sum(shares * np.log(shares))), rel=1e-8)
    off = np.triu(np.abs(correlation), 1)
    assert got.largest_correlation == pytest.approx(off.max(), rel=1e-12)
    assert got.largest_pair == tuple(np.unravel_index(off.argmax(), off.shape))


def test_orthogonal_columns_have_condition_one_and_full_effective_rank() -> None:
    from scipy.linalg import hadamard

    X = hadamard(16)[:, 1:9] * np.arange(1, 9)
    got = structure.column_structure(X)
    assert got.condition == pytest.approx(1, abs=1e-12)
    assert got.effective_rank == pytest.approx(8, abs=1e-10)
    assert got.largest_correlation == pytest.approx(0, abs=1e-12)


def test_two_columns_of_known_correlation() -> None:
    """Correlation .6: eigenvalues 1.6 and .4, condition 4, entropy of (.8, .2)."""
    a, b = np.array([1.0, 1, -1, -1]), np.array([1.0, -1, 1, -1])
    got = structure.column_structure(np.column_stack([a, 0.6 * a + 0.8 * b]))
    assert got.condition == pytest.approx(4, abs=1e-12)
    assert got.effective_rank == pytest.approx(0.8**-0.8 * 0.2**-0.2, abs=1e-12)
    assert (got.largest_correlation, got.largest_pair) == (pytest.approx(0.6, abs=1e-12), (0, 1))


def test_a_single_column() -> None:
    got = structure.column_structure(np.arange(10.0)[:, None])
    assert (got.factors, got.factors_alternative) == (0, 0)
    assert (got.condition, got.effective_rank, got.leading_share) == (1.0, 1.0, 1.0)
    assert (got.largest_correlation, got.largest_pair) == (0.0, None)


def test_dependent_columns_have_no_condition_number() -> None:
    X = np.random.default_rng(2).standard_normal((50, 4))
    got = structure.column_structure(np.column_stack([X, X[:, 0] + X[:, 1]]))
    assert got.condition is None
    assert "linearly dependent" in str(got.condition_note)
    doubled = structure.column_structure(np.column_stack([X, -3 * X[:, 2] + 1]))
    assert doubled.largest_correlation == pytest.approx(1, abs=1e-12)
    assert doubled.largest_pair == (2, 4)


def test_blocks_do_not_change_the_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    X = np.random.default_rng(3).standard_t(3, (40, 53))
    whole = structure.column_structure(X)
    monkeypatch.setattr(structure, "CHUNK", 100)  # blocks of 10 columns, and of 2
    parts = structure.column_structure(X)
    assert parts.largest_pair == whole.largest_pair
    assert parts.largest_correlation == pytest.approx(whole.largest_correlation, rel=1e-12)
    assert (parts.factors, parts.leading_share) == (whole.factors, whole.leading_share)


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 10**6), scale=st.sampled_from([1e-120, 0.3, 1e120]))
def test_factor_counts_ignore_units_order_and_increasing_transforms(
    seed: int, scale: float
) -> None:
    rng = np.random.default_rng(seed)
    X = factor_panel(rng, 40, 15, 1, rng.standard_normal((40, 15)))
    base = structure.column_structure(X)
    bent = structure.column_structure(np.exp(X)[:, ::-1] * scale)
    assert (bent.factors, bent.factors_alternative) == (base.factors, base.factors_alternative)
    assert bent.leading_share == pytest.approx(base.leading_share, rel=1e-9)


def test_eigenvalue_ratio_finds_one_factor_under_t_2_5_noise() -> None:
    """N = 100, T = 250, r = 1: k = 1 in at least 98 %, simulated (200). Here 60 panels."""
    rng = np.random.default_rng(82)
    ratio = criterion = raw = 0
    for _ in range(60):
        noise = rng.standard_t(2.5, (250, 100)) / np.sqrt(5)
        X = factor_panel(rng, 250, 100, 1, noise)
        got = structure.column_structure(X)
        ratio += got.factors == 1
        criterion += got.factors_alternative == 1
        values = structure.spectrum(X - X.mean(axis=0))
        raw += structure.information_criterion(values, 250, 100) == 1
    assert ratio >= 59
    assert criterion >= 59
    # Negative control: neither scored nor standardised, wild columns pass for factors (.46,
    # simulated); tolerance 4 standard errors.
    assert raw / 60 == pytest.approx(0.46, abs=0.26)


@pytest.mark.parametrize("factors", [0, 3])
def test_both_criteria_find_the_number_of_factors(factors: int) -> None:
    rng = np.random.default_rng(4)
    for _ in range(10):
        X = factor_panel(rng, 250, 100, factors, rng.standard_t(2.5, (250, 100)) / np.sqrt(5))
        got = structure.column_structure(X)
        assert (got.factors, got.factors_alternative) == (factors, factors)
        scores = structure.standardised(structure.normal_scores(X), "X")
        shares = np.linalg.eigvalsh(np.corrcoef(scores, rowvar=False))[::-1] / 100
        assert got.leading_share == pytest.approx(shares[: max(1, factors)].sum(), rel=1e-9)
        assert (got.leading_share > 0.3) == (factors > 0)


def test_normal_scores_follow_the_ranks_and_share_ties() -> None:
    X = np.array([[3.0], [1.0], [1.0], [9.0]])
    expected = norm.ppf([0.625, 0.25, 0.25, 0.875])
    np.testing.assert_allclose(structure.normal_scores(X)[:, 0], expected, rtol=1e-12)
    # Bound at n = 100: 2.5758293, exact
    wide = structure.normal_scores(np.random.default_rng(5).standard_t(1, (100, 2)))
    assert wide.max() == pytest.approx(2.5758293, abs=1e-7)


def test_incoherence_is_the_median_over_supports_of_the_worst_row_sum() -> None:
    X = np.random.default_rng(6).standard_normal((30, 5)) @ (np.eye(5) + 0.3)
    correlation = np.corrcoef(X, rowvar=False)
    worst = [structure.irrepresentable(correlation, [j]).max() for j in range(5)]
    off = np.abs(correlation - np.eye(5)).max(axis=0)
    np.testing.assert_allclose(worst, off, rtol=1e-10)
    # Many supports of one column: the median of five nearly equally likely values.
    assert structure.incoherence(X, 1, 4001, 1) == pytest.approx(np.median(off), rel=1e-10)
    assert structure.incoherence(X, 2, 25, 1) == structure.incoherence(X, 2, 25, 1)


def test_incoherence_of_orthogonal_and_of_duplicated_columns() -> None:
    from scipy.linalg import hadamard

    X = hadamard(16)[:, 1:9].astype(float)
    assert structure.incoherence(X, 3, 11, 1) == pytest.approx(0, abs=1e-12)
    doubled = np.column_stack([X, X])
    # Seven of sixteen: some pair is usually inside, C_SS singular; otherwise a twin outside.
    assert structure.incoherence(doubled, 1, 11, 1) == pytest.approx(1, abs=1e-12)
    assert structure.incoherence(doubled, 13, 11, 1) == np.inf


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), size=st.integers(1, 4))
def test_sign_free_row_sum_is_the_largest_over_signs(seed: int, size: int) -> None:
    from itertools import product

    rng = np.random.default_rng(seed)
    correlation = np.corrcoef(rng.standard_normal((25, 7)), rowvar=False)
    support = rng.choice(7, size, replace=False)
    free = structure.irrepresentable(correlation, support)
    signed = [
        structure.irrepresentable(correlation, support, s) for s in product((-1, 1), repeat=size)
    ]
    np.testing.assert_allclose(free, np.max(signed, axis=0), rtol=1e-9)


def test_unusable_input_is_named() -> None:
    X = np.random.default_rng(7).standard_normal((20, 6))
    with pytest.raises(InputError, match=r"^X: .*column 3 is constant"):
        structure.column_structure(np.column_stack([X[:, :2], np.full(20, 1e9)]))
    with pytest.raises(InputError, match=r"^X: finite values are needed; row 1, column 1"):
        structure.column_structure(np.full((4, 2), np.nan))
    with pytest.raises(InputError, match=r"^X: at least 3 rows are needed; found 2"):
        structure.column_structure(X[:2])
    for size in (0, 6):
        with pytest.raises(InputError, match=rf"^support_size: 1 to 5 .* found {size}"):
            structure.incoherence(X, size, 10, 1)
    with pytest.raises(InputError, match=r"^supports: at least 1"):
        structure.incoherence(X, 2, 0, 1)
