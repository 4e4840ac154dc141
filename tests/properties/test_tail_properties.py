"""Invariance of tail estimates, and answers or refusals for any finite input."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from scantling.diagnostics.column_tails import column_tails
from scantling.diagnostics.moments import moment_exists
from scantling.diagnostics.tail_index import TailIndex, tail_index
from scantling.errors import InputError
from scantling.law.fit import fit_law

ESTIMATES = ("gamma", "gamma_error", "hill_gamma", "hill_error", "p_value")
ORDER_FREE = ("gamma", "hill_gamma", "p_value")


def same(first: TailIndex, second: TailIndex, names: tuple[str, ...] = ESTIMATES) -> None:
    for name in names:
        expected = pytest.approx(getattr(first, name), rel=1e-6, abs=1e-9)
        assert getattr(second, name) == expected, name


@st.composite
def samples(draw: st.DrawFn, sizes: tuple[int, ...] = (40, 61, 150)) -> np.ndarray:
    n = draw(st.sampled_from(sizes))
    rng = np.random.default_rng(draw(st.integers(0, 10**6)))
    df = draw(st.sampled_from([1.0, 2.5, 4.0, 30.0]))
    skew = draw(st.sampled_from([0.0, 0.5]))
    drawn = rng.standard_t(df, n)
    return np.asarray(np.where(drawn > 0, drawn * (1 + skew), drawn))


@settings(max_examples=40, deadline=None)
@given(x=samples(), factor=st.sampled_from([1e-300, 1e-20, 0.3, 17.0, 1e20, 1e300]),
       side=st.sampled_from(["both", "left", "right"]))  # fmt: skip
def test_scale_does_not_matter(x: np.ndarray, factor: float, side: str) -> None:
    same(tail_index(x, side=side), tail_index(factor * x, side=side))


@settings(max_examples=25, deadline=None)
@given(x=samples(), shift=st.sampled_from([-3.0, 0.7, 100.0]))
def test_location_does_not_matter(x: np.ndarray, shift: float) -> None:
    same(tail_index(x), tail_index(x + shift))


@settings(max_examples=25, deadline=None)
@given(x=samples())
def test_a_change_of_sign_swaps_the_sides(x: np.ndarray) -> None:
    same(tail_index(x), tail_index(-x))
    same(tail_index(x, side="left"), tail_index(-x, side="right"))
    same(tail_index(x, side="right"), tail_index(-x, side="left"))


@settings(max_examples=25, deadline=None)
@given(x=samples(), seed=st.integers(0, 10**6))
def test_the_point_estimate_does_not_depend_on_the_order(x: np.ndarray, seed: int) -> None:
    shuffled = np.random.default_rng(seed).permutation(x)
    same(tail_index(x), tail_index(shuffled), ORDER_FREE)


@settings(max_examples=25, deadline=None)
@given(x=samples(), factor=st.sampled_from([-2.0, 1e-200, 1e200]))
def test_columns_share_these_properties(x: np.ndarray, factor: float) -> None:
    many = column_tails(np.column_stack([x, factor * x, -x]), dependent=True)
    for name in ("gamma", "error", "hill_gamma", "hill_error", "p_value"):
        values = getattr(many, name)
        assert values == pytest.approx(np.full(3, values[0]), rel=1e-6, abs=1e-9)
    assert many.gamma[0] == pytest.approx(tail_index(x).gamma, rel=1e-9)


@settings(max_examples=25, deadline=None)
@given(x=samples())
def test_the_interval_holds_the_estimate_and_moments_are_nested(x: np.ndarray) -> None:
    found = tail_index(x)
    assert found.low <= found.index <= found.high
    assert 0 < found.p_value <= 1
    answers = [moment_exists(x, order).answer for order in (1, 2)]
    assert answers != ["missing", "exists"]


ONE_OUTLIER = np.r_[np.linspace(-1, 1, 80), 1e300]
HARD = {
    "constant": np.full(80, 3.0),
    "constant but one": np.r_[np.full(79, 3.0), 4.0],
    "zeros": np.zeros(80),
    "all zeros but one": np.r_[np.zeros(79), 1.0],
    "tiny": np.linspace(-1, 1.1, 80) * 1e-300,
    "smallest": np.linspace(-1, 1.1, 80) * 1e-321,
    "huge": np.linspace(-1, 1.1, 80) * 1e300,
    "largest": np.where(np.arange(80) % 3, 1.7e308, -1.7e308),
    "tied": np.round(np.linspace(-4, 4, 80)),
    "tied in half steps": np.round(np.linspace(-40, 40, 80)) / 2,
    "alternating": np.tile([1.0, -1.0], 40),
    "alternating and growing": np.arange(80) * np.tile([1.0, -1.0], 40),
    "one outlier": ONE_OUTLIER,
    "one small outlier": np.r_[np.linspace(-1, 1, 80), 50.0],
    "one outlier on each side": np.r_[ONE_OUTLIER, -1e300],
    "half zeros": np.where(np.arange(80) % 2, np.linspace(-1, 1, 80), 0.0),
    "wide": 10.0 ** np.linspace(-300, 300, 80),
    "trend": np.arange(80.0),
    "step": np.repeat([0.0, 1.0], 40) + 1e-13 * np.arange(80),
    "far from zero": 1e15 + np.arange(80.0) ** 2,
    "six tenths equal": np.r_[np.full(90, 2.0), np.linspace(3, 9, 60)],
    "thirty": np.linspace(0, 1, 30) ** 2,
}


def check(values: np.ndarray) -> None:
    """An answer without nan, or an InputError of one line; pytest turns warnings into errors."""
    for side in ("both", "left", "right"):
        try:
            found = tail_index(values, side=side)
        except InputError as refusal:
            assert str(refusal).startswith("values: ")
            assert "\n" not in str(refusal)
        else:
            numbers = [getattr(found, name) for name in (*ESTIMATES, "index", "low", "high")]
            assert not np.isnan(numbers).any()
            assert all(math.isfinite(getattr(found, name)) for name in ESTIMATES)
            assert found.low <= found.index <= found.high
    for order in (1, 4):
        try:
            assert moment_exists(values, order).answer in ("exists", "missing", "unclear")
        except InputError as refusal:
            assert "\n" not in str(refusal)
    many = column_tails(values[:, None], dependent=True)
    refused = bool(many.refused)
    for name in ("gamma", "error", "hill_gamma", "hill_error"):
        assert np.isnan(getattr(many, name)[0]) == refused, name
    assert 0 < many.p_value[0] <= 1


@pytest.mark.parametrize("name", list(HARD))
def test_hard_series_get_an_answer_or_a_refusal(name: str) -> None:
    check(HARD[name])


@pytest.mark.parametrize("name", list(HARD))
def test_hard_series_get_a_law_or_a_refusal(name: str) -> None:
    for time_ordered in (False, True):
        try:
            found = fit_law(HARD[name], time_ordered=time_ordered)
        except InputError as refusal:
            assert "\n" not in str(refusal)
        else:
            assert not np.isnan([*found.parameters.values(), found.sd, found.tail_index]).any()
            assert np.isfinite(found.draw(20, np.random.default_rng(1))).all()


@settings(max_examples=60, deadline=None)
@given(
    values=arrays(
        np.float64,
        st.integers(30, 60),
        elements=st.floats(allow_nan=False, allow_infinity=False),
        fill=st.sampled_from([0.0, 1.0]).map(float),
    )
)
def test_any_finite_series_gets_an_answer_or_a_refusal(values: np.ndarray) -> None:
    check(values)
