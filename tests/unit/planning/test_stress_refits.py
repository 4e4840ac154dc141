"""Simulated refits: what is refitted, the limits read off the grid, power, reproducibility."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import hadamard
from scipy.stats import norm

from scantling.core.streams import serial_map, worker_pool
from scantling.design.spec import TargetSpec
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import normal_law, student_law
from scantling.law.fit import fit_law
from scantling.law.innovation import single_spread
from scantling.planning import refits as refits_module
from scantling.planning import stress as module
from scantling.planning.case import Case, draw_laws
from scantling.planning.recipe import standardise
from scantling.planning.stress import (
    SUPPORTS,
    law_effects,
    limit_on_grid,
    stress,
    support_set,
)
from scantling.simulation.scores import penalty_level


def case_of(X=None, **changes):
    law = changes.pop("law", normal_law(1.0))
    if X is None:
        X = np.random.default_rng(0).standard_normal((120, 40))
    target = changes.pop("target", TargetSpec(relevant=4, smallest_effect=0.25))
    case = Case(
        X=standardise(X), law=law, law_draws=(law,) * 50, response_sd=1.2, residual_sd=1.1,
        target=target, rule="plug-in", replicates=100, seed=3,
    )  # fmt: skip
    return replace(case, **changes)


def run_law(case, law, name, grid, mapper=serial_map, every=None):
    return module.run_law(case, law, name, grid, mapper, every)


def grid_of(case, **points):
    return module.grid_of(case.columns, case.target.relevant, **points)


def margins_of(*worst):
    """Margins whose smallest is as given, the others met with ease."""
    return np.array([[w, 0.9, 0.9] for w in worst])


@pytest.fixture
def seen(monkeypatch):
    """What the refits hand to the solver: (X, Y, weights)."""
    calls = []
    solve = refits_module.solve_batch

    def record(X, Y, weights, **options):
        calls.append((X.copy(), Y.copy(), np.array(weights)))
        return solve(X, Y, weights, **options)

    monkeypatch.setattr(refits_module, "solve_batch", record)
    return calls


def test_support_sets_are_nested_and_share_their_errors_over_p(seen):
    case = case_of()
    grid = [8, 20, 40]
    run_law(case, case.law, "fitted", grid, serial_map)
    assert len(seen) == 3 * SUPPORTS
    for number in range(SUPPORTS):
        few, more, every = (seen[k * SUPPORTS + number] for k in range(3))
        np.testing.assert_array_equal(few[0], more[0][:, :8])
        np.testing.assert_array_equal(more[0], every[0][:, :20])
        # Same relevant columns, signs and errors: the responses are the same.
        np.testing.assert_array_equal(few[1], every[1])
        assert few[1].shape == (120, 100 // SUPPORTS)
    assert len({call[0][:, :4].tobytes() for call in seen}) == SUPPORTS


def test_responses_are_effects_plus_errors_as_loud_as_the_residuals(seen):
    # Huge law, small residual sd: the scale is the residuals'.
    case = case_of(law=normal_law(50.0), replicates=4000)
    run_law(case, case.law, "fitted", [8], serial_map)
    # 800 refits of a support set come in twenty parts.
    X = seen[0][0]
    Y = np.hstack([call[1] for call in seen[:20]])
    assert Y.shape == (120, 800)
    chosen = support_set(case, 0)
    assert set(np.abs(chosen.signs)) == {1.0}
    mean = X[:, :4] @ (0.25 * 1.2 * chosen.signs)
    np.testing.assert_array_equal(X, case.X[:, chosen.order[:8]])
    errors = Y - mean[:, None]
    np.testing.assert_allclose(errors.mean(axis=0), 0, atol=1e-12)
    sizes = np.sqrt((errors**2).mean(axis=0))
    assert np.median(sizes) == pytest.approx(1.1, rel=0.01)
    # All draws share one factor: the others' sizes spread as a normal law's, 1/sqrt(2 n).
    assert sizes.std() == pytest.approx(1.1 / math.sqrt(240), rel=0.15)


def test_the_typical_draw_is_that_loud_where_the_laws_own_sd_is_far_off(seen):
    # t(2.02) of sd 1.1: nearly all samples are far quieter than the law, a few far louder.
    stated = student_law(2.02, sd=1.1)
    fitted = replace(stated, spread=single_spread(stated.innovation, np.ones(120)))
    sizes = []
    for law in (fitted, stated):
        case = case_of(law=law, replicates=1000)
        seen.clear()
        run_law(case, case.law, "fitted", [8], serial_map)
        X, Y, _ = seen[5]  # the first of five parts of the second set
        errors = Y - (X[:, :4] @ (0.25 * 1.2 * support_set(case, 1).signs))[:, None]
        sizes.append(np.sqrt((errors**2).mean(axis=0)))
    assert np.median(sizes[0]) == pytest.approx(1.1, rel=1e-12)
    assert sizes[0].max() > 5 * np.median(sizes[0])
    # A stated law keeps the sd it was stated with: its scale is 1.1 sqrt(.02/2.02) = .11, and
    # 120 values of t(2.02) mostly show a root mean square of 1.8 to 3.5 scales.
    assert 0.18 < np.median(sizes[1]) < 0.4
    rng = np.random.default_rng(0)
    own = np.median(case.law.draw_given_path(120, 2000, rng).std(axis=0))
    assert own < 0.4 * 1.1


@pytest.mark.parametrize("rule", ["plug-in", "self-normalised"])
def test_penalties_are_the_level_times_the_draws_own_loadings(seen, rule):
    case = case_of(law=student_law(3, sd=1.0), rule=rule)
    run_law(case, case.law, "fitted", [20], serial_map)
    X, Y, weights = seen[2]
    errors = Y - (X[:, :4] @ (0.3 * support_set(case, 2).signs))[:, None]
    level = float(penalty_level(20, 0.05)) / math.sqrt(120)
    if rule == "plug-in":
        expected = level * np.sqrt((errors**2).mean(axis=0))
    else:
        expected = level * np.sqrt(((X[:, :, None] * errors[:, None, :]) ** 2).mean(axis=0))
    np.testing.assert_allclose(weights, expected, rtol=1e-10)


def test_the_grid_runs_from_one_more_than_the_relevant_columns_to_all():
    assert grid_of(case_of()) == [5, 7, 10, 14, 20, 28, 40]
    assert grid_of(case_of(), points=3) == [5, 14, 40]
    assert grid_of(case_of(target=TargetSpec(relevant=30))) == [31, 40]
    assert grid_of(case_of(target=TargetSpec(relevant=1)))[0] == 2
    assert grid_of(case_of(target=TargetSpec(relevant=40))) == [40]
    assert grid_of(case_of(target=TargetSpec(relevant=60))) == [40]


@pytest.mark.parametrize("relevant", [20, 25, 30, 33])
def test_neighbours_on_the_grid_are_a_fifth_apart(relevant):
    X = np.broadcast_to(np.zeros((1, 1)), (9, 40))
    case = replace(case_of(), X=X, target=TargetSpec(relevant=relevant))
    grid = grid_of(case)
    assert (grid[0], grid[-1]) == (relevant + 1, 40)
    # Whole numbers may be half a column nearer; the two ends are always there.
    assert len(grid) == 2 or all(b - a >= 0.2 * a - 1 for a, b in itertools.pairwise(grid))
    assert len(grid) == max(2, 1 + int(math.log(40 / (relevant + 1)) / math.log(1.2)))


@pytest.mark.parametrize(
    ("worst", "expected"),
    [
        ((0.1, 0.1, 0.0), math.inf),
        ((-0.1, -0.2, -0.3), 0),
        ((0.1, -0.1, -0.3), 31),  # half way in logs from 10 to 100: 31.6
        ((0.3, 0.1, -0.1), 316),
        ((0.1, -0.3, -0.3), 17),  # a quarter: 10^1.25 = 17.8
        ((0.0, -0.3, -0.3), 10),
        ((-0.1, 0.1, -0.1), 316),  # the largest that passes, though fewer fail
        ((0.1, -0.1, 0.1), math.inf),
    ],
)
def test_limit_on_the_grid_by_hand(worst, expected):
    assert limit_on_grid([10, 100, 1000], margins_of(*worst)) == expected


def test_every_criterion_counts():
    met = np.full((2, 3), 0.1)
    assert limit_on_grid([10, 100], met) == math.inf
    for criterion in range(3):
        margin = met.copy()
        margin[1, criterion] = -0.1
        assert limit_on_grid([10, 100], margin) == 31


def test_under_a_normal_law_the_twin_agrees():
    case = case_of(replicates=400, target=TargetSpec(relevant=4, smallest_effect=0.45))
    grid = grid_of(case, points=3)
    fitted = run_law(case, case.law, "fitted", grid, serial_map)
    twin = run_law(case, case.twin, "twin", grid, serial_map)
    heavy = run_law(case, student_law(1.5), "heavy", grid, serial_map)
    for one, two in zip(fitted, twin, strict=True):
        for name in ("power", "false_share", "stability"):
            a, b = getattr(one, name), getattr(two, name)
            # Supports are shared, so what is left is Monte Carlo: 400 refits, sd below .5.
            assert a.value == pytest.approx(b.value, abs=4 * 0.35 * math.sqrt(2 / 400)), name
    # Negative control: half of the draws of errors without variance are far louder.
    assert fitted[-1].power.value - heavy[-1].power.value > 4 * 0.35 * math.sqrt(2 / 400)


def test_power_of_one_relevant_column_among_orthogonal_ones():
    # Selected if |sqrt(n) b + S| > L v; with v the rms of the draw, sd v / sqrt(2 n), power is
    # about Phi((sqrt(n) b / sd - L) / sqrt(1 + L^2 / (2 n))).
    X = hadamard(256)[:, 1:33].astype(float)
    case = case_of(
        X, target=TargetSpec(relevant=1, smallest_effect=0.25), response_sd=1.0, residual_sd=1.0,
        replicates=2000,
    )  # fmt: skip
    level = float(penalty_level(32, 0.05))
    theory = norm.cdf((16 * 0.25 - level) / math.sqrt(1 + level**2 / 512))
    run = run_law(case, case.law, "fitted", [32], serial_map)[0]
    assert run.power.value == pytest.approx(theory, abs=4 * math.sqrt(0.25 * 0.75 / 2000))
    assert 0.6 < theory < 0.8
    # Noise columns pass with probability P(|N| > L) each.
    false_columns = 31 * 2 * norm.sf(level)
    assert run.size.value - run.power.value == pytest.approx(false_columns, abs=0.01)


def test_two_workers_give_the_same_records():
    law = fit_law(np.random.default_rng(4).standard_t(3, 120))
    case = case_of(law=law, law_draws=draw_laws(law, 3))
    one = stress(case, serial_map, points=3)
    with worker_pool(2) as mapper:
        two = stress(case, mapper, points=3)
    assert one == two
    assert one != stress(replace(case, seed=4), serial_map, points=3)


def test_easy_designs_pass_throughout_and_hopeless_ones_nowhere():
    easy = stress(case_of(target=TargetSpec(relevant=2, smallest_effect=0.8)), serial_map)
    assert easy.stability.columns == 40
    assert not easy.stability.reached
    assert easy.failing == ()
    # Met clearly by all columns: nothing more is to be found.
    assert [(run.law, run.columns) for run in easy.runs] == [("fitted", 40), ("twin", 40)]
    hopeless = stress(case_of(target=TargetSpec(relevant=2, smallest_effect=0.02)), serial_map)
    assert (hopeless.stability.columns, hopeless.stability.high) == (0, 0)
    assert hopeless.geometry.columns == 0
    assert hopeless.failing[:2] == ("stability", "power")
    assert hopeless.runs[0].power.value < 0.1


def test_without_twins_geometry_is_not_run():
    found = stress(case_of(), serial_map, twins=False, points=2)
    assert {run.law for run in found.runs} == {"fitted"}
    assert found.geometry == found.stability


def test_under_volatility_a_third_run_keeps_the_path():
    path = np.where(np.arange(120) < 60, 0.3, 1.4)
    volatility = Volatility(
        omega=0.1, alpha=0.1, beta=0.8, innovation="normal", nu=None, persistence=0.9,
        tail_index=9.0, path=path, path_draws=path[None], log_likelihood=0.0,
    )  # fmt: skip
    case = case_of(law=replace(student_law(4, sd=1.0), volatility=volatility))
    found = stress(case, serial_map, points=2)
    assert [(run.law, run.columns) for run in found.runs] == [
        ("fitted", 5), ("fitted", 40), ("twin", 5), ("twin", 40), ("normal-volatility", 40),
    ]  # fmt: skip


LOUD = TargetSpec(relevant=4, smallest_effect=0.45)
"""Power is .93 under normal errors at 40 columns, .72 under t(1.5): the typical draw is equally
loud, but half of the draws are louder."""


def test_drawn_laws_without_variance_are_refitted_as_any_other():
    laws = (student_law(1.2),) * 10 + (normal_law(1.0),) * 40
    effects = law_effects(case_of(law_draws=laws, target=LOUD), 20, serial_map)
    assert effects.shape == (50, 3)
    assert np.isfinite(effects).all()
    # Worse in stability and power, by as much as the laws differ and not by all there is.
    assert ((effects[:10, :2] > -0.6) & (effects[:10, :2] < 0.1)).all()
    assert (effects[:10, :2].mean(axis=0) < -0.1).all()
    assert effects.mean(axis=0) == pytest.approx([0, 0, 0], abs=1e-12)


def test_alike_laws_do_not_differ():
    # What they seem to differ by is chance and is mostly taken out.
    # (20 refits of four relevant columns leave .043 on power and .034 on stability.)
    effects = law_effects(case_of(), 20, serial_map)
    assert np.abs(effects).mean(axis=0).max() < 0.02


def test_drawn_laws_that_differ_are_told_apart():
    # Alternating by fives, so that each support set meets both kinds.
    laws = tuple(normal_law(1.0) if k % 10 < 5 else student_law(1.5) for k in range(50))
    effects = law_effects(case_of(law_draws=laws, target=LOUD), 20, serial_map)
    kind = np.arange(50) % 10 < 5
    gap = effects[kind].mean(axis=0) - effects[~kind].mean(axis=0)
    assert gap[0] > 0.1
    assert gap[1] > 0.1


def test_drawn_laws_of_other_units_are_one_law():
    # Each batch is scaled to the residuals, so the unit of a drawn law is no part of it.
    laws = tuple(normal_law(1.0 if k % 10 < 5 else 50.0) for k in range(50))
    one, other = (
        law_effects(case_of(law_draws=each, target=LOUD), 20, serial_map)
        for each in (laws, (normal_law(1.0),) * 50)
    )
    np.testing.assert_allclose(one, other, atol=1e-12)


def test_a_law_with_more_false_columns_has_the_smaller_margin():
    X = np.random.default_rng(9).standard_t(2.5, (120, 40))
    heavy = student_law(2.5, sd=1.0)
    laws = tuple(normal_law(1.0) if k % 10 < 5 else heavy for k in range(50))
    case = case_of(X, law_draws=laws, replicates=400)
    calm, loud = (
        run_law(case, law, "any", [40], serial_map)[0].false_share.value
        for law in (normal_law(1.0), heavy)
    )
    effects = law_effects(case, 40, serial_map)
    kind = np.arange(50) % 10 < 5
    assert loud - calm > 0.01
    assert effects[~kind, 2].mean() < effects[kind, 2].mean()


def test_the_band_holds_the_criterias_own_error():
    # One law stated exactly: all that moves the limit is which columns matter, and chance.
    case = case_of(target=TargetSpec(relevant=4, smallest_effect=0.38), replicates=400)
    limit = stress(case, serial_map, twins=False, points=3).stability
    assert len(limit.draws) == 50
    assert len(set(limit.draws)) > 10
    assert limit.low < limit.columns < 40
    assert limit.high is None or limit.high > limit.columns


def test_more_relevant_columns_than_there_are():
    found = stress(case_of(target=TargetSpec(relevant=60, smallest_effect=0.3)), serial_map)
    assert [run.columns for run in found.runs] == [40, 40]
    assert found.runs[0].false_share.value == 0.0


def test_undefined_stability_is_one_if_something_is_always_selected_and_else_none():
    # Every column relevant and found in each refit; effects that none can find.
    found = {}
    for effect in (3.0, 0.001):
        target = TargetSpec(relevant=6, smallest_effect=effect, risk=1e-6)
        case = case_of(np.random.default_rng(0).standard_normal((120, 6)), target=target)
        found[effect] = run_law(case, case.law, "fitted", [6], serial_map)[0]
    always, never = found[3.0], found[0.001]
    assert (always.size.value, always.exact.value, always.power.value) == (6.0, 1.0, 1.0)
    assert (always.stability.value, always.stability.low, always.stability.high) == (1, 1, 1)
    assert never.size.value == 0.0
    assert (never.stability.value, never.stability.low, never.stability.high) == (0, 0, 0)
    for name in ("stability", "power", "false_share"):
        assert getattr(always, name).error == getattr(never, name).error == 0.0


def test_errors_are_the_standard_errors_of_repeated_runs():
    case = case_of(replicates=100)
    runs = [
        run_law(replace(case, seed=seed), case.law, "fitted", [20], serial_map)[0]
        for seed in range(60)
    ]
    for name in ("stability", "power", "false_share", "exact", "size"):
        spread = np.std([getattr(run, name).value for run in runs], ddof=1)
        claimed = math.sqrt(np.mean([getattr(run, name).error ** 2 for run in runs]))
        # Supports differ between seeds as they do within a run; 60 runs know the sd to 9 %.
        assert claimed == pytest.approx(spread, rel=0.35), name
        assert claimed > 0
