"""Laws that hold for every sample of ratios: the curve, the limit, quantiles, bands, budgets."""

from __future__ import annotations

import itertools
import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from scantling.planning.budget import combine
from scantling.planning.ceiling import rate_by_regime
from scantling.planning.limit import make_limit
from scantling.planning.stress import limit_on_grid
from scantling.simulation.scores import (
    first_above,
    join,
    largest_quantile,
    none_taken,
    passers,
    penalty_level,
    risk_at,
    risk_curves,
)

quick = settings(max_examples=60, deadline=None, derandomize=True)
RISKS = st.sampled_from([0.01, 0.05, 0.1, 0.3])


@st.composite
def ratio_tables(draw):
    """(P, R) ratios with ties, zeros and values far above every level."""
    columns, draws = draw(st.integers(1, 12)), draw(st.integers(1, 15))
    steps = draw(arrays(np.int64, (columns, draws), elements=st.integers(0, 40)))
    return steps * 0.15


@quick
@given(ratio_tables(), RISKS)
def test_the_limit_is_nested(ratios, risk):
    """Every p up to the limit is accepted and the next is not."""
    found = passers(ratios, float(penalty_level(1, risk)))
    limit = first_above(risk_curves(found, risk)[0], risk)
    risks = [
        risk_at(found, p, float(penalty_level(p, risk)))[0] for p in range(1, found.columns + 1)
    ]
    accepted = found.columns if math.isinf(limit) else int(limit)
    assert all(r <= risk + 1e-9 for r in risks[:accepted])
    if accepted < found.columns:
        assert risks[accepted] > risk - 1e-9


@quick
@given(ratio_tables(), RISKS)
def test_the_curve_is_a_probability_and_is_that_of_each_p(ratios, risk):
    found = passers(ratios, float(penalty_level(1, risk)))
    curve = risk_curves(found, risk)[0]
    assert (curve >= 0).all()
    assert (curve <= 1 + 1e-12).all()
    for p in range(1, found.columns + 1):
        level = float(penalty_level(p, risk))
        assert abs(curve[p - 1] - risk_at(found, p, level)[0]) < 1e-12
    largest = ratios.max(axis=0) > float(penalty_level(found.columns, risk))
    assert abs(curve[-1] - largest.mean()) < 1e-12


@quick
@given(ratio_tables(), RISKS, st.floats(0, 2))
def test_larger_ratios_never_raise_the_limit(ratios, risk, more):
    floor = float(penalty_level(1, risk))
    before = risk_curves(passers(ratios, floor), risk)[0]
    after = risk_curves(passers(ratios + more, floor), risk)[0]
    assert (after >= before - 1e-12).all()
    assert first_above(after, risk) <= first_above(before, risk)


@quick
@given(ratio_tables(), st.randoms(use_true_random=False))
def test_columns_and_draws_may_come_in_any_order(ratios, random):
    columns, draws = (list(range(size)) for size in ratios.shape)
    random.shuffle(columns)
    random.shuffle(draws)
    shuffled = ratios[columns][:, draws]
    one, two = (risk_curves(passers(r, 1.0), 0.3)[0] for r in (ratios, shuffled))
    np.testing.assert_allclose(one, two, atol=1e-12)
    for p in range(1, len(ratios) + 1):
        assert largest_quantile(passers(ratios, 0.0), p, 0.9) == largest_quantile(
            passers(shuffled, 0.0), p, 0.9
        )


@quick
@given(ratio_tables(), st.sampled_from([0.5, 0.8, 0.95, 0.99]))
def test_the_quantile_never_falls_as_p_grows(ratios, probability):
    found = passers(ratios, -1.0)
    quantiles = [largest_quantile(found, p, probability) for p in range(1, len(ratios) + 1)]
    assert all(a <= b for a, b in itertools.pairwise(quantiles))
    assert quantiles[-1] <= ratios.max()


@quick
@given(ratio_tables(), st.sampled_from([0.5, 0.8, 0.95]), st.data())
def test_the_quantile_is_where_the_risk_meets_it(ratios, probability, data):
    p = data.draw(st.integers(1, len(ratios)))
    found = passers(ratios, -1.0)
    quantile = largest_quantile(found, p, probability)
    assert risk_at(found, p, quantile)[0] <= 1 - probability + 1e-9
    assert risk_at(found, p, quantile - 1e-6)[0] > 1 - probability - 1e-9


