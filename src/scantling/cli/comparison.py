"""Two reports of one design, compared key by key."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

TOLERANCE = 1e-6
"""Relative, below 1 absolute."""
ERRORS = 2.0
"""Monte Carlo errors that simulated numbers may be apart."""
WIDTH = 2 * 1.6449
"""Standard errors between the ends of a 90 % interval."""
VOLATILE = ("wall_clock",)
ABOUT = ("version", "libraries", "command", "inputs")
"""Keys of the receipt that are said, not compared."""
NUMBERS = re.compile(r"-?\d[\d,.]*(e[-+]?\d+)?")


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """What two reports have apart."""

    agree: bool
    """Whether everything is within its tolerance."""
    sentence: str
    """In words."""
    lines: tuple[str, ...]
    """One line for each key that differs too much: key, saved value, present value."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """One key that is not the same."""

    key: str
    """Such as budget.noise.columns."""
    saved: Any
    """Value in the saved report."""
    fresh: Any
    """Value now."""
    allowed: float
    """How far numbers may be apart for their Monte Carlo error; 0 where they have none."""

    @property
    def apart(self) -> float:
        """How far the two numbers are apart; inf where they are not both numbers."""
        if not (_is_number(self.saved) and _is_number(self.fresh)):
            return math.inf
        return abs(self.saved - self.fresh)

    @property
    def rounding(self) -> bool:
        """Whether it is within 1e-6."""
        scale = 1.0
        if math.isfinite(self.apart):
            scale = max(1.0, abs(self.saved), abs(self.fresh))
        return self.apart <= TOLERANCE * scale

    @property
    def chance(self) -> bool:
        """Whether Monte Carlo error explains it: of sentences, when all but the numbers is one."""
        if isinstance(self.saved, str) and isinstance(self.fresh, str):
            return NUMBERS.sub("#", self.saved) == NUMBERS.sub("#", self.fresh)
        return self.apart <= self.allowed


def differences(saved: dict[str, Any], fresh: dict[str, Any]) -> Comparison:
    """Compare a saved report with the same computed again.

    Numbers must agree to 1e-6. Elsewhere, that is where the receipt names other versions of this
    package or of libraries, simulated numbers (those with an interval) may be two Monte Carlo
    errors apart, and sentences must be the same but for their numbers.
    """
    then, now = saved["receipt"], fresh["receipt"]
    elsewhere = any(then.get(key) != now.get(key) for key in ("version", "libraries"))
    found = list(_walk(_compared(saved), _compared(fresh), "", 0.0))
    large = [each for each in found if not each.rounding]
    left = [each for each in large if not (elsewhere and each.chance)]
    where = "; library versions differ" if elsewhere else ""
    if not found:
        sentence = f"agrees, every key the same{where}"
    elif not large:
        sentence = f"agrees to {TOLERANCE:g}{where}"
    elif not left:
        sentence = f"agrees to two Monte Carlo errors ({_keys(len(large))} beyond 1e-6){where}"
    else:
        sentence = f"disagrees in {_keys(len(left))}{where}"
    return Comparison(
        agree=not left,
        sentence=sentence,
        lines=tuple(f"{d.key}: {_shown(d.saved)}, now {_shown(d.fresh)}" for d in left),
    )


def _keys(count: int) -> str:
    return f"{count} key{'s' * (count != 1)}"


def _compared(document: dict[str, Any]) -> dict[str, Any]:
    receipt = {
        key: value for key, value in document["receipt"].items() if key not in VOLATILE + ABOUT
    }
    return {**document, "receipt": receipt}


def _walk(saved: Any, fresh: Any, key: str, allowed: float) -> Iterator[Difference]:
    """Every leaf that differs; an interval's width gives its siblings their allowance."""
    if isinstance(saved, dict) and isinstance(fresh, dict):
        allowed = max(_allowance(saved), _allowance(fresh))
        for name in [*saved, *(name for name in fresh if name not in saved)]:
            place = f"{key}.{name}" if key else name
            if name not in saved or name not in fresh:
                yield Difference(
                    key=place, saved=saved.get(name, _Missing()), fresh=fresh.get(name, _Missing()),
                    allowed=0.0,
                )  # fmt: skip
            else:
                yield from _walk(saved[name], fresh[name], place, allowed)
    elif isinstance(saved, list) and isinstance(fresh, list):
        if len(saved) != len(fresh):
            yield Difference(
                key=f"{key} (length)", saved=len(saved), fresh=len(fresh), allowed=0.0
            )  # fmt: skip
        for place, (one, other) in enumerate(zip(saved, fresh, strict=False)):
            yield from _walk(one, other, f"{key}[{place}]", allowed)
    elif saved != fresh or isinstance(saved, bool) != isinstance(fresh, bool):
        yield Difference(key=key, saved=saved, fresh=fresh, allowed=allowed)


class _Missing:
    """A key that is not there."""

    __slots__ = ()


def _allowance(found: dict[str, Any]) -> float:
    low, high = found.get("low"), found.get("high")
    if isinstance(low, int | float) and isinstance(high, int | float):
        return ERRORS * abs(high - low) / WIDTH
    return 0.0


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _shown(value: Any) -> str:
    if isinstance(value, _Missing):
        return "nothing"
    if isinstance(value, dict | list):
        return f"{len(value)} entries"
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
