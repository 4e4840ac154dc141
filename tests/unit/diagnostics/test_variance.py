"""Heteroskedasticity and co-movement: plain twins, invariance, size, power, bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import spearmanr

from scantling.core.streams import stream
from scantling.diagnostics import dependence, variance
from scantling.errors import InputError


def sample(seed: int, n: int = 120, m: int = 3) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.standard_t(3, n), rng.standard_normal((n, m))


def r_squared(y: np.ndarray, Z: np.ndarray) -> float:
    """Textbook R^2 with a constant, by least squares."""
    design = np.column_stack([np.ones(y.size), Z])
    rest = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    return 1 - rest @ rest / np.sum((y - y.mean()) ** 2)


# The classical tests.


def test_koenker_is_n_r_squared_of_the_squares() -> None:
    u, Z = sample(1)
    assert variance.koenker(u, Z).statistic == pytest.approx(u.size * r_squared(u**2, Z), rel=1e-10)


def test_white_is_n_r_squared_on_squares_and_products() -> None:
    u, Z = sample(2)
    products = [Z[:, i] * Z[:, j] for i in range(3) for j in range(i, 3)]
    expected = u.size * r_squared(u**2, np.column_stack([Z, *products]))
    assert variance.white(u, Z).statistic == pytest.approx(expected, rel=1e-9)


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    scale=st.sampled_from([1e-150, 1e-3, 7.0, 1e150]),
    shift=st.sampled_from([0.0, -4.0, 1e5]),
)
def test_tests_do_not_depend_on_units(seed: int, scale: float, shift: float) -> None:
    u, Z = sample(seed, n=60)
    mixed = (Z @ np.array([[1.0, 2.0, 0.0], [0.0, 1.0, 0.0], [0.5, 0.0, 3.0]])) * 50 + shift
    for test in (variance.koenker, variance.white):
        assert test(u * scale, mixed).statistic == pytest.approx(test(u, Z).statistic, rel=1e-6)
    first = variance.glejser_permutation(u, Z, seed=3, draws=39)
    second = variance.glejser_permutation(u * scale, mixed, seed=3, draws=39)
    assert second.statistic == pytest.approx(first.statistic, rel=1e-6)
    assert second.p_value == first.p_value


def test_collinear_and_constant_suspects_do_not_count() -> None:
    u, Z = sample(4)
    padded = np.column_stack([Z, np.full(u.size, 3.0), Z[:, 0] - 2 * Z[:, 1]])
    for test in (variance.koenker, variance.white):
        assert test(u, padded).p_value == pytest.approx(test(u, Z).p_value, rel=1e-8)
    # chi2 with 3 degrees of freedom, not 5
    from scipy.stats import chi2

    result = variance.koenker(u, padded)
    assert result.p_value == pytest.approx(chi2.sf(result.statistic, 3), rel=1e-10)


def test_what_each_test_needs_is_recorded() -> None:
    u, Z = sample(5)
    assert variance.koenker(u, Z).needs_moment == 4
    assert variance.white(u, Z).needs_moment == 4
    assert variance.glejser_permutation(u, Z, seed=1, draws=19).needs_moment == 2
    result = variance.co_movement_test(Z, u, 1, draws=19)
    assert (result.needs_moment, result.method) == (0, "permutation")


def test_errors_of_one_size_are_no_evidence() -> None:
    signs = np.resize([1.0, -1.0, -1.0, 1.0], 40)
    Z = np.random.default_rng(6).standard_normal((40, 2))
    for result in (
        variance.koenker(signs, Z),
        variance.white(signs, Z),
        variance.glejser_permutation(signs, Z, seed=1),
    ):
        assert (result.statistic, result.p_value) == (0.0, 1.0)


# The permutation test.


@pytest.mark.parametrize("block", [None, 7])
def test_glejser_agrees_with_its_plain_twin(block: int | None) -> None:
    u, Z = sample(7, n=50)
    size = np.abs(u - np.median(u))
    rng = stream(11, "Glejser permutation")
    draws = list(np.concatenate(list(dependence.permuted(size, 99, rng, block))))
    observed = u.size * r_squared(size, Z)
    exceeding = sum(u.size * r_squared(draw, Z) >= observed - 1e-9 for draw in draws)
    result = variance.glejser_permutation(u, Z, seed=11, draws=99, block=block)
    assert result.statistic == pytest.approx(observed, rel=1e-10)
    assert result.p_value == (1 + exceeding) / 100


def test_glejser_p_value_does_not_depend_on_the_chunk(monkeypatch: pytest.MonkeyPatch) -> None:
    u, Z = sample(8)
    for block in (None, 11):
        whole = variance.glejser_permutation(u, Z, seed=5, draws=199, block=block)
        with monkeypatch.context() as patch:
            patch.setattr(dependence, "CHUNK", 1000)
            parts = variance.glejser_permutation(u, Z, seed=5, draws=199, block=block)
        assert parts == whole


def test_glejser_repeats_from_its_seed_and_leaves_the_global_state() -> None:
    u, Z = sample(9)
    before = np.random.get_state()[1].copy()  # noqa: NPY002
    first = variance.glejser_permutation(u, Z, seed=1)
    assert variance.glejser_permutation(u, Z, seed=1) == first
    others = {variance.glejser_permutation(u, Z, seed=s).p_value for s in range(2, 8)}
    assert len(others) > 1
    assert np.array_equal(np.random.get_state()[1], before)  # noqa: NPY002


def test_size_of_the_permutation_and_of_whites_test_under_t_2_5() -> None:
    """t(2.5), n = 250, 3 normal columns, nominal 5 %.

    Permutation: .05, exact under exchangeability; tolerance .02 (4 standard errors at 2000
    replications, as stated for it). White's chi2: about .108, simulated (2000); tolerance .03.
    """
    rng = np.random.default_rng(75)
    replications = 1000
    permutation = white = 0
    for replicate in range(replications):
        u, Z = rng.standard_t(2.5, 250), rng.standard_normal((250, 3))
        result = variance.glejser_permutation(u, Z, seed=replicate, draws=99)
        permutation += result.p_value <= 0.05
        white += variance.white(u, Z).p_value <= 0.05
    assert permutation / replications == pytest.approx(0.05, abs=0.02)
    assert white / replications == pytest.approx(0.108, abs=0.03)


def test_power_under_t_2_5_exceeds_that_of_the_squares() -> None:
    """Scale exp(z/4), n = 250: .69 against .34, simulated (500); tolerance 4 standard errors."""
    rng = np.random.default_rng(76)
    replications = 300
    absolute = squares = 0
    for replicate in range(replications):
        Z = rng.standard_normal((250, 3))
        u = rng.standard_t(2.5, 250) * np.exp(Z[:, 0] / 4)
        result = variance.glejser_permutation(u, Z, seed=replicate, draws=99)
        absolute += result.p_value <= 0.05
        squares += variance.koenker(u, Z).p_value <= 0.05
    assert absolute / replications == pytest.approx(0.69, abs=0.11)
    assert squares / replications == pytest.approx(0.34, abs=0.11)


def test_blocks_restore_the_size_when_scale_and_suspect_are_both_persistent() -> None:
    """Independent persistent log-scale and Z: plain permutation rejects far too often."""
    from scipy.signal import lfilter

    rng = np.random.default_rng(77)
    plain = blocked = 0
    replications = 200
    for replicate in range(replications):
        waves = lfilter([1.0], [1.0, -0.95], rng.standard_normal((2, 600)), axis=1)[:, 100:]
        u = rng.standard_normal(500) * np.exp(0.3 * waves[0])
        Z = waves[1][:, None]
        one = variance.glejser_permutation(u, Z, seed=replicate, draws=99)
        two = variance.glejser_permutation(u, Z, seed=replicate, draws=99, block=42)
        plain += one.p_value <= 0.05
        blocked += two.p_value <= 0.05
    assert plain / replications > 0.3
    assert blocked / replications < 0.12


# Which columns are suspected.


def test_suspects_are_the_fitted_values_and_the_selected_columns() -> None:
    rng = np.random.default_rng(12)
    X = rng.standard_normal((100, 9))
    fitted = X[:, 2] + rng.standard_normal(100)
    Z = variance.scale_suspects(X, fitted, (4, 1))
    assert Z.shape == (100, 3)
    for got, source in zip(Z.T, (fitted, X[:, 4], X[:, 1]), strict=True):
        expected = (source - source.mean()) / source.std()
        np.testing.assert_allclose(got, expected, atol=1e-12)


def test_suspects_drop_what_the_fitted_values_hold_already() -> None:
    X = np.random.default_rng(13).standard_normal((100, 9))
    Z = variance.scale_suspects(X, 1 + X[:, 4] - 2 * X[:, 1], (4, 1))
    assert Z.shape == (100, 2)
    assert np.linalg.cond(Z) < 10


def test_suspects_are_at_most_six() -> None:
    X = np.random.default_rng(14).standard_normal((100, 20))
    assert variance.scale_suspects(X, X[:, 19], range(12)).shape == (100, 6)


@pytest.mark.parametrize("shape", [(80, 12), (40, 90)])
def test_without_selection_three_principal_components_stand_in(shape: tuple[int, int]) -> None:
    rng = np.random.default_rng(15)
    X = rng.standard_normal(shape) + 2 * rng.standard_normal((shape[0], 1))
    Z = variance.scale_suspects(X, np.full(shape[0], 0.3), ())
    standard = (X - X.mean(axis=0)) / X.std(axis=0)
    left, _, _ = np.linalg.svd(standard, full_matrices=False)
    assert Z.shape == (shape[0], 3)
    overlap = np.abs(left[:, :3].T @ Z) / np.sqrt(shape[0])
    np.testing.assert_allclose(overlap, np.eye(3), atol=1e-8)


# Co-movement.


def test_co_movement_is_the_ratio_of_score_sd() -> None:
    rng = np.random.default_rng(16)
    X = rng.standard_normal((300, 5)) + 4
    u = rng.standard_t(4, 300)
    x, e = X - X.mean(axis=0), u - u.mean()
    expected = np.sqrt(
        np.mean(x**2 * e[:, None] ** 2, axis=0) / np.mean(x**2, axis=0) / np.mean(e**2)
    )
    np.testing.assert_allclose(variance.co_movement(X, u), expected, rtol=1e-12)


def test_co_movement_of_a_shared_scale() -> None:
    """x = v a, e = v b with v^2 lognormal(s): ratio exp(s^2/2), here 1.133 (exact)."""
    rng = np.random.default_rng(17)
    n = 400_000
    v = np.exp(rng.standard_normal(n) / 4)
    X = (v * rng.standard_normal(n))[:, None]
    assert variance.co_movement(X, v * rng.standard_normal(n))[0] == pytest.approx(
        np.exp(0.125), abs=0.02
    )


def test_rank_co_movement_is_spearman_of_absolute_deviations() -> None:
    rng = np.random.default_rng(18)
    X = np.round(rng.standard_t(3, (150, 6)), 1)  # with ties
    u = rng.standard_t(3, 150)
    got = variance.rank_co_movement(X, u)
    # Rounded, since the two middle values lie equally far from the median between them.
    error = np.round(np.abs(u - np.median(u)), 9)
    for value, column in zip(got, X.T, strict=True):
        deviation = np.round(np.abs(column - np.median(column)), 9)
        assert value == pytest.approx(spearmanr(deviation, error)[0], abs=1e-12)
    result = variance.co_movement_test(X, u, 1, draws=19)
    assert result.statistic == pytest.approx(got.mean(), abs=1e-12)


def test_rank_co_movement_ignores_one_wild_row_and_a_balanced_dummy() -> None:
    rng = np.random.default_rng(19)
    X = np.column_stack([rng.standard_normal(200), np.resize([0.0, 1.0], 200)])
    u = rng.standard_normal(200)
    before = variance.rank_co_movement(X, u)
    X[7, 0] = u[7] = 1e6
    after = variance.rank_co_movement(X, u)
    assert abs(after[0] - before[0]) < 0.03
    assert before[1] == 0.0
    assert variance.co_movement(X, u)[0] == pytest.approx(np.sqrt(200), rel=0.01)


def test_co_movement_test_finds_shared_volatility_and_keeps_its_size() -> None:
    rng = np.random.default_rng(20)
    found = false = 0
    replications = 150
    for replicate in range(replications):
        v = np.exp(rng.standard_normal(250) / 2)
        X, e = rng.standard_t(2.5, (250, 8)), rng.standard_t(2.5, 250)
        found += variance.co_movement_test(X * v[:, None], e * v, replicate, 99).p_value <= 0.05
        false += variance.co_movement_test(X * v[:, None], e, replicate, 99).p_value <= 0.05
    assert found / replications > 0.9
    assert false / replications < 0.05 + 4 * np.sqrt(0.05 * 0.95 / replications)


def test_co_movement_does_not_depend_on_column_blocks(monkeypatch: pytest.MonkeyPatch) -> None:
    from scantling.diagnostics import structure

    rng = np.random.default_rng(21)
    X, u = rng.standard_t(3, (60, 30)), rng.standard_t(3, 60)
    whole = variance.co_movement(X, u), variance.rank_co_movement(X, u)
    monkeypatch.setattr(structure, "CHUNK", 240)
    np.testing.assert_allclose(variance.co_movement(X, u), whole[0], rtol=1e-14)
    np.testing.assert_allclose(variance.rank_co_movement(X, u), whole[1], atol=1e-14)


# Bad input.


@pytest.mark.parametrize("test", [variance.koenker, variance.white])
def test_unusable_input_is_named(test) -> None:  # type: ignore[no-untyped-def]
    u, Z = sample(22, n=30)
    with pytest.raises(InputError, match=r"^u: values that vary"):
        test(np.ones(30), Z)
    with pytest.raises(InputError, match=r"^Z: as many rows as u \(30\) are needed; found 29"):
        test(u, Z[:-1])
    with pytest.raises(InputError, match=r"^Z: a column that varies"):
        test(u, np.ones((30, 2)))
    with pytest.raises(InputError, match=r"^u: finite"):
        test(np.where(np.arange(30) == 3, np.nan, u), Z)
    with pytest.raises(InputError, match=r"^Z: "):
        test(u, np.random.default_rng(0).standard_normal((30, 40)))


def test_whites_test_needs_more_rows_than_terms() -> None:
    u, Z = sample(23, n=28, m=6)
    with pytest.raises(InputError, match=r"29 rows; found 28"):
        variance.white(u, Z)


def test_permutation_arguments_are_checked() -> None:
    u, Z = sample(24, n=30)
    with pytest.raises(InputError, match=r"^draws: "):
        variance.glejser_permutation(u, Z, seed=1, draws=0)
    for block in (0, 16):
        with pytest.raises(InputError, match=rf"^block: 1 to 15 rows are needed; found {block}"):
            variance.glejser_permutation(u, Z, seed=1, block=block)


def test_column_arguments_are_checked() -> None:
    u, X = sample(25, n=30)
    X[:, 1] = 2.0
    for function in (variance.co_movement, variance.rank_co_movement):
        with pytest.raises(InputError, match=r"^X: .*column 2 is constant"):
            function(X, u)
    with pytest.raises(InputError, match=r"^X: .*column 2 is constant"):
        variance.co_movement_test(X, u, 1)
    with pytest.raises(InputError, match=r"^u: values that vary"):
        variance.co_movement(X, np.zeros(30))
    with pytest.raises(InputError, match=r"^selected: indices from 0 to 2 are needed; found 3"):
        variance.scale_suspects(X, u, (0, 3))
    with pytest.raises(InputError, match=r"^X: a column that varies"):
        variance.scale_suspects(np.ones((30, 2)), np.ones(30), ())
