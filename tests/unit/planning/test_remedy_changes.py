"""Remedies: each change recomputed by hand from the file, their ranking, names and prices."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from scipy.special import ndtri
from scipy.stats import rankdata

from scantling.core.streams import serial_map, worker_pool
from scantling.design.expand import expand
from scantling.design.parse import read_design
from scantling.design.table import read_table
from scantling.diagnostics.residuals import Residuals, fit_pilot
from scantling.diagnostics.volatility import Volatility
from scantling.law.families import student_law
from scantling.law.fit import fit_law
from scantling.planning.breakthrough import break_through, score_draws
from scantling.planning.budget import standing
from scantling.planning.case import Case, draw_laws
from scantling.planning.changes import recipes, worst_to_drop
from scantling.planning.limit import make_limit
from scantling.planning.recipe import Origin, carry_out, standardise
from scantling.planning.recompute import LAWS, recompute, with_fewer_laws
from scantling.planning.remedies import REFITTED, remedies
from scantling.planning.signal import signal
from scantling.simulation.scores import join, penalty_level

ROWS, RAW = 120, 8
OPEN = make_limit(math.inf, [math.inf] * 50, 52, mode="conditional")
FAILING = make_limit(0.0, [0.0] * 50, 52, mode="conditional")
"""Stability limits of the design itself: selection holds, or is what fails."""
DESIGN = """\
title = "Grain freight"
[data]
file = "grain.csv"
response = "freight"
[expand]
powers = 3
products = true
[target]
relevant = 2
smallest_effect = 0.5
[simulation]
replicates = 100
seed = 2
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class Work:
    """One design as far as the noise limit."""

    raw: np.ndarray
    design: Any
    table: Any
    residuals: Residuals
    case: Case
    noise: Any

    def origin(self, *, broken=(), case=None, factors=0):
        return Origin(
            design=self.design, table=self.table, residuals=self.residuals,
            diagnosis=diagnosis_of(broken, factors), case=case or self.case, noise=self.noise,
        )  # fmt: skip

    def changes(self, **changed):
        origin = self.origin(**changed)
        made = {recipe.name: (recipe, carry_out(recipe, origin)) for recipe in recipes(origin)}
        return {
            name: SimpleNamespace(case=case, dropped=recipe.dropped, price=recipe.price)
            for name, (recipe, case) in made.items()
            if case is not None
        }


def diagnosis_of(broken=(), factors=0):
    return SimpleNamespace(
        scores_without_variance=tuple(broken), structure=SimpleNamespace(factors=factors)
    )


@pytest.fixture(scope="module")
def work(tmp_path_factory):
    folder = tmp_path_factory.mktemp("grain")
    rng = np.random.default_rng(6)
    raw = rng.standard_t(3, (ROWS, RAW))
    freight = 40 + raw[:, 0] + rng.standard_t(3, ROWS)
    lines = ["freight," + ",".join(f"g{j}" for j in range(RAW))]
    for y, row in zip(freight, raw, strict=True):
        lines.append(",".join(repr(float(v)) for v in (y, *row)))
    (folder / "grain.csv").write_text("\n".join(lines) + "\n")
    (folder / "grain.toml").write_text(DESIGN)
    design = read_design(folder / "grain.toml")
    table = read_table(design)
    columns = expand(design, table)
    residuals = fit_pilot(columns.values, columns.response, time_ordered=False, seed=2)
    law = fit_law(residuals.values, family="student-t")
    case = Case(
        X=columns.values, law=law, law_draws=draw_laws(law, 2),
        response_sd=residuals.response_sd, residual_sd=residuals.sd, target=design.target,
        rule="plug-in", replicates=100, seed=2,
    )  # fmt: skip
    return Work(
        raw=raw, design=design, table=table, residuals=residuals, case=case,
        noise=break_through(case, serial_map),
    )  # fmt: skip


