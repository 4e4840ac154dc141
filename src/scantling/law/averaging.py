"""What the sample leaves open about the law, the family included.

Choosing one family and drawing its parameters alone understates what is open: 200 to 300 rows do
not tell a Laplace from a generalised error law, or that from a Student t. Families are weighted by
their evidence, the likelihood averaged over the shapes before the sample is seen; Kass et al.
(1995), Journal of the American Statistical Association 90, 773-795.
"""

from __future__ import annotations

import numpy as np

from scantling.core.record import FloatArray
from scantling.law.choice import Choice
from scantling.law.innovation import ShapeSpread, averaged_spread, single_spread

NEGLIGIBLE = 1e-3
"""Families of smaller probability are left out."""
ODDS = {
    "normal": 10.0, "student-t": 1.0, "skewed-t": 1.0, "laplace": 5.0, "ged": 5.0, "stable": 1.0,
}  # fmt: skip
"""Weights of the families before the sample is seen. Families of fewer or lighter shapes get more:
those of heavier tails can imitate them, and a risk averaged over both errs more where they are
wrong. Set by the errors of predicted risks over known designs, with a seed of their own;
tests/validation/risk_calibration.py measures what comes of it."""
ONE_SHAPE = ("normal", "laplace")
"""Families with no parameter but the scale."""


def open_spread(values: FloatArray, choice: Choice, *, seed: int) -> ShapeSpread:
    """Laws the sample (n,) leaves open, over the families tried, with their probabilities.

    A stable law counts only where it is the one chosen: its missing variance has to be shown.
    """
    laws = {
        name: law for name, law in choice.laws.items() if name != "stable" or choice.family == name
    }
    spreads = {
        name: single_spread(law, values) if name in ONE_SHAPE else law.spread(values, seed=seed)
        for name, law in laws.items()
    }
    logs = np.array([spread.log_evidence for spread in spreads.values()])
    weights = np.exp(logs - logs.max()) * np.array([ODDS[name] for name in spreads])
    weights /= weights.sum()
    kept = [
        (spread, weight)
        for (name, spread), weight in zip(spreads.items(), weights, strict=True)
        if weight >= NEGLIGIBLE or name == choice.family
    ]
    total = np.array([weight for _, weight in kept])
    return averaged_spread([spread for spread, _ in kept], total / total.sum())