@quick
@given(ratio_tables(), RISKS, st.integers(1, 14))
def test_blocks_of_draws_make_the_same_curve(ratios, risk, cut):
    parts = [passers(part, 0.5) for part in (ratios[:, :cut], ratios[:, cut:]) if part.shape[1]]
    joined = risk_curves(join(parts), risk)
    np.testing.assert_allclose(joined, risk_curves(passers(ratios, 0.5), risk), atol=1e-12)


@quick
@given(st.integers(1, 6000), st.data())
def test_none_taken_is_a_probability_that_falls_in_both_counts(columns, data):
    k = data.draw(st.integers(0, columns))
    p = data.draw(st.integers(1, columns))
    counts = np.array([k, min(k + 1, columns)])
    here, more = none_taken(counts, columns, p)
    assert 0 <= more <= here <= 1
    assert none_taken(k, columns, min(p + 1, columns)) <= here + 1e-12
    # Symmetric: none of K among p taken is none of p among K marked.
    if k:
        assert abs(here - float(none_taken(p, columns, k))) < 1e-9


LIMITS = st.lists(
    st.one_of(st.integers(0, 100).map(float), st.just(math.inf)), min_size=50, max_size=50
)
POINTS = st.one_of(st.integers(0, 99).map(float), st.just(math.inf))


@quick
@given(POINTS, LIMITS)
def test_a_limits_band_is_ordered_and_open_where_it_should_be(point, draws):
    limit = make_limit(point, draws, 100, mode="conditional")
    assert 0 <= limit.low <= 100
    if limit.high is not None:
        assert limit.low <= limit.high
        assert limit.reached
    if not limit.reached:
        assert (limit.columns, limit.high, limit.note) == (100, None, "at least")


@quick
@given(st.lists(st.tuples(POINTS, LIMITS), min_size=3, max_size=3))
def test_allowed_never_exceeds_any_limit(parts):
    limits = {
        name: make_limit(point, draws, 100, mode="conditional")
        for name, (point, draws) in zip(("noise", "signal", "stability"), parts, strict=True)
    }
    allowed, binding = combine(limits, 100)
    assert allowed.columns == min(limit.columns for limit in limits.values())
    assert allowed.low <= min(limit.low for limit in limits.values())
    if binding is None:
        assert not any(limit.reached for limit in limits.values())
        assert allowed.high is None
    else:
        assert limits[binding].columns == allowed.columns
        tops = [limit.high for limit in limits.values() if limit.high is not None]
        if tops:
            assert allowed.high is not None
            assert allowed.high <= min(tops)


MARGINS = arrays(np.float64, (4, 3), elements=st.floats(-1, 1, width=32))


@quick
@given(MARGINS, st.floats(0, 0.5))
def test_larger_margins_never_lower_the_limit_on_the_grid(margin, more):
    grid = [8, 20, 50, 130]
    limit, better = limit_on_grid(grid, margin), limit_on_grid(grid, margin + more)
    # Where the last pass moves on along the grid the limit moves with it; between two points
    # a rise of both ends moves the crossing up.
    assert better >= limit
    if 0 < limit < math.inf:
        last = max(k for k in range(4) if margin[k].min() >= 0)
        assert grid[last] <= limit <= grid[last + 1]


@quick
@given(
    st.integers(30, 5000), st.floats(1.1, 20), st.floats(1.1, 20), st.floats(0, 1),
)  # fmt: skip
def test_the_ceiling_grows_with_rows_and_moments(rows, q, errors, share):
    def rate(rows, q, errors):
        return rate_by_regime(
            rows=rows, rule="plug-in", heavy_share=share, errors=(errors,) * 3, scores=(q,) * 3
        ).columns

    here = rate(rows, q, errors)
    assert rate(rows, q + 1, errors) >= here
    assert rate(rows, q, errors + 1) >= here
    if q >= 2 and errors >= 2:
        assert rate(2 * rows, q, errors) >= here
