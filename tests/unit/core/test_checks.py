"""Argument checks: what passes unchanged, what is refused and how it is named."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from scantling.core.checks import between, finite_matrix, finite_vector
from scantling.errors import InputError, ScantlingError


@pytest.mark.parametrize(
    "values",
    [[1, 2.5, -3], (1, 2.5, -3), np.array([1, 2.5, -3], dtype=np.float32), pd.Series([1, 2.5, -3])],
)
def test_vectors_of_any_numeric_kind_pass(values: object) -> None:
    found = finite_vector(values, "x")
    assert found.dtype == np.float64
    assert found.tolist() == [1.0, 2.5, -3.0]


def test_integers_booleans_and_nullable_columns_pass() -> None:
    assert finite_vector(np.array([True, False]), "x").tolist() == [1.0, 0.0]
    assert finite_vector(pd.Series([1, 2], dtype="Int64"), "x").tolist() == [1.0, 2.0]
    assert finite_vector(np.array([1, 2.5], dtype=object), "x").tolist() == [1.0, 2.5]


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (["1", "2"], "numbers are needed; found list"),
        (np.array(["1", 2.0], dtype=object), "numbers are needed; found ndarray"),
        (np.array([1 + 2j]), "numbers are needed"),
        (np.array([1 + 2j], dtype=object), "numbers are needed"),
        (np.array(["2020-01-01"], dtype="datetime64[D]"), "numbers are needed"),
        (np.array([1], dtype="timedelta64[s]"), "numbers are needed"),
        (np.array([object()]), "numbers are needed"),
        ([[1.0, 2.0], [3.0]], "numbers are needed"),
        ([[1.0, 2.0]], "one dimension is needed; found 2"),
        (7.0, "one dimension is needed; found 0"),
        ([], "at least 1 values are needed; found 0"),
        ([1.0, np.nan, np.inf], r"value 2 is nan \(2 such\)"),
        ([-np.inf], r"value 1 is -inf \(1 such\)"),
        (pd.Series([1, None], dtype="Int64"), "values are needed|numbers are needed"),
    ],
)
def test_refused_vectors_are_named(values: object, words: str) -> None:
    with pytest.raises(InputError, match=words) as refusal:
        finite_vector(values, "residuals")
    assert str(refusal.value).startswith("residuals: ")
    assert "\n" not in str(refusal.value)


def test_the_minimum_length_is_the_last_refused() -> None:
    assert finite_vector(np.ones(5), "x", minimum=5).size == 5
    with pytest.raises(InputError, match="at least 6 values are needed; found 5"):
        finite_vector(np.ones(5), "x", minimum=6)


def test_matrices() -> None:
    frame = pd.DataFrame({"a": [1, 2], "b": [3.5, 4]})
    assert finite_matrix(frame, "X").tolist() == [[1.0, 3.5], [2.0, 4.0]]
    for values, words in (
        (np.ones(3), r"found shape \(3,\)"),
        (np.ones((0, 3)), r"found shape \(0, 3\)"),
        ([["a"]], "numbers are needed"),
        ([[1.0, 2.0], [3.0, np.inf]], "row 2, column 2 is inf"),
    ):
        with pytest.raises(InputError, match=words) as refusal:
            finite_matrix(values, "X")
        assert str(refusal.value).startswith("X: ")


def test_between_open_and_closed() -> None:
    assert between("0.5", "risk", 0, 1) == 0.5
    assert between(0, "share", 0, 1, closed=True) == 0.0
    assert between(np.float32(1), "share", 0, 1, closed=True) == 1.0
    for value in (0, 1, -0.1, float("nan"), float("inf")):
        with pytest.raises(InputError, match="risk: a number above 0 and below 1 is needed; found"):
            between(value, "risk", 0, 1)
    for value in (None, "much", [0.5, 0.6]):
        with pytest.raises(InputError, match="risk: a number is needed"):
            between(value, "risk", 0, 1)


@pytest.mark.parametrize(
    ("closed", "inside", "outside", "words"),
    [
        (False, (0.5,), (0, 2), "above 0 and below 2"),
        (True, (0, 2), (-0.1, 2.1), "from 0 to 2"),
        ("low", (0, 1.9), (-0.1, 2), "of at least 0 and below 2"),
        ("high", (0.1, 2), (0, 2.1), "above 0 and at most 2"),
    ],
)
def test_a_range_is_said_as_it_is_checked(closed, inside, outside, words) -> None:
    for value in inside:
        assert between(value, "x", 0, 2, closed=closed) == value
    for value in (*outside, float("nan")):
        with pytest.raises(InputError, match=f"^x: a number {words} is needed; found"):
            between(value, "x", 0, 2, closed=closed)


def test_a_range_without_an_upper_end() -> None:
    with pytest.raises(InputError, match=r"x: a number above 2 is needed; found 2$"):
        between(2, "x", 2, float("inf"))


def test_an_input_error_is_a_value_error_of_the_package() -> None:
    assert issubclass(InputError, ValueError)
    assert issubclass(InputError, ScantlingError)