def by_hand(raw, *, powers, products):
    """Columns with mean 0 and mean square 1; powers of the column less its mean."""
    centred = raw - raw.mean(axis=0)
    columns = [centred[:, j] ** m for j in range(RAW) for m in range(1, powers + 1)]
    if products:
        columns += [raw[:, i] * raw[:, j] for i in range(RAW) for j in range(i + 1, RAW)]
    table = np.column_stack(columns)
    table = table - table.mean(axis=0)
    return table / np.sqrt((table**2).mean(axis=0))


def test_the_changes_that_apply(work):
    names = set(work.changes())
    assert work.noise.noise.reached
    drop = {name for name in names if name.startswith("drop")}
    assert len(drop) == 1
    assert names - drop == {
        "self-normalised loadings", "Huber loss", "normal scores of columns",
        "winsorised columns", "powers up to 2", "no powers", "no products",
    }  # fmt: skip


def test_the_design_itself_is_what_by_hand_makes_of_it(work):
    np.testing.assert_allclose(work.case.X, by_hand(work.raw, powers=3, products=True), atol=1e-9)


def test_fewer_powers_and_no_products_by_hand(work):
    found = work.changes()
    for name, options in (
        ("powers up to 2", {"powers": 2, "products": True}),
        ("no powers", {"powers": 1, "products": True}),
        ("no products", {"powers": 3, "products": False}),
    ):
        X = found[name].case.X
        np.testing.assert_allclose(X, by_hand(work.raw, **options), atol=1e-9, err_msg=name)
        assert X.shape[1] < work.case.columns


def test_normal_scores_by_hand(work):
    scores = ndtri((rankdata(work.raw, axis=0) - 0.5) / ROWS)
    expected = by_hand(scores, powers=3, products=True)
    changed = work.changes()["normal scores of columns"].case
    np.testing.assert_allclose(changed.X, expected, atol=1e-9)
    # Nothing else moves: law, rule, target and sizes are the design's.
    assert replace(changed, X=work.case.X) == work.case


def test_self_normalised_loadings_change_the_rule_alone(work):
    changed = work.changes()["self-normalised loadings"].case
    assert changed == replace(work.case, rule="self-normalised")
    again = work.changes(case=changed)
    assert "self-normalised loadings" not in again


