"""The family chosen on samples of known laws, with claims that samples of others must fail."""

from __future__ import annotations

from collections import Counter
from functools import cache

import numpy as np
import pytest

from scantling.law.choice import choose
from scantling.law.notation import parse_law

SAMPLES = 25


@cache
def chosen(law: str, rows: int) -> Counter[str]:
    """How often each family is chosen over samples of a stated law."""
    innovation, rng = parse_law(law).innovation, np.random.default_rng(5)
    found: Counter[str] = Counter()
    for number in range(SAMPLES):
        sample = innovation.draw(rows, rng)
        sample -= sample.mean()
        found[choose(sample, time_ordered=False, seed=number).family] += 1
    return found


@pytest.mark.parametrize(
    ("law", "rows", "least"),
    [
        ("student-t:df=3", 250, 0.85),
        ("student-t:df=4", 250, 0.80),
        ("student-t:df=4", 800, 0.95),
    ],
)
def test_student_samples_stay_student(law: str, rows: int, least: float) -> None:
    assert chosen(law, rows)["student-t"] >= least * SAMPLES


@pytest.mark.parametrize(
    ("law", "families", "least"),
    [
        ("normal", {"normal"}, 0.95),
        ("laplace", {"laplace", "ged"}, 0.60),
        ("ged:shape=0.7", {"ged"}, 0.85),
        ("skewed-t:df=4,skew=-0.3", {"skewed-t"}, 0.85),
        ("stable:index=1.4", {"stable", "student-t"}, 0.90),
    ],
)
def test_eight_hundred_values_show_the_law_or_one_of_the_same_tail(
    law: str, families: set[str], least: float
) -> None:
    found = chosen(law, 800)
    assert sum(found[family] for family in families) >= least * SAMPLES
    # Held against samples of another law the claim fails.
    other = chosen("student-t:df=4" if "student-t" not in families else "normal", 800)
    assert sum(other[family] for family in families) < least * SAMPLES


def test_a_lighter_tail_is_not_taken_on_noise() -> None:
    """Of samples of t(3) few are called a law all of whose moments exist."""
    found = chosen("student-t:df=3", 250)
    assert sum(found[family] for family in ("normal", "laplace", "ged")) <= 0.08 * SAMPLES
