"""The best pair, when it is shown; more rows as a remedy."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest

import scantling.planning.remedies as module
from scantling.core.estimate import Estimate
from scantling.core.streams import serial_map
from scantling.planning.budget import Allowed
from scantling.planning.limit import make_limit
from scantling.planning.recipe import Recipe
from scantling.planning.recompute import LAWS, Recomputed
from scantling.planning.remedies import (
    MOST_PAIRED,
    PAIRED,
    Tried,
    beats,
    best_pair,
    more_rows_remedy,
    remedies,
)
from scantling.planning.rows import RowsEntry

ASKED = 100
CASE = SimpleNamespace(
    rows=500, columns=ASKED, loss="squared", replicates=400, law=SimpleNamespace(sd=1.0)
)
ORIGIN = SimpleNamespace(case=CASE)
OPEN = make_limit(math.inf, [math.inf] * LAWS, ASKED, mode="conditional")


def limit(columns, low=None, most=ASKED):
    """A limit, its band's low end where given; math.inf is not reached."""
    low = columns if low is None else low
    draws = [low] * 3 + [columns] * (LAWS - 3)
    return make_limit(columns, draws, most, mode="conditional")


def single(name, **sets):
    return Recipe(names=(name,), prices=(f"price of {name}",), **sets)


RULE = single("rule", rule="self-normalised")
CLIP = single("clip", transform="clip")
LOW = single("low", powers=1)
FREE = single("free", products=False)
RANK = single("rank", transform="normal-scores")


def tried(recipe, noise, *, low=None, risk=0.02, high=None, columns=ASKED, stability=None):
    found = Recomputed(
        limits={"noise": limit(noise, low, columns), "signal": limit(math.inf, most=columns)},
        risk=Estimate(value=risk, low=risk / 2, high=high or 1.5 * risk),
        draws=400,
    )
    return Tried(recipe=recipe, columns=columns, found=found, stability=stability)


class Engine:
    """What `computed` and `stress` would find, by the recipe's names."""

    def __init__(self, monkeypatch, table, stable=None):
        self.table, self.stable, self.asked = table, stable or {}, []
        monkeypatch.setattr(module, "computed", self.computed)
        monkeypatch.setattr(module, "with_refits", self.with_refits)

    def computed(self, wanted, origin, mapper, *, bands=True):
        self.asked += [(recipe.names, bands) for recipe in wanted]
        return [tried(recipe, **self.table[recipe.names]) for recipe in wanted]

    def with_refits(self, each, origin, mapper):
        columns = self.stable.get(each.recipe.names, math.inf)
        stability = limit(columns, most=each.columns)
        return Tried(
            recipe=each.recipe, columns=each.columns, found=each.found, stability=stability
        )


def test_the_best_pair_is_computed_in_full_and_allows_more_than_either(monkeypatch):
    engine = Engine(
        monkeypatch,
        {
            ("rule", "clip"): {"noise": 60, "risk": 0.06},
            ("rule", "low"): {"noise": 80, "risk": 0.055},
            ("clip", "low"): {"noise": 30, "risk": 0.07},
        },
    )
    singles = [tried(RULE, 40), tried(CLIP, 30), tried(LOW, 20)]
    (best,) = best_pair(singles, ORIGIN, serial_map)
    assert best.recipe.names == ("rule", "low")
    assert best.recipe.price == "price of rule; price of low"
    assert best.allowed.columns == 80 and best.stability is not None
    assert engine.asked == [
        (("rule", "clip"), False), (("rule", "low"), False), (("clip", "low"), False),
        (("rule", "low"), True),
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("alone", "together", "stable", "shown"),
    [
        (40, {"noise": 40, "risk": 0.02}, math.inf, False),
        (40, {"noise": 39, "risk": 0.001}, math.inf, False),
        # As many at a clearly lower risk.
        (40, {"noise": 40, "risk": 0.004, "high": 0.01}, math.inf, True),
        (40, {"noise": 40, "risk": 0.004, "high": 0.03}, math.inf, False),
        # More by noise, but selection takes it back.
        (40, {"noise": 90, "risk": 0.02}, 35, False),
        (40, {"noise": 90, "risk": 0.02}, 50, True),
        # One is enough by itself: a second change only costs.
        (math.inf, {"noise": math.inf, "risk": 0.0001, "high": 0.001}, math.inf, False),
    ],
)
def test_a_pair_is_shown_only_if_it_does_better_than_either(
    monkeypatch, alone, together, stable, shown
):
    Engine(monkeypatch, {("rule", "clip"): together}, {("rule", "clip"): stable})
    singles = [tried(RULE, alone, stability=OPEN), tried(CLIP, 20, stability=OPEN)]
    assert bool(best_pair(singles, ORIGIN, serial_map)) is shown


def test_a_pair_that_settles_what_a_part_leaves_open_is_better():
    part = tried(RULE, math.inf, low=30, stability=OPEN)
    settled = tried(CLIP, math.inf, stability=OPEN)
    assert beats(settled, part) and not beats(part, settled)
    assert not beats(part, part)


