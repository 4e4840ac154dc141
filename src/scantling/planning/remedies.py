"""What would help, each change carried out and recomputed by the same engine."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from scantling.core.estimate import Estimate
from scantling.core.streams import MEMORY_BOUND, Mapper, blocks
from scantling.design.spec import Design
from scantling.design.table import Table
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.residuals import Residuals
from scantling.planning.breakthrough import BreakThrough, score_draws
from scantling.planning.budget import BORDERLINE, OVER, WITHIN, Allowed, combine, standing
from scantling.planning.case import Case
from scantling.planning.changes import recipes
from scantling.planning.limit import AT_LEAST, Limit
from scantling.planning.recipe import Origin, Recipe, carry_out, joined
from scantling.planning.recompute import Recomputed, recompute, with_fewer_laws
from scantling.planning.rows import SEARCH_DRAWS, RowsEntry
from scantling.planning.stress import stress

REFITTED = 3
"""Remedies for which selection is simulated too: the best by noise and signal."""
BYTES = 24
"""Of memory for each value of a changed design's columns while it is computed."""
REFITTED_LOSSES = ("squared", "square-root", "huber")
"""Losses whose selection is simulated."""
STRESS_POINTS = 4
PAIRED = 4
"""Best single changes that pairs are made of."""
MOST_PAIRED = 6
"""The same, those that tie with the last included."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Remedy:
    """A change of the design, and the budget it would have."""

    name: str
    """The change, in words."""
    columns: int
    """Columns of the changed design."""
    answer: str
    """within budget | borderline | over budget: the changed design by its own columns."""
    allowed: Allowed
    """Of the changed design."""
    binding: str | None
    """Limit that binds the changed design; None if none is reached."""
    risk_at_design: Estimate
    """At all of the changed design's columns."""
    draws: int
    """Draws of errors behind its point value."""
    refitted: bool
    """Whether selection was simulated; if not, `allowed` is of noise and signal alone."""
    dropped: tuple[int, ...]
    """Columns of the present design that it drops by name, worst first."""
    price: str
    """What the change costs, in words."""
    parts: tuple[str, ...] = ()
    """The two changes that a pair joins; empty for a single change."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Tried:
    """A recipe, carried out and computed."""

    recipe: Recipe
    """The change."""
    columns: int
    """Columns of the changed design."""
    found: Recomputed
    """What noise and signal allow it."""
    stability: Limit | None = None
    """What selection allows; None if it was not simulated."""

    @property
    def open(self) -> Allowed:
        """Columns that noise and signal allow."""
        return combine(self.found.limits, self.columns)[0]

    @property
    def limits(self) -> dict[str, Limit]:
        """All that were computed."""
        refits = {} if self.stability is None else {"stability": self.stability}
        return self.found.limits | refits

    @property
    def allowed(self) -> Allowed:
        """Columns that all limits computed allow."""
        return combine(self.limits, self.columns)[0]

    def rank(self) -> tuple[float, ...]:
        """Best first: columns allowed, as far as they are settled; fewer changes; lower risk."""
        allowed = self.allowed
        return (
            -(allowed.columns or 0), -(allowed.low or 0), len(self.recipe.names),
            self.found.risk.value,
        )  # fmt: skip


def remedies(
    design: Design, table: Table, residuals: Residuals, diagnosis: Diagnosis, case: Case,
    noise: BreakThrough, stability: Limit, mapper: Mapper, rows: Sequence[RowsEntry] = (),
) -> tuple[Remedy, ...]:  # fmt: skip
    """All single changes, and the best pair of them where it does better than either alone.

    Best first: those whose selection was simulated, by allowed columns. Noise and signal are
    recomputed for all; selection for the best three, and where selection is what fails for more
    of them, until three pass. `rows` are what other numbers of rows would allow.
    """
    origin = Origin(
        design=design, table=table, residuals=residuals, diagnosis=diagnosis, case=case,
        noise=noise,
    )  # fmt: skip
    ordered = sorted(computed(recipes(origin), origin, mapper), key=Tried.rank)
    singles = refitted(ordered, origin, stability, mapper)
    pair = best_pair(sorted(singles, key=Tried.rank), origin, mapper)
    out = [_remedy(each) for each in sorted([*singles, *pair], key=Tried.rank)]
    longer = more_rows_remedy(rows, case)
    if longer is not None:
        out.append(longer)
    # Stable: those alike in both keep the finer order they have.
    return tuple(sorted(out, key=lambda r: (not r.refitted, -(r.allowed.columns or 0))))


def computed(
    wanted: Iterable[Recipe], origin: Origin, mapper: Mapper, *, bands: bool = True
) -> list[Tried]:
    """Noise and signal of every recipe that changes the design.

    Recipes that agree on the errors are simulated together, as many as memory allows.
    """
    draws, _ = score_draws(origin.case)
    most = max(1, MEMORY_BOUND // 2 // (BYTES * origin.case.rows * origin.case.columns))
    out: list[Tried] = []
    for _, group in itertools.groupby(sorted(wanted, key=_errors), key=_errors):
        alike = list(group)
        for start, stop in blocks(len(alike), most):
            tried = [(recipe, carry_out(recipe, origin)) for recipe in alike[start:stop]]
            made = [(recipe, with_fewer_laws(case)) for recipe, case in tried if case is not None]
            found = recompute([case for _, case in made], draws, mapper, bands=bands)
            out += [
                Tried(recipe=recipe, columns=case.columns, found=each)
                for (recipe, case), each in zip(made, found, strict=True)
            ]
    return out


def _errors(recipe: Recipe) -> tuple[bool, bool, bool]:
    return recipe.errors


def refitted(ordered: list[Tried], origin: Origin, stability: Limit, mapper: Mapper) -> list[Tried]:
    """The same, selection simulated for the best; for more where `stability` fails itself."""
    out: list[Tried] = []
    for each in ordered:
        done = [tried for tried in out if tried.stability is not None]
        passing = sum(bool(tried.allowed.columns) for tried in done)
        if len(done) < REFITTED or (stability.reached and passing < REFITTED):
            each = with_refits(each, origin, mapper)
        out.append(each)
    return out


def with_refits(tried: Tried, origin: Origin, mapper: Mapper) -> Tried:
    """The same with its stability limit, where selection can be simulated."""
    loss = tried.recipe.loss or origin.case.loss
    if loss not in REFITTED_LOSSES or not math.isfinite(origin.case.law.sd):
        return tried
    case = carry_out(tried.recipe, origin)
    assert case is not None
    done = stress(with_fewer_laws(case), mapper, twins=False, points=STRESS_POINTS)
    return replace(tried, stability=done.stability)


def best_pair(singles: Sequence[Tried], origin: Origin, mapper: Mapper) -> list[Tried]:
    """The best pair of the best single changes, if it does better than either alone.

    All pairs that might are compared by point values; the best is computed in full.
    """
    if len(singles) < 2:
        return []
    last = singles[min(PAIRED, len(singles)) - 1].rank()
    chosen = [each for each in singles if each.rank() <= last][:MOST_PAIRED]
    alone = {each.recipe.names[0]: each for each in chosen}

    def parts(recipe: Recipe) -> tuple[Tried, Tried]:
        return alone[recipe.names[0]], alone[recipe.names[1]]

    pairs = [joined(one.recipe, two.recipe) for one, two in itertools.combinations(chosen, 2)]
    hopeful = [pair for pair in pairs if pair is not None and not any(map(_settled, parts(pair)))]
    rough = computed(hopeful, origin, mapper, bands=False)
    rough = [each for each in rough if all(might_beat(each, part) for part in parts(each.recipe))]
    if not rough:
        return []
    best = min(rough, key=Tried.rank)
    full = with_refits(computed([best.recipe], origin, mapper)[0], origin, mapper)
    return [full] if all(beats(full, part) for part in parts(full.recipe)) else []


def _settled(tried: Tried) -> bool:
    """Whether a change alone allows all columns of its design for sure, so no pair can add any."""
    return standing(tried.allowed, tried.columns) == WITHIN


def might_beat(pair: Tried, part: Tried) -> bool:
    """Whether a pair may do better than a part of it: by noise and signal, refits to come."""
    ours, theirs = pair.open, part.allowed
    return (ours.columns or 0) >= (theirs.columns or 0)


def beats(pair: Tried, part: Tried) -> bool:
    """Whether a pair allows more columns than one of its parts, or as many more surely.

    More surely: within budget where the part is not, or at a risk clearly lower (the upper end
    of its band below the part's point). Like is compared with like: without refits of both,
    noise and signal alone.
    """
    both = pair.stability is not None and part.stability is not None
    ours, theirs = (pair.allowed, part.allowed) if both else (pair.open, part.open)
    if (ours.columns or 0) != (theirs.columns or 0):
        return (ours.columns or 0) > (theirs.columns or 0)
    sure = standing(ours, pair.columns) == WITHIN
    if sure and standing(theirs, part.columns) != WITHIN:
        return True
    return pair.found.risk.high < part.found.risk.value


def _remedy(tried: Tried) -> Remedy:
    recipe = tried.recipe
    allowed, binding = combine(tried.limits, tried.columns)
    return Remedy(
        name=recipe.name,
        columns=tried.columns,
        answer=standing(allowed, tried.columns),
        allowed=allowed,
        binding=binding,
        risk_at_design=tried.found.risk,
        draws=tried.found.draws,
        refitted=tried.stability is not None,
        dropped=recipe.dropped,
        price=recipe.price,
        parts=recipe.names if len(recipe.names) > 1 else (),
    )


def more_rows_remedy(table: Sequence[RowsEntry], case: Case) -> Remedy | None:
    """More rows as a remedy: the fewest of the table that allow all columns, else the best.

    The table holds point values, so the answer is never `within budget`; None if it has no
    larger number of rows, or none that allows more than its own entry at the present rows (not
    the design's budget: that is of the present columns, and these are drawn).
    """
    larger = sorted((each for each in table if each.rows > case.rows), key=lambda e: e.rows)
    if not larger:
        return None
    asked = case.columns
    best = max(larger, key=lambda e: (min(e.allowed or 0, asked), -e.rows))
    now = max((each.allowed or 0 for each in table if each.rows == case.rows), default=0)
    if best.allowed is not None and best.allowed <= now:
        return None
    enough = best.allowed is not None and best.allowed >= asked
    note = AT_LEAST if enough else "" if best.allowed is not None else "the law has no variance"
    limits = {"noise": best.noise, "signal": best.signal, "stability": best.stability}
    return Remedy(
        name=f"{best.rows / case.rows:.3g} times the rows ({best.rows:,})",
        columns=asked,
        answer=BORDERLINE if enough or best.allowed is None else OVER,
        allowed=Allowed(columns=best.allowed, low=None, high=None, note=note),
        binding=next((n for n, v in limits.items() if not enough and v == best.allowed), None),
        risk_at_design=Estimate(value=best.risk, low=best.risk, high=best.risk),
        draws=SEARCH_DRAWS,
        refitted=best.stability is not None,
        dropped=(),
        price="a longer sample of the same kind; columns are drawn from their fitted law, not the"
        " present ones, and figures are point values",
    )
