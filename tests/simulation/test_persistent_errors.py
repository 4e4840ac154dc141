"""Errors and columns that both persist from row to row: noise then passes the usual penalty."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import norm

from scantling.core.streams import serial_map, worker_pool
from scantling.design.spec import TargetSpec
from scantling.diagnostics.clustering import find_dependence
from scantling.diagnostics.residuals import fit_pilot
from scantling.law.fit import error_law
from scantling.planning.breakthrough import break_through
from scantling.planning.case import Case, draw_laws
from scantling.planning.signal import signal_limit_of

ROWS, COLUMNS, SAMPLES, SEED = 400, 60, 6, 1


def persisting(rng, shape, keep):
    shocks = rng.standard_t(6, (shape[0] + 200, *shape[1:]))
    return lfilter([1.0], [1.0, -keep], shocks, 0)[200:]


def sample(number, keep):
    rng = np.random.default_rng([number, 8])
    X = persisting(rng, (ROWS, COLUMNS), 0.8)
    X = (X - X.mean(axis=0)) / X.std(axis=0)
    return X, persisting(rng, (ROWS,), keep)


def case_of(X, y):
    residuals = fit_pilot(X, y, time_ordered=True, seed=SEED)
    e = np.asarray(residuals.values)
    levels, clustering = find_dependence(e, seed=SEED)
    law = error_law(
        e, volatility=clustering.volatility, autoregression=levels.autoregression, seed=SEED
    )
    return Case(
        X=X, law=law, law_draws=draw_laws(law, SEED), response_sd=residuals.response_sd,
        residual_sd=residuals.sd, target=TargetSpec(relevant=3, smallest_effect=0.3),
        rule="plug-in", replicates=400, seed=SEED,
    )  # fmt: skip


def true_risk(X, keep):
    """2,000 fresh draws of the true errors against 1.1 Phi^-1(1 - .05/2p) rms(e)/sqrt(n)."""
    e = persisting(np.random.default_rng(99), (ROWS, 2000), keep)
    e -= e.mean(axis=0)
    ratios = np.abs(X.T @ e) / np.sqrt(ROWS) / e.std(axis=0)
    return float((ratios.max(axis=0) > 1.1 * norm.isf(0.05 / (2 * X.shape[1]))).mean())


@pytest.mark.parametrize("keep", [0.6, 0.0])
def test_the_predicted_risk_is_the_true_one(keep):
    found, truth = [], []
    with worker_pool(1):
        for number in range(SAMPLES):
            X, y = sample(number, keep)
            found.append(break_through(case_of(X, y), serial_map).curve[-1].risk)
            truth.append(true_risk(X, keep))
    # Estimated coefficients (error .04 each) move the risk by about a tenth in one sample.
    assert np.mean(found) == pytest.approx(np.mean(truth), abs=0.08)
    if keep:
        assert np.mean(truth) > 0.3  # where independent errors would have .02
        assert min(found) > 0.12
    else:
        assert max(found) < 0.05


def test_fewer_effects_are_detectable_where_levels_persist():
    X, y = sample(3, 0.6)
    with worker_pool(1):
        case = case_of(X, y)
        found = break_through(case, serial_map, bands=False)
        with_levels = signal_limit_of(case, case.law, found.fitted)
        apart = case.law.without_autoregression()
        quiet = break_through(
            Case(**{f: getattr(case, f) for f in case.__slots__} | {"law": apart, "law_draws": ()}),
            serial_map, bands=False,
        )  # fmt: skip
    assert with_levels < signal_limit_of(case, apart, quiet.fitted)