def test_without_refits_of_both_noise_and_signal_alone_are_compared():
    pair = tried(RULE, 60)
    part = tried(CLIP, 70, stability=limit(10))
    assert part.allowed.columns == 10 and part.open.columns == 70
    assert not beats(pair, part)
    assert beats(tried(RULE, 60, stability=OPEN), part)


def test_pairs_are_made_of_the_best_and_of_those_that_tie(monkeypatch):
    names = [f"c{k}" for k in range(9)]
    # All set something else or nothing: every pair can be joined.
    changes = [single(name) for name in names]
    table = {(a, b): {"noise": 1} for i, a in enumerate(names) for b in names[i + 1 :]}
    engine = Engine(monkeypatch, table)
    falling = [tried(change, 50 - k) for k, change in enumerate(changes)]
    assert best_pair(falling, ORIGIN, serial_map) == []
    assert {name for pair, _ in engine.asked for name in pair} == set(names[:PAIRED])
    engine.asked.clear()
    best_pair([tried(change, 50) for change in changes], ORIGIN, serial_map)
    assert {name for pair, _ in engine.asked for name in pair} == set(names[:MOST_PAIRED])
    engine.asked.clear()
    assert best_pair([tried(CLIP, 10), tried(RANK, 20)], ORIGIN, serial_map) == []
    assert best_pair([tried(CLIP, 10)], ORIGIN, serial_map) == []
    assert engine.asked == []


def test_a_pair_stands_where_its_columns_put_it(monkeypatch):
    table = {
        ("rule",): {"noise": 40}, ("low",): {"noise": 30}, ("rule", "low"): {"noise": 70},
    }  # fmt: skip
    Engine(monkeypatch, table)
    monkeypatch.setattr(module, "recipes", lambda origin: (RULE, LOW))
    entry = RowsEntry(
        rows=1000,
        noise=55,
        signal=100,
        stability=90,
        allowed=55,
        risk=0.07,
        risk_error=0.03,
    )
    found = remedies(None, None, None, None, CASE, None, OPEN, serial_map, (entry,))
    assert [(r.name, r.allowed.columns, r.parts) for r in found] == [
        ("rule and low", 70, ("rule", "low")),
        ("2 times the rows (1,000)", 55, ()),
        ("rule", 40, ()),
        ("low", 30, ()),
    ]
    assert found[0].price == "price of rule; price of low"
    assert {r.binding for r in found} == {"noise"}


def entry(rows, noise, *, stability=ASKED, risk=0.1):
    allowed = min(noise, ASKED if stability is None else stability)
    return RowsEntry(
        rows=rows,
        noise=noise,
        signal=ASKED,
        stability=stability,
        allowed=allowed,
        risk=risk,
        risk_error=0.03,
    )


def test_more_rows_are_the_fewest_that_allow_all():
    table = [entry(250, 5), entry(500, 20), entry(1000, ASKED, risk=0.04), entry(2000, ASKED)]
    found = more_rows_remedy(table, CASE)
    assert (found.name, found.columns) == ("2 times the rows (1,000)", ASKED)
    assert found.allowed == Allowed(columns=ASKED, low=None, high=None, note="at least")
    # A point value settles nothing.
    assert (found.answer, found.binding, found.refitted) == ("borderline", None, True)
    assert found.risk_at_design == Estimate(value=0.04, low=0.04, high=0.04)
    assert "fitted law" in found.price


def test_more_rows_that_do_not_allow_all_are_the_best_of_them():
    table = [entry(500, 20), entry(1000, 60), entry(2000, 60, stability=None)]
    found = more_rows_remedy(table, CASE)
    assert found.name == "2 times the rows (1,000)"
    assert (found.allowed.columns, found.answer, found.binding) == (60, "over budget", "noise")
    last = more_rows_remedy([entry(2000, 60, stability=None)], CASE)
    assert last.name == "4 times the rows (2,000)" and not last.refitted
    assert more_rows_remedy([entry(250, 5), entry(500, 20)], CASE) is None
    assert more_rows_remedy([], CASE) is None
    # Where more rows do not help, as with scores of three moments, they are no remedy.
    assert more_rows_remedy([entry(500, 20), entry(1000, 20), entry(2000, 15)], CASE) is None
    unknown = RowsEntry(
        rows=1000,
        noise=9,
        signal=None,
        stability=None,
        allowed=None,
        risk=0.1,
        risk_error=0.03,
    )
    found = more_rows_remedy([unknown], CASE)
    assert (found.allowed.columns, found.answer) == (None, "borderline")
    assert found.allowed.note == "the law has no variance"


def test_ranks_put_columns_first_then_what_is_settled_then_fewer_changes_then_risk():
    order = [
        tried(RULE, 60), tried(CLIP, 50, low=40), tried(LOW, 50, low=30, risk=0.01),
        tried(FREE, 50, low=30, risk=0.02),
        tried(Recipe(names=("a", "b"), prices=("", "")), 50, low=30, risk=0.001),
    ]  # fmt: skip
    shuffled = [order[k] for k in np.random.default_rng(0).permutation(len(order))]
    assert sorted(shuffled, key=Tried.rank) == order
