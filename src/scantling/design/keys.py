"""The design language: every table and key, what each accepts, what is not available yet."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True, kw_only=True)
class Key:
    """What one key of a design file accepts."""

    accepted: str
    """The accepted values, as they are worded in a refusal."""
    fits: Callable[[Any], bool]
    """Whether a value is accepted."""
    convert: Callable[[Any], Any] = lambda value: value
    """From the TOML value to the value of the record."""
    choices: tuple[str, ...] = ()
    """For a choice: every word of the language."""
    available: tuple[Any, ...] = ()
    """For a choice or a switch: the values this version carries out; empty: all."""


def _one_line(value: Any) -> bool:
    return isinstance(value, str) and bool(value.strip()) and not has_control(value)


def has_control(text: str) -> bool:
    """Return whether `text` holds a control character or a line separator."""
    return any(ord(c) < 32 or 127 <= ord(c) < 160 or c in "\u2028\u2029" for c in text)


def _text() -> Key:
    return Key(accepted="text on one line, not empty", fits=_one_line)


def _whole(low: int, high: int | None) -> Key:
    bounds = f"from {low} to {high}" if high is not None else f"of at least {low}"
    return Key(
        accepted=f"a whole number {bounds}",
        fits=lambda value: type(value) is int and value >= low and (high is None or value <= high),
    )


def _number(accepted: str, inside: Callable[[float], bool]) -> Key:
    return Key(
        accepted=f"a number {accepted}",
        fits=lambda value: (
            type(value) in (int, float)
            and (type(value) is int or math.isfinite(value))
            and inside(value)
        ),
        convert=float,
    )


def _switch(available: tuple[bool, ...] = ()) -> Key:
    words = [str(value).lower() for value in available or (True, False)]
    return Key(
        accepted=_one_of(words, "true or false"),
        fits=lambda value: isinstance(value, bool),
        available=available,
    )


def _one_of(words: Sequence[str], several: str) -> str:
    """What a refusal asks for: never a word that this version would refuse next."""
    return several if len(words) > 1 else f"{words[0]}, the only one in this version,"


def _choice(*choices: str, available: tuple[str, ...] = ()) -> Key:
    words = available or choices
    return Key(
        accepted=_one_of(words, "one of " + ", ".join(words)),
        fits=lambda value: isinstance(value, str) and value in choices,
        choices=choices,
        available=available,
    )


def _names_fit(value: Any) -> bool:
    return isinstance(value, list) and all(_one_line(item) for item in value)


TITLE = _text()
"""The one key outside the tables."""

LANGUAGE: dict[str, dict[str, Key]] = {
    "data": {
        "file": _text(),
        "time": _text(),
        "response": Key(
            accepted="the name of a column, or a list of names that differ",
            fits=lambda value: (
                _one_line(value) or (_names_fit(value) and len(set(value)) == len(value) > 0)
            ),
        ),
        "columns": Key(
            accepted="a list of column names or glob patterns, none of them twice",
            fits=lambda value: _names_fit(value) and len(set(value)) == len(value),
            convert=tuple,
        ),
        "missing": _choice("refuse", "drop-rows"),
    },
    "expand": {
        "transform": _choice("none", "normal-scores", "clip"),
        "powers": _whole(1, 6),
        "products": _switch(),
        "lags": _whole(0, 60),
        "contemporaneous": _switch(),
        "own_lags": _whole(0, 60),
    },
    "purpose": {
        "kind": _choice(
            "regression",
            "treatment",
            "instruments",
            "binary",
            "system",
            "chain",
            available=("regression",),
        ),
    },
    "target": {
        "relevant": _whole(1, None),
        "smallest_effect": _number("above 0 and at most 5", lambda value: 0 < value <= 5),
        "risk": _number("above 0 and below 0.5", lambda value: 0 < value < 0.5),
        "power": _number("above 0 and below 1", lambda value: 0 < value < 1),
        "stability": _number("above 0 and at most 1", lambda value: 0 < value <= 1),
        "false_share": _number("of at least 0 and below 1", lambda value: 0 <= value < 1),
        "support": Key(
            accepted='"random", "pilot" or a list of candidate columns that differ',
            fits=lambda value: (
                value in ("random", "pilot")
                or (_names_fit(value) and len(set(value)) == len(value) > 0)
            ),
            convert=lambda value: tuple(value) if isinstance(value, list) else value,
            choices=("random", "pilot"),
        ),
    },
    "penalty": {
        "rule": _choice(
            "plug-in",
            "self-normalised",
            "cross-validated",
            "cross-validated-sparse",
            "bic",
            "extended-bic",
        ),
        "loss": _choice("squared", "huber", "absolute", "square-root"),
        "adaptive": _switch(),
    },
    "simulation": {
        "replicates": _whole(50, 100_000),
        "seed": _whole(0, 2**63 - 1),
    },
}
"""Tables of a design with data, in the order of the file; DESIGN section 5."""

Language = dict[str, dict[str, Key]]


def _law_fits(value: Any) -> bool:
    """A law on one line, or a table with its family; the law itself is read later."""
    if isinstance(value, dict):
        return isinstance(value.get("family"), str) and all(
            type(each) in (int, float) for key, each in value.items() if key != "family"
        )
    return _one_line(value)


_LAW = Key(
    accepted='a law such as "student-t:df=3", or a table such as {family = "student-t", df = 3}',
    fits=_law_fits,
)
STATED_LANGUAGE: Language = {
    "stated": {
        "rows": _whole(30, None),
        "columns": _whole(1, None),
        "correlation": _number("of at least 0 and below 1", lambda value: 0 <= value < 1),
        "error": _LAW,
        "column": _LAW,
    },
    **{name: LANGUAGE[name] for name in ("purpose", "target", "penalty", "simulation")},
    # Columns on paper have neither names nor a pilot.
    "target": {key: value for key, value in LANGUAGE["target"].items() if key != "support"},
}
"""Tables of a design without data."""

REQUIRED = {"data": ("file", "response")}
"""Keys without a default."""
