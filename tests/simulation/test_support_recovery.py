"""Success curves on standard normal designs: METHODS 6.2, Wainwright (2009), in small."""

from __future__ import annotations

import importlib
import math
from pathlib import Path

import pytest

VALIDATION = Path(__file__).parents[1] / "validation"
REPLICATES = 120


@pytest.fixture
def study(monkeypatch):
    monkeypatch.syspath_prepend(str(VALIDATION))
    return importlib.import_module("support_recovery")


def test_thresholds(study):
    # 2 s ln(p - s), by hand: s = 11, 16, 23.
    assert [study.threshold(p) for p in (128, 256, 512)] == pytest.approx(
        [104.77, 175.38, 284.85], abs=0.005
    )


def test_curves_cross_near_one_and_steepen(study):
    found = {}
    for p in (128, 512):
        for theta in (0.5, 1.0, 1.5):
            share = study.success_share(p, theta, REPLICATES, 5)
            other = study.REFERENCE[p][study.THETAS.index(theta)]
            # Both simulated: 500 replicates there, fewer here.
            error = math.sqrt(max(other * (1 - other), 0.002) * (1 / REPLICATES + 1 / 500))
            assert share == pytest.approx(other, abs=4 * error), (p, theta)
            found[p, theta] = share
    assert found[128, 1.0] == pytest.approx(found[512, 1.0], abs=0.2)
    assert found[512, 1.5] - found[512, 0.5] > found[128, 1.5] - found[128, 0.5]
    assert found[512, 0.5] == 0