def test_columns_whose_scores_lack_a_variance_are_dropped_by_number(work):
    found = work.changes(broken=(1, 4, 30))
    (name,) = [n for n in found if "lack" in n]
    assert name == "drop the 3 columns whose scores lack a variance"
    kept = [j for j in range(work.case.columns) if j not in (1, 4, 30)]
    np.testing.assert_array_equal(found[name].case.X, work.case.X[:, kept])
    # The columns were picked by the old draws, so the new case has its own.
    assert found[name].case.seed != work.case.seed
    most = range(work.case.columns // 2 + 1)
    assert not [n for n in work.changes(broken=most) if "lack" in n]


def test_the_worst_columns_are_dropped_as_few_as_suffice(work):
    dropped = worst_to_drop(work.case, work.noise)
    found = join([sample.found for sample in work.noise.drawn])

    def risk_without(gone):
        left = ~np.isin(found.column, gone)
        level = float(penalty_level(work.case.columns - len(gone), 0.05))
        over = left & (found.ratio > level)
        return np.unique(found.draw[over]).size / found.draws

    level = float(penalty_level(work.case.columns, 0.05))
    counts = np.bincount(found.column[found.ratio > level], minlength=work.case.columns)
    rest = np.setdiff1d(np.arange(work.case.columns), dropped)
    assert counts[dropped].min() >= counts[rest].max()
    assert 1 <= dropped.size <= math.ceil(0.5 * work.case.columns)
    assert risk_without(dropped) <= 0.05 or dropped.size == math.ceil(0.5 * work.case.columns)
    assert risk_without(dropped[:1]) > 0.05
    (name,) = [n for n in work.changes() if n.startswith("drop")]
    np.testing.assert_array_equal(work.changes()[name].case.X, work.case.X[:, rest])


def test_what_is_dropped_is_named_worst_first(work):
    found = join([sample.found for sample in work.noise.drawn])
    level = float(penalty_level(work.case.columns, 0.05))
    counts = np.bincount(found.column[found.ratio > level], minlength=work.case.columns)
    named = {n: change.dropped for n, change in work.changes(broken=(1, 4, 30)).items()}
    assert named.pop("drop the 3 columns whose scores lack a variance") == (1, 4, 30)
    (worst,) = [n for n in named if n.startswith("drop")]
    dropped = named.pop(worst)
    assert dropped == tuple(worst_to_drop(work.case, work.noise))
    assert list(counts[list(dropped)]) == sorted(counts[list(dropped)], reverse=True)
    assert len(dropped) == work.case.columns - work.changes()[worst].case.columns
    # Other changes drop nothing by name.
    assert set(named.values()) == {()}


@pytest.mark.parametrize("products", [True, False])
def test_a_change_that_leaves_the_design_as_it_is_is_skipped(work, tmp_path, products):
    # Powers of a dummy are the dummy: "no powers" would compute the same columns again. So are
    # its normal scores, but for rounding; not their products.
    dummies = (work.raw > 0).astype(float)
    lines = ["freight," + ",".join(f"g{j}" for j in range(RAW))]
    for y, row in zip(work.table.response, dummies, strict=True):
        lines.append(",".join(repr(float(v)) for v in (y, *row)))
    (tmp_path / "grain.csv").write_text("\n".join(lines) + "\n")
    text = DESIGN if products else DESIGN.replace("products = true", "products = false")
    (tmp_path / "grain.toml").write_text(text)
    design = read_design(tmp_path / "grain.toml")
    table = read_table(design)
    case = replace(work.case, X=expand(design, table).values)
    assert case.columns == RAW + products * RAW * (RAW - 1) // 2
    names = set(replace(work, design=design, table=table, case=case).changes())
    assert names >= {"self-normalised loadings"}
    assert not names & {"no powers", "powers up to 2"}
    assert ("normal scores of columns" in names) is ("no products" in names) is products


def test_nothing_is_dropped_where_noise_does_not_bind(work):
    quiet = replace(work, noise=replace(work.noise, noise=replace(work.noise.noise, reached=False)))
    assert not [n for n in quiet.changes() if n.startswith("drop")]


def test_weighting_by_volatility_by_hand(work):
    path = np.exp(np.linspace(-1, 1, ROWS)) * 2
    volatility = Volatility(
        omega=0.1, alpha=0.1, beta=0.8, innovation="student-t", nu=4.0, persistence=0.9,
        tail_index=4.0, path=path, path_draws=path[None], log_likelihood=0.0,
    )  # fmt: skip
    case = replace(work.case, law=replace(student_law(4, sd=1.0), volatility=volatility))
    changed = work.changes(case=case)["weight rows by fitted volatility"].case
    relative = path / math.sqrt((path**2).mean())
    X = work.case.X / relative[:, None]
    X = X - X.mean(axis=0)
    np.testing.assert_allclose(changed.X, X / np.sqrt((X**2).mean(axis=0)), atol=1e-12)
    # Each error divided by its volatility over the mean level: that level times z.
    assert changed.law.volatility is None
    assert changed.law.sd == pytest.approx(math.sqrt((path**2).mean()), rel=1e-12)
    assert changed.law.df == 4
    assert all(law.volatility is None for law in changed.law_draws)
    errors = work.residuals.values / relative
    assert changed.residual_sd == pytest.approx(errors.std(), rel=1e-12)
    y = work.residuals.fitted - work.residuals.fitted.mean() + work.residuals.values
    assert changed.response_sd == pytest.approx((y / relative).std(), rel=1e-12)


def test_weighting_does_not_depend_on_the_level_of_the_response(work):
    # The response is 40 on average: 40/sigma_t is no variation that columns could explain.
    path = np.exp(np.linspace(-1, 1, ROWS))
    volatility = Volatility(
        omega=0.1, alpha=0.1, beta=0.8, innovation="normal", nu=None, persistence=0.9,
        tail_index=9.0, path=path, path_draws=path[None], log_likelihood=0.0,
    )  # fmt: skip
    case = replace(work.case, law=replace(student_law(4, sd=1.0), volatility=volatility))
    moved = replace(work, residuals=replace(work.residuals, fitted=work.residuals.fitted + 1000.0))
    one, two = (
        each.changes(case=case)["weight rows by fitted volatility"].case for each in (work, moved)
    )
    assert one.response_sd == pytest.approx(two.response_sd, rel=1e-9)
    assert one.response_sd < 4 * one.residual_sd


def test_standardise_leaves_out_what_became_constant():
    found = standardise(np.array([[1.0, 5.0], [3.0, 5.0]]))
    assert found.tolist() == [[-1.0], [1.0]]


@pytest.fixture(scope="module")
def ranked(work):
    return remedies(
        work.design, work.table, work.residuals, diagnosis_of(), work.case, work.noise, OPEN,
        serial_map,
    )  # fmt: skip


def singles(found):
    return [remedy for remedy in found if not remedy.parts]


def key(remedy):
    allowed = remedy.allowed
    return (
        -(allowed.columns or 0), -(allowed.low or 0), bool(remedy.parts),
        remedy.risk_at_design.value,
    )  # fmt: skip


def test_all_are_ranked_with_a_name_and_a_price(work, ranked):
    assert {r.name for r in singles(ranked)} == set(work.changes())
    assert all(r.price and r.price[-1] != "." for r in ranked)
    assert sum(r.refitted for r in singles(ranked)) == REFITTED
    split = sum(r.refitted for r in ranked)
    assert [r.refitted for r in ranked] == sorted((r.refitted for r in ranked), reverse=True)
    for group in (ranked[:split], ranked[split:]):
        assert [key(r) for r in group] == sorted(key(r) for r in group)


def test_each_is_recomputed_on_its_own_columns(work, ranked):
    changed = work.changes()
    best = {}
    for remedy in singles(ranked):
        case = changed[remedy.name].case
        assert remedy.columns == case.columns
        noise = break_through(case, serial_map)
        found = signal(case, noise.fitted, noise.drawn)
        # Fewer draws under drawn laws are pooled: two standard errors apart at most.
        assert remedy.risk_at_design.value == pytest.approx(noise.curve[-1].risk, abs=0.015)
        both = min(noise.noise.columns, found.limit.columns)
        if remedy.refitted:
            assert remedy.allowed.columns <= 2.5 * both
        else:
            # At risks near the bar, limits move with the draws.
            assert both / 2.5 <= remedy.allowed.columns <= 2.5 * both
        if remedy.name != "Huber loss":
            best.setdefault(remedy.refitted, []).append(-both)
    # Selection is simulated for those that are best by noise and signal.
    assert max(best[True]) <= min(best[False])


@pytest.mark.parametrize("loss", ["squared", "huber", "absolute"])
@pytest.mark.parametrize("rule", ["plug-in", "self-normalised"])
def test_point_values_are_the_engines_own_and_bands_are_near_them(work, rule, loss):
    case = replace(work.case, rule=rule, loss=loss)
    own = break_through(case, serial_map)
    effects = signal(case, own.fitted, own.drawn).limit
    draws, _ = score_draws(case)
    found = recompute([work.case, with_fewer_laws(case)], draws, serial_map)[1]
    assert found.draws == draws == own.fitted.found.draws
    assert found.risk.value == pytest.approx(own.curve[-1].risk, abs=0.012)
    ends = found.limits["noise"].columns, own.noise.columns
    assert min(ends) >= max(ends) / 2 - 2
    assert found.limits["signal"].columns == effects.columns
    assert {len(limit.draws) for limit in found.limits.values()} == {LAWS}
    assert found.risk.low <= found.risk.value <= found.risk.high
    # Half as many laws, fewer draws under each: the ends move by some simulation error.
    assert found.risk.low == pytest.approx(own.curve[-1].low, abs=0.04)
    assert found.risk.high == pytest.approx(own.curve[-1].high, rel=0.6, abs=0.07)


def test_without_bands_only_the_points_are_computed(work):
    draws, _ = score_draws(work.case)
    (found,) = recompute([work.case], draws, serial_map, bands=False)
    alone = break_through(work.case, serial_map, bands=False)
    assert found.risk.low == found.risk.high == found.risk.value == alone.curve[-1].risk
    assert [len(limit.draws) for limit in found.limits.values()] == [1, 1]
    assert recompute([], draws, serial_map) == []


def test_what_theory_says_helps_does_help(work, ranked):
    # Self-normalised loadings keep their level whatever the tails (Belloni et al. (2012),
    # Econometrica 80); the design's own risk is far above.
    risk = {r.name: r.risk_at_design.value for r in ranked}
    own = work.noise.curve[-1].risk
    assert own > 0.05
    assert risk["self-normalised loadings"] < 0.02
    assert risk["normal scores of columns"] < own / 2


def test_workers_do_not_change_the_remedies(work, ranked):
    with worker_pool(2) as mapper:
        again = remedies(
            work.design, work.table, work.residuals, diagnosis_of(), work.case, work.noise, OPEN,
            mapper,
        )  # fmt: skip
    assert again == ranked


def refitted_names(found):
    return {remedy.name for remedy in found if remedy.refitted}


def test_more_are_refitted_where_selection_is_what_fails(work, ranked, monkeypatch):
    """Refits are replaced by what they might find, so that only their order is looked at."""
    import scantling.planning.remedies as module

    tried_once = module.computed(recipes(work.origin()), work.origin(), serial_map)

    def run(stability, allowed):
        tried = []

        def refits(case, mapper, *, twins, points):
            assert (twins, points) == (False, module.STRESS_POINTS)
            tried.append(case.columns)
            columns = float(allowed(len(tried)))
            assert len(case.law_draws) == LAWS
            limit = make_limit(columns, [columns] * LAWS, case.columns, mode="conditional")
            return SimpleNamespace(stability=limit)

        monkeypatch.setattr(module, "stress", refits)
        monkeypatch.setattr(module, "computed", lambda *work, **options: tried_once)
        monkeypatch.setattr(module, "best_pair", lambda *work: [])
        found = remedies(
            work.design, work.table, work.residuals, diagnosis_of(), work.case, work.noise,
            stability, serial_map,
        )  # fmt: skip
        assert len(tried) == len(refitted_names(found))
        return found

    # Nothing passes: all are tried, but only if it is selection that fails.
    most = len(singles(ranked))
    assert len(refitted_names(run(FAILING, lambda k: 0))) == most > REFITTED
    assert len(refitted_names(run(OPEN, lambda k: 0))) == REFITTED
    # Three that pass are enough.
    assert len(refitted_names(run(FAILING, lambda k: 5))) == REFITTED
    later = run(FAILING, lambda k: 5 if k >= 3 else 0)
    assert len(refitted_names(later)) == 5
    assert [remedy.refitted for remedy in later] == [True] * 5 + [False] * (len(later) - 5)
    assert [remedy.allowed.columns for remedy in later[:5]] == [5, 5, 5, 0, 0]
    assert {remedy.binding for remedy in later[:5]} == {"stability"}
    assert {remedy.answer for remedy in later[:5]} == {"over budget"}
    assert {remedy.answer for remedy in later[5:]} != {"over budget"}


def test_each_is_judged_by_its_own_columns_and_says_what_its_risk_rests_on(work, ranked):
    changed = work.changes()
    for remedy in singles(ranked):
        assert remedy.answer == standing(remedy.allowed, remedy.columns)
        assert remedy.dropped == changed[remedy.name].dropped
        noise = break_through(changed[remedy.name].case, serial_map, bands=False)
        assert remedy.draws == noise.fitted.found.draws >= 100
