"""The study of predicted risk: its grid holds what is promised, its rivals and counts are right."""

from __future__ import annotations

import importlib
import math
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from scipy.stats import beta, norm

VALIDATION = Path(__file__).parents[1] / "validation"


@pytest.fixture
def load(monkeypatch: pytest.MonkeyPatch):
    """Imports a module of the validation folder."""
    monkeypatch.syspath_prepend(str(VALIDATION))

    def module(name: str) -> ModuleType:
        return importlib.import_module(name)

    return module


def test_grid_holds_what_is_promised(load) -> None:
    grid = load("risk_grid")
    designs = [d for d in grid.GRID if d.law.family not in grid.APART]
    assert len(designs) >= 60
    assert len({d.name for d in grid.GRID}) == len(grid.GRID)
    assert np.mean([0.03 <= d.risk <= 0.30 for d in designs]) >= 1 / 3
    assert {d.errors for d in grid.GRID} == set(grid.ERRORS)
    assert {d.columns for d in grid.GRID} == {*grid.COLUMNS, "own lags"}
    assert {d.rule for d in designs} == {"plug-in", "self-normalised"}
    assert (min(d.rows for d in designs), max(d.rows for d in designs)) == (100, 1000)
    assert (min(d.width for d in designs), max(d.width for d in designs)) == (20, 1000)
    assert all(d.law.garch for d in designs if d.columns in grid.SHARED)


@pytest.mark.parametrize(
    "columns",
    [
        "normal", "t 3", "t 4", "t 6", "uniform", "equicorrelated t 4", "factors", "dummies 2 %",
        "dummies 5 %", "squares of normal", "squares of t 6", "products of normal",
        "products of t 6", "GARCH lags", "shared volatility", "shared lags", "own lags",
    ],
)  # fmt: skip
def test_samples_are_standardised_and_repeat(load, columns: str) -> None:
    grid = load("risk_grid")
    design = next(d for d in grid.GRID if d.columns == columns)
    sample = design.sample(np.random.default_rng(3))
    assert sample.X.shape == (design.rows, design.width)
    assert sample.y.shape == sample.errors.shape == sample.path.shape == (design.rows,)
    np.testing.assert_allclose(sample.X.mean(axis=0), 0, atol=1e-12)
    np.testing.assert_allclose((sample.X**2).mean(axis=0), 1, rtol=1e-9)
    assert np.unique(sample.X, axis=1).shape[1] >= 0.9 * design.width
    again = design.sample(np.random.default_rng(3))
    np.testing.assert_array_equal(sample.X, again.X)
    np.testing.assert_array_equal(sample.y, again.y)
    assert (np.ptp(sample.path) == 0) == (design.law.garch is None)


@pytest.mark.parametrize("name", ["normal", "Laplace", "GED 1.3", "t 6", "skewed t 4"])
def test_errors_have_mean_zero_and_unit_variance(load, name: str) -> None:
    """200,000 draws: standard error of the mean 0.0022, of t(4)'s variance larger."""
    errors, _ = load("risk_grid").ERRORS[name].sample(np.random.default_rng(5), 200_000)
    assert errors.mean() == pytest.approx(0, abs=0.009)
    assert errors.var() == pytest.approx(1, abs=0.05)


def test_lags_are_lags_of_the_response(load) -> None:
    grid = load("risk_grid")
    design = next(d for d in grid.GRID if d.columns == "own lags")
    sample = design.sample(np.random.default_rng(6))
    first = sample.X[:, -grid.OWN_LAGS]
    assert np.corrcoef(first[1:], sample.y[:-1])[0, 1] == pytest.approx(1, abs=1e-12)


def test_brute_force_of_one_column_is_exact_under_normal_errors(load) -> None:
    """n r^2 > L(1)^2 with r^2 ~ Beta(1/2, (n - 2)/2), exact; 4,000 draws, s.e. 0.0028."""
    study = load("risk_calibration")
    rng = np.random.default_rng(8)
    x = load("risk_grid").standardised(rng.standard_t(3, (50, 1)))
    hits = study.broken(x, lambda rng, k: rng.standard_normal((50, k)), "plug-in", rng)
    level = 1.1 * norm.isf(0.025)
    exact = float(beta.sf(level**2 / 50, 0.5, 24))
    assert hits.size == 4000
    assert hits.mean() == pytest.approx(exact, abs=0.009)


