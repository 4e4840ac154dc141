"""Which columns the refits take as relevant, and what one batch of refits records of them."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from scantling.core.streams import serial_map, stream
from scantling.design.spec import TargetSpec
from scantling.law.families import normal_law, student_law
from scantling.planning.case import Case
from scantling.planning.recipe import Recipe, carry_out
from scantling.planning.refits import joined, mean_of, refit, scaled_errors, support_set
from scantling.planning.stress import run_law
from scantling.simulation.lasso import lasso_batch
from scantling.simulation.scores import penalty_level


def case_of(**changes):
    X = np.random.default_rng(0).standard_normal((120, 30))
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    law = normal_law(1.0)
    case = Case(
        X=X, law=law, law_draws=(law,) * 50, response_sd=1.2, residual_sd=1.1,
        target=TargetSpec(relevant=4, smallest_effect=0.38), rule="plug-in", replicates=100, seed=3,
    )  # fmt: skip
    return replace(case, **changes)


def test_known_columns_come_first_and_the_rest_at_random():
    case = case_of(support="named", relevant_columns=(20, 7))
    sets = [support_set(case, number) for number in range(6)]
    for chosen in sets:
        assert set(chosen.order[:2]) == {7, 20}
        assert sorted(chosen.order) == list(range(30))
        assert chosen.signs.size == 4
    assert len({tuple(chosen.order[2:4]) for chosen in sets}) > 3
    assert len({tuple(chosen.signs) for chosen in sets}) > 1
    run = run_law(case, case.law, "fitted", [15], serial_map)[0]
    assert run.support == "named"
    shares = dict(run.inclusion)
    assert {7, 20} < set(shares)
    assert all(0 <= share <= 1 for share in shares.values())


def test_of_more_known_columns_than_relevant_each_set_takes_some():
    case = case_of(relevant_columns=tuple(range(10)))
    taken = [frozenset(support_set(case, number).order[:4].tolist()) for number in range(20)]
    assert all(len(each) == 4 and each <= set(range(10)) for each in taken)
    assert len(set(taken)) > 5
    assert frozenset.union(*taken) == set(range(10))


def test_random_supports_are_those_without_known_columns():
    assert (
        support_set(case_of(), 1).order[:3].tolist() != support_set(case_of(), 2).order[:3].tolist()
    )
    rng = stream(3, "support", 1)
    np.testing.assert_array_equal(support_set(case_of(), 1).order, rng.permutation(30))


@pytest.mark.parametrize(("dropped", "left"), [((0, 5), (17, 5)), ((7,), (19,)), ((7, 20), ())])
def test_dropping_columns_keeps_track_of_the_relevant_ones(dropped, left):
    case = case_of(relevant_columns=(7, 20) if dropped != (0, 5) else (7, 19))
    origin = SimpleNamespace(case=case)
    changed = carry_out(Recipe(names=("drop",), prices=("",), dropped=dropped), origin)
    expected = tuple(sorted(left)) if dropped == (0, 5) else left
    assert changed.relevant_columns == expected
    for j in changed.relevant_columns:
        assert any(np.array_equal(changed.X[:, j], case.X[:, k]) for k in case.relevant_columns)


def test_a_batch_records_selection_signs_and_losses_of_the_lasso():
    case = case_of(law=student_law(3, sd=1.0))
    chosen = support_set(case, 0)
    found = refit(case, chosen, 20, case.law, 50, stream(1, "batch"))
    X, mean = mean_of(case, chosen, 20)
    errors = scaled_errors(case, case.law, 50, stream(1, "batch"))
    level = float(penalty_level(20, 0.05)) / np.sqrt(120)
    Y = mean[:, None] + errors
    B = lasso_batch(X, Y, level * np.sqrt((errors**2).mean(axis=0)), tol=1e-9)
    np.testing.assert_array_equal(found.table(), (B != 0).T)
    np.testing.assert_allclose(found.loss, ((X @ B - mean[:, None]) ** 2).mean(axis=0), rtol=0.02)
    best = X[:, :4] @ np.linalg.lstsq(X[:, :4], Y, rcond=None)[0]
    np.testing.assert_allclose(found.oracle, ((best - mean[:, None]) ** 2).mean(axis=0), rtol=1e-9)
    wrong = (B[:4] * chosen.signs[:, None] < 0).sum(axis=0)
    np.testing.assert_array_equal(found.wrong, wrong)
    np.testing.assert_allclose(found.frequencies(), (B[:4] != 0).mean(axis=1))


def test_least_squares_on_the_relevant_columns_costs_their_number_over_n():
    # E ||P e||^2 / n = s sd^2 / n for independent errors: 4 * 1.21 / 120.
    case = case_of()
    found = refit(case, support_set(case, 0), 10, case.law, 4000, stream(2, "batch"))
    assert found.oracle.mean() == pytest.approx(4 * 1.21 / 120, rel=4 * np.sqrt(2 / 4 / 4000))


def test_a_refit_that_selects_nothing_loses_the_whole_mean():
    case = case_of(target=TargetSpec(relevant=4, smallest_effect=0.001, risk=1e-9))
    chosen = support_set(case, 0)
    found = refit(case, chosen, 10, case.law, 20, stream(2, "batch"))
    assert not found.table().any()
    np.testing.assert_allclose(found.loss, (mean_of(case, chosen, 10)[1] ** 2).mean(), rtol=1e-12)
    assert found.summary().stability is None


def test_signs_are_wrong_where_columns_of_opposite_effects_look_alike():
    # Three nearly equal columns: the lasso takes one, with the sign that two of them have.
    rng = np.random.default_rng(1)
    alike = rng.standard_normal((200, 1)) + 0.05 * rng.standard_normal((200, 3))
    X = np.column_stack([alike, rng.standard_normal((200, 4))])
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    target = TargetSpec(relevant=3, smallest_effect=0.5)
    case = case_of(X=X, target=target, relevant_columns=(0, 1, 2), replicates=500)
    hidden = run_law(case, case.law, "fitted", [7], serial_map)[0]
    # A third of the choices where signs are mixed, over three relevant columns.
    assert 0.02 < hidden.sign_errors.value < 0.25
    plain = replace(case, relevant_columns=(3, 4, 5))
    assert run_law(plain, case.law, "fitted", [7], serial_map)[0].sign_errors.value == 0


def test_batches_joined_are_one_batch():
    case = case_of()
    chosen = support_set(case, 0)
    parts = [
        refit(case, chosen, 12, case.law, size, stream(k, "b")) for k, size in ((1, 7), (2, 5))
    ]
    whole = joined(parts)
    np.testing.assert_array_equal(whole.table(), np.vstack([part.table() for part in parts]))
    assert whole.replicates == 12
    assert whole.summary().prediction_loss.value == pytest.approx(
        sum(p.loss.sum() for p in parts) / sum(p.oracle.sum() for p in parts)
    )
