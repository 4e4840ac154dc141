"""Progress on stderr, only where stderr is a terminal."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

WORDS = {
    "read": "reading the table and making the columns",
    "residuals": "fitting the pilot",
    "diagnose": "diagnosing tails, moments and dependence",
    "law": "fitting the error law",
    "limits": "simulating scores",
    "stress": "refitting under fresh errors",
    "remedies": "recomputing under each remedy",
}


@contextmanager
def stages(quiet: bool) -> Iterator[Callable[[str], None] | None]:
    """Yield a function that shows the stage a run is at; None where it should stay silent."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console

    with Console(stderr=True).status("starting") as status:
        yield lambda stage: status.update(WORDS.get(stage, stage))