def test_recorded_risk_is_that_of_the_samples(load) -> None:
    """One sample of 20; given their columns the risks lie within 0.01 of their mean here."""
    study, grid = load("risk_calibration"), load("risk_grid")
    design = next(d for d in grid.GRID if d.name == "t 3 / t 3, 100 x 50")
    risk = study.true_risk(design, study.draw_sample(design, 1), 1)
    assert risk == pytest.approx(design.risk, abs=0.02)


@pytest.mark.parametrize(
    ("name", "shape", "tolerance"),
    [
        ("t 4", 0.25, 0.03),
        ("skewed t 4", 0.25, 0.03),
        ("GED 1.3", 1.3, 0.08),
        ("stable 1.7", 1.7, 0.06),
        ("GARCH t 5", 0.20, 0.04),
    ],
)
def test_oracle_finds_the_shape(load, name: str, shape: float, tolerance: float) -> None:
    """4,000 errors: about three standard errors."""
    law = load("risk_grid").ERRORS[name]
    errors, _ = law.sample(np.random.default_rng(11), 4000)
    draw, found = load("risk_rivals").maximum_likelihood(law.family, errors)
    assert found == pytest.approx(shape, abs=tolerance)
    assert draw(np.random.default_rng(1), 2).shape == (4000, 2)


def test_skewed_oracle_draws_are_skewed_and_centred(load) -> None:
    law = load("risk_grid").ERRORS["skewed t 4"]
    errors, _ = law.sample(np.random.default_rng(12), 2000)
    draw, _ = load("risk_rivals").maximum_likelihood("skewed t", errors)
    drawn = draw(np.random.default_rng(2), 100).ravel()
    truth = law.draw(np.random.default_rng(3), np.ones(200_000), 1)
    assert np.mean(drawn < 0) == pytest.approx(np.mean(truth < 0), abs=0.02)
    assert drawn.mean() == pytest.approx(0, abs=0.02)


def test_stable_density(load) -> None:
    """At 0 it is Gamma(1 + 1/a)/pi, exact; it integrates to 1."""
    rivals = load("risk_rivals")
    for exponent in (1.3, 1.7, 2.0):
        place, values = rivals.stable_table(exponent)
        assert math.exp(values[0]) == pytest.approx(
            math.gamma(1 + 1 / exponent) / math.pi, rel=1e-6
        )
        mass = 2 * np.trapezoid(np.exp(values), np.expm1(place))
        assert mass == pytest.approx(1, abs=2e-3)


def row(load, truth: float, answer: str, **changes: float):
    """A made-up row of the first design."""
    kind = load("risk_reading").Row
    values = dict.fromkeys((f for f in kind.__dataclass_fields__), 0.0)
    values |= {"design": 0, "replication": 1, "family": "normal", "truth": truth, "volatile": 0}
    return kind(**(values | {"answer": answer} | changes))


def test_verdicts_are_counted_in_clear_cases_alone(load) -> None:
    sheet = load("risk_reading").Sheet([
        row(load, 0.20, "within budget"), row(load, 0.20, "borderline"),
        row(load, 0.20, "over budget"), row(load, 0.01, "over budget"),
        row(load, 0.01, "within budget"), row(load, 0.06, "within budget"),
        row(load, 0.04, "over budget"), row(load, 0.06, "borderline"),
    ])  # fmt: skip
    assert sheet.wrong.tolist() == [True, False, False, True, False, False, False, False]
    assert sheet.undecided.tolist() == [False, True, False, False, False, False, False, False]


def test_ratio_of_errors_and_its_standard_error(load) -> None:
    """Errors 0.02 and 0.04 over 0.01 and 0.02: ratio 2 in each row, so no error."""
    sheet = load("risk_reading").Sheet([
        row(load, 0.1, "borderline", tool=0.12, oracle=0.11, low=0.1, high=0.2),
        row(load, 0.1, "borderline", tool=0.14, oracle=0.08, low=0.11, high=0.2),
    ])  # fmt: skip
    ratio, error = sheet.ratio("tool", "oracle")
    assert ratio == pytest.approx(2)
    assert error == pytest.approx(0, abs=1e-12)
    assert sheet.covered.tolist() == [True, False]
    # Errors 0.02 and 0.04: variance 0.0002 about their mean, divided by two rows.
    assert sheet.error_of_mean(sheet.misses("tool")) == pytest.approx(0.01)


def test_rows_come_back_from_their_file(load, tmp_path: Path) -> None:
    reading = load("risk_reading")
    rows = [row(load, 0.1234, "over budget", index=math.inf), row(load, 0.0, "borderline")]
    reading.write_rows(tmp_path / "rows.csv", rows)
    assert reading.read_rows(tmp_path / "rows.csv") == rows
