"""Progress on stderr, only where stderr is a terminal."""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.progress import Progress

WORDS = {
    "read": "reading the table and making the columns",
    "residuals": "fitting the pilot",
    "diagnose": "diagnosing tails, moments and dependence",
    "law": "fitting the error law",
    "limits": "simulating scores",
    "stress": "refitting under fresh errors",
    "rows": "trying other rows and targets",
    "remedies": "recomputing under each remedy",
}
OFTEN = 0.1
"""Seconds between two looks at the clock."""


class Stages:
    """Shows the stage a run is at, and the units of work in it, with the time they still take."""

    __slots__ = ("_began", "_first", "_last", "_seen", "_shown", "_task")

    def __init__(self, shown: Progress) -> None:
        """Show nothing yet but that it begins."""
        self._shown = shown
        self._task = shown.add_task("starting", total=None, left="")
        self._began = self._seen = 0.0
        self._first, self._last = 0, math.inf

    def __call__(self, stage: str) -> None:
        """A stage begins."""
        name, of, response = stage.partition(": ")
        words = WORDS.get(name, name) + of + response
        if name in WORDS:
            words = f"{list(WORDS).index(name) + 1}/{len(WORDS)} {words}"
        self._shown.update(self._task, description=words, total=None, completed=0, left="")

    def watch(self, done: int, units: int) -> None:
        """So many units of the present step of the stage are done; first call: those found.

        The time left is the step's, at the rate of the units computed so far; those found in a
        journal do not count, or the rate would be too high.
        """
        now = time.monotonic()
        if self._last == math.inf:
            self._began, self._first = now, done
        self._last = math.inf if done == units else done
        if now - self._seen < OFTEN and done < units:
            return
        self._seen = now
        left = f"{done} of {units}"
        if done > self._first:
            rest = (now - self._began) / (done - self._first) * (units - done)
            left += f", {clock(rest)} left"
        self._shown.update(self._task, completed=done, total=units, left=left)


def clock(seconds: float) -> str:
    """m:ss, or h:mm:ss."""
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02}:{rest:02}" if hours else f"{minutes}:{rest:02}"


@contextmanager
def stages(quiet: bool) -> Iterator[Stages | None]:
    """Yield what shows the stages of a run; None where it should stay silent."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        Progress,
        SpinnerColumn,
        TextColumn,
        TimeElapsedColumn,
    )

    with Progress(
        SpinnerColumn(),
        TextColumn("{task.description}"),
        BarColumn(bar_width=10),
        TextColumn("{task.fields[left]}"),
        TimeElapsedColumn(),
        console=Console(stderr=True),
        transient=True,
    ) as shown:
        yield Stages(shown)
