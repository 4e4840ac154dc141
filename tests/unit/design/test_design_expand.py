"""Expansion: counts, names, values against plain formulas, drops and refusals."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import norm, rankdata

from scantling.core.record import FloatArray
from scantling.design import expand as expand_module
from scantling.design.expand import (
    clipped,
    expand,
    expanded_count,
    normal_scores,
    repeated_rows,
)
from scantling.design.spec import (
    DataSpec,
    Design,
    ExpandSpec,
    PenaltySpec,
    SimulationSpec,
    TargetSpec,
)
from scantling.design.table import Table
from scantling.errors import InputError


def design_of(**spec: object) -> Design:
    return Design(
        title="t",
        path=Path("d.toml"),
        sha256="0" * 64,
        data=DataSpec(file=Path("p.csv"), response="y"),
        expand=ExpandSpec(**spec),  # type: ignore[arg-type]
        kind="regression",
        target=TargetSpec(),
        penalty=PenaltySpec(),
        simulation=SimulationSpec(),
    )


def table_of(
    values: FloatArray, names: tuple[str, ...] | None = None, time: tuple[str, ...] | None = None
) -> Table:
    rows, count = values.shape
    return Table(
        names=names or tuple(f"x{j}" for j in range(count)),
        values=values,
        response_name="y",
        response=np.random.default_rng(99).standard_t(4, rows),
        time_name="day" if time else None,
        time=time,
        rows_dropped=0,
        skipped=(),
        sha256="0" * 64,
        file_name="p.csv",
    )


def heavy(rows: int, count: int, seed: int = 3) -> FloatArray:
    return 5.0 + np.random.default_rng(seed).standard_t(3, (rows, count))


def standard(column: FloatArray) -> FloatArray:
    centred = column - column.mean()
    return np.asarray(centred / np.sqrt(np.mean(centred**2)))


def refusal(design: Design, table: Table) -> str:
    with pytest.raises(InputError) as caught:
        expand(design, table)
    assert str(caught.value).startswith("d.toml: [expand] ")
    return str(caught.value)


@settings(max_examples=60, deadline=None)
@given(
    count=st.integers(0, 4),
    powers=st.integers(1, 6),
    products=st.booleans(),
    lags=st.integers(0, 5),
    contemporaneous=st.booleans(),
    own_lags=st.integers(0, 6),
)
def test_counts_standardisation_and_labels(
    count: int, powers: int, products: bool, lags: int, contemporaneous: bool, own_lags: int
) -> None:
    design = design_of(
        powers=powers,
        products=products,
        lags=lags,
        contemporaneous=contemporaneous,
        own_lags=own_lags,
    )
    made = (count * powers + products * (count * (count - 1) // 2)) * (
        lags + contemporaneous if lags else 1
    ) + own_lags
    assert expanded_count(count, design.expand) == made
    table = table_of(heavy(80, count))
    if not made:
        assert "leaves no candidate column" in refusal(design, table)
        return
    columns = expand(design, table)
    assert len(columns.names) == made and columns.dropped == ()
    assert len(set(columns.names)) == made
    lost = max(lags, own_lags)
    assert columns.rows_lost == lost and columns.time_ordered == (lost > 0)
    assert columns.values.shape == (80 - lost, made)
    np.testing.assert_allclose(columns.values.mean(axis=0), 0.0, atol=1e-12)
    np.testing.assert_allclose(np.mean(columns.values**2, axis=0), 1.0, rtol=1e-12)
    np.testing.assert_array_equal(columns.response, table.response[lost:])
    assert int((columns.base < 0).sum()) == own_lags
    assert columns.is_product.sum() == (made - own_lags) - count * powers * (
        lags + contemporaneous if lags else 1
    )


def test_values_follow_the_formulas() -> None:
    raw = heavy(60, 2)
    days = tuple(str(i) for i in range(60))
    table = table_of(raw, ("a", "b"), days)
    columns = expand(
        design_of(powers=3, products=True, lags=2, contemporaneous=True, own_lags=4), table
    )
    assert columns.names[:6] == ("a", "a.lag1", "a.lag2", "a^2", "a^2.lag1", "a^2.lag2")
    assert columns.names[-7:] == (
        "a*b", "a*b.lag1", "a*b.lag2", "y.lag1", "y.lag2", "y.lag3", "y.lag4",
    )  # fmt: skip
    centred = raw - raw.mean(axis=0)
    expected = {
        "a": (raw[4:, 0], 0, 1, False, 0),
        "a.lag2": (raw[2:-2, 0], 0, 1, False, 2),
        "a^2.lag1": (centred[3:-1, 0] ** 2, 0, 2, False, 1),
        "b^3": (centred[4:, 1] ** 3, 1, 3, False, 0),
        "a*b.lag1": (raw[3:-1, 0] * raw[3:-1, 1], 0, 2, True, 1),
        "y.lag4": (table.response[:-4], -1, 1, False, 4),
    }
    for name, (column, base, power, product, lag) in expected.items():
        at = columns.names.index(name)
        np.testing.assert_allclose(columns.values[:, at], standard(column), rtol=1e-9, atol=1e-12)
        assert (columns.base[at], columns.power[at]) == (base, power)
        assert (bool(columns.is_product[at]), columns.lag[at]) == (product, lag)
    assert columns.time == days[4:] and columns.time_ordered
    for array in (columns.values, columns.response, columns.base, columns.is_product, columns.lag):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1


def test_as_they_stand_without_lags() -> None:
    table = table_of(heavy(40, 3))
    columns = expand(design_of(contemporaneous=True), table)
    assert columns.names == ("x0", "x1", "x2") and columns.rows_lost == 0
    assert not columns.time_ordered and columns.time is None
    assert expand(design_of(), table_of(heavy(40, 3), time=tuple("0" * 40))).time_ordered


def test_normal_scores_are_those_of_all_rows_before_lagging() -> None:
    raw = np.round(heavy(50, 2), 1)
    scores = norm.ppf((rankdata(raw[:, 0], method="average") - 0.5) / 50)
    np.testing.assert_allclose(normal_scores(raw)[:, 0], scores, rtol=1e-12, atol=1e-15)
    columns = expand(design_of(transform="normal-scores", lags=3), table_of(raw))
    at = columns.names.index("x0.lag3")
    np.testing.assert_allclose(columns.values[:, at], standard(scores[:47]), rtol=1e-10, atol=1e-12)
    # METHODS 7: the largest score at n = 100 is Phi^-1(1 - 1/200) = 2.58.
    assert normal_scores(heavy(100, 1)).max() == pytest.approx(2.5758, abs=1e-4)


def test_clipping_at_five_robust_sd_and_sparse_columns() -> None:
    raw = heavy(200, 1)[:, 0]
    raw[7] = 1e6
    median = np.median(raw)
    spread = 1.4826 * np.median(np.abs(raw - median))
    dummy = np.zeros(200)
    dummy[3] = 1.0
    found = clipped(np.column_stack([raw, dummy]))
    np.testing.assert_allclose(
        found[:, 0], np.clip(raw, median - 5 * spread, median + 5 * spread), rtol=1e-12
    )
    assert found[7, 0] == pytest.approx(median + 5 * spread)
    # MAD 0: mean + 5 sd = 0.005 + 5 sqrt(0.005 * 0.995) = 0.357668...
    assert found[3, 1] == pytest.approx(0.005 + 5 * np.sqrt(0.005 * 0.995), rel=1e-12)
    assert set(found[:, 1]) == {0.0, found[3, 1]}


def test_constants_and_repeats_made_by_the_expansion_are_listed() -> None:
    rng = np.random.default_rng(5)
    balanced = np.repeat([0.0, 1.0], 30)
    sparse = (np.arange(60) == 0).astype(float)
    uneven = (np.arange(60) % 5 == 0).astype(float)
    raw = np.column_stack([balanced, uneven, rng.standard_normal(60)])
    columns = expand(design_of(powers=2), table_of(raw, ("balanced", "uneven", "x")))
    assert columns.names == ("balanced", "uneven", "x", "x^2")
    assert columns.dropped == (
        ("balanced^2", "does not vary on the rows used"),
        ("uneven^2", "the same as uneven up to sign and scale"),
    )
    # A dummy whose only 1 is in a row that the lags take.
    columns = expand(
        design_of(lags=1, contemporaneous=True), table_of(np.column_stack([sparse, raw[:, 2]]))
    )
    assert columns.dropped == (("x0", "does not vary on the rows used"),)
    # Exclusive dummies: their product is 0 throughout.
    exclusive = np.column_stack([uneven, np.roll(uneven, 1)])
    assert ("x0*x1", "does not vary on the rows used") in expand(
        design_of(products=True), table_of(exclusive)
    ).dropped


def test_a_lag_in_the_file_repeats_the_own_lag() -> None:
    table = table_of(heavy(50, 2))
    lagged = np.r_[0.0, -3.0 * table.response[:-1] + 7.0]
    table = dataclasses.replace(table, values=np.column_stack([lagged, table.values[:, 1]]))
    columns = expand(design_of(own_lags=2), table)
    assert columns.names == ("x0", "x1", "y.lag2")
    assert columns.dropped == (("y.lag1", "the same as x0 up to sign and scale"),)


def test_nothing_left_is_refused() -> None:
    # The only 1 is in the last row, which no lag reaches.
    table = table_of(np.column_stack([(np.arange(60) == 59).astype(float)]))
    message = refusal(design_of(lags=2, powers=2), table)
    assert "leaves no candidate column; all 4 are constant or repeated: 'x0.lag1'" in message


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), scale=st.sampled_from([1e-300, 1e-8, 1.0, 1e8, 1e300]))
def test_extreme_scales_change_nothing(seed: int, scale: float) -> None:
    raw = heavy(40, 2, seed)
    spec = design_of(powers=6, products=True, lags=1)
    one, two = expand(spec, table_of(raw)), expand(spec, table_of(raw * scale))
    assert one.names == two.names
    np.testing.assert_allclose(one.values, two.values, rtol=1e-6, atol=1e-8)


@pytest.mark.parametrize("transform", ["none", "normal-scores", "clip"])
def test_huge_values_stay_finite(transform: str) -> None:
    raw = heavy(40, 2)
    raw[3, 0], raw[4, 0] = 1.7e308, -1.7e308
    columns = expand(design_of(transform=transform, powers=6, products=True), table_of(raw))
    assert np.isfinite(columns.values).all()


def test_rows_and_lags_refused_with_their_numbers() -> None:
    table = table_of(heavy(40, 2))
    assert expand(design_of(lags=10), table).values.shape[0] == 30
    assert "11 lags leave 29 of 40 rows; at least 30 rows" in refusal(design_of(lags=11), table)
    assert "11 lags leave 29 of 40 rows" in refusal(design_of(own_lags=11), table)
    assert "40 lags need more than 40 rows; the table has 40" in refusal(design_of(lags=40), table)


def test_memory_is_refused_before_it_is_allocated(monkeypatch: pytest.MonkeyPatch) -> None:
    table = table_of(heavy(40, 2))
    monkeypatch.setattr(expand_module, "MEMORY_BOUND", 4 * 40 * 5 * 8)
    assert expand(design_of(powers=2, products=True), table).values.shape == (40, 5)
    monkeypatch.setattr(expand_module, "MEMORY_BOUND", 4 * 40 * 5 * 8 - 1)
    assert "makes 5 columns of 40 rows" in refusal(design_of(powers=2, products=True), table)
    monkeypatch.undo()
    wide = table_of(np.broadcast_to(heavy(1000, 1), (1000, 3000)))
    # 3000 * 2999 / 2 + 3000 = 4501500 columns of 1000 rows, 4 copies of 8 bytes: 134.2 GiB.
    message = refusal(design_of(products=True), wide)
    assert "makes 4501500 columns of 1000 rows, 134.2 GiB in 4 copies; at most 2 GiB" in message


def test_names_that_collide_and_specs_out_of_range() -> None:
    table = table_of(heavy(40, 2), ("x", "x^2"))
    assert "makes a column 'x^2' and there is another" in refusal(design_of(powers=2), table)
    table = table_of(heavy(40, 2))
    assert "transform = 'ranks': not accepted; one of none" in refusal(
        design_of(transform="ranks"), table
    )
    assert "powers = 0" in refusal(design_of(powers=0), table)
    assert "lags = -1" in refusal(design_of(lags=-1), table)


def test_repeats_are_found_among_many_with_rounding_and_sign() -> None:
    rng = np.random.default_rng(11)
    stack = rng.standard_t(3, (2000, 300))
    stack -= stack.mean(axis=1, keepdims=True)
    stack /= np.sqrt(np.mean(stack**2, axis=1, keepdims=True))
    expected = {}
    for later, first in zip(range(1000, 1100), range(0, 300, 3), strict=True):
        sign = -1.0 if later % 2 else 1.0
        stack[later] = sign * stack[first] * (1 + 1e-14 * rng.standard_normal(300))
        expected[later] = first
    stack[1999] = stack[5] + 1e-6 * rng.standard_normal(300)
    stack[7] = 0.0
    ignored = np.zeros(2000, dtype=bool)
    ignored[7] = True
    assert repeated_rows(stack, ignored) == expected


def test_a_changed_spec_on_the_same_table() -> None:
    design, table = design_of(powers=3), table_of(heavy(40, 2))
    before = table.values.copy()
    lighter = dataclasses.replace(
        design, expand=dataclasses.replace(design.expand, transform="clip", powers=1)
    )
    assert len(expand(design, table).names) == 6 and len(expand(lighter, table).names) == 2
    np.testing.assert_array_equal(table.values, before)
