"""Allowed columns by smallest effect and number of relevant columns: the target is a choice.

Some targets are none: the relevant columns alone would vary more than the response does.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from scantling.core.streams import Mapper
from scantling.design.spec import TargetSpec
from scantling.planning.case import Case
from scantling.planning.stress import CaseOf, grid_of, limit_of

TIMES_EFFECT = (2 / 3, 1.0, 1.5)
"""Effects of the table, times the smallest effect asked for."""
TIMES_RELEVANT = (0.5, 1.0, 2.0)
"""Numbers of relevant columns, times the one asked for."""
POINTS = 4
REFITS = 60
LARGEST_EFFECT = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class EffectEntry:
    """What the rows would allow for another target; point values."""

    smallest_effect: float
    """sd of the response per sd of a column."""
    relevant: int
    """Columns expected to matter."""
    allowed: int | None
    """Smallest of the noise, signal and stability limits; the columns asked for if none is
    reached; None of a target that no response allows."""
    binding: str | None
    """noise | signal | stability; None if none is reached, or no response allows the target."""


def explained_by(target: TargetSpec) -> float:
    """Share of the response's variance that the relevant columns explain, taken as independent."""
    return target.relevant * target.smallest_effect**2


def impossible(target: TargetSpec) -> bool:
    """Whether that is all of it or more: errors have to have a part."""
    return explained_by(target) >= 1


def impossible_words(target: TargetSpec) -> str:
    """What is wrong with such a target, for a reader of the report."""
    count = target.relevant
    return (
        f"{count:,} relevant column{'s' * (count != 1)} of effect {target.smallest_effect:g} would"
        f" explain {100 * explained_by(target):,.0f} % of the response's variance, which no"
        " response allows: lower one of them"
    )


def effects_table(
    case: Case, noise: float, signal_at: Callable[[TargetSpec], float], mapper: Mapper,
    *, columns: int, case_of: CaseOf | None = None,
) -> tuple[EffectEntry, ...]:  # fmt: skip
    """Allowed columns for effects and numbers of relevant columns around those asked for.

    Parameters
    ----------
    case : Case
        Its law has a variance.
    noise : float
        Noise limit, inf if not reached; the target does not change it.
    signal_at : callable
        Signal limit under another target.
    mapper : callable
    columns : int
        The columns asked for.
    case_of : callable, optional
        Generative mode: the case of each support set.

    Returns
    -------
    tuple of EffectEntry
        By relevant columns, then by effect; numbers of relevant columns that leave no column
        over are left out.
    """
    out: list[EffectEntry] = []
    for times in TIMES_RELEVANT:
        relevant = max(1, round(times * case.target.relevant))
        if relevant >= case.columns or (out and relevant == out[-1].relevant):
            continue
        for effect in (round(f * case.target.smallest_effect, 4) for f in TIMES_EFFECT):
            target = replace(
                case.target, relevant=relevant, smallest_effect=min(effect, LARGEST_EFFECT)
            )
            out.append(_entry(case, target, noise, signal_at, mapper, columns, case_of))
    return tuple(out)


def _entry(
    case: Case, target: TargetSpec, noise: float, signal: Callable[[TargetSpec], float],
    mapper: Mapper, columns: int, case_of: CaseOf | None,
) -> EffectEntry:  # fmt: skip
    if impossible(target):
        return EffectEntry(
            smallest_effect=target.smallest_effect, relevant=target.relevant, allowed=None,
            binding=None,
        )  # fmt: skip
    limits = {"noise": noise, "signal": signal(target), "stability": math.inf}
    changed = replace(case, target=target, replicates=REFITS)
    # Refits cannot raise what noise and signal allow: they are run up to there.
    most = int(min(noise, limits["signal"], case.columns))
    if most > 0:
        grid = grid_of(max(most, target.relevant + 1), target.relevant, POINTS)

        def own(number: int) -> Case:
            base = case if case_of is None else case_of(number)
            return replace(base, target=target, replicates=REFITS)

        limits["stability"] = limit_of(changed, case.law, grid, mapper, own)
    reached = {name: value for name, value in limits.items() if math.isfinite(value)}
    binding = min(reached, key=lambda name: reached[name]) if reached else None
    return EffectEntry(
        smallest_effect=target.smallest_effect,
        relevant=target.relevant,
        allowed=columns if binding is None else int(reached[binding]),
        binding=binding,
    )
