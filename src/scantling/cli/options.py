"""Options that the commands for a stage alone share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE


class Whole(click.ParamType):
    """A whole number in a range; the range is said by the option's description, in words."""

    name = "whole number"

    def __init__(self, least: int, most: int | None = None) -> None:
        self.least, self.most = least, most

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> int:  # fmt: skip
        """The number, or a usage error that says the range."""
        try:
            found = int(value)
        except ValueError:
            found = self.least - 1
        if found < self.least or (self.most is not None and found > self.most):
            bounds = f"of at least {self.least}"
            if self.most is not None:
                bounds = f"from {self.least} to {self.most}"
            self.fail(f"a whole number {bounds} is needed; found {value!r}", param, ctx)
        return found


RULE_WORDS = (
    "plug-in, self-normalised, bic, extended-bic, cross-validated or cross-validated-sparse"
)
"""Every penalty rule; spelt out, as commands start without loading what simulates."""
LOSS_WORDS = "squared, huber, absolute or square-root"
SIMULATION = (
    click.option(
        "--seed", type=Whole(0, 2**63 - 1), metavar="N",
        help="Of every random stream, 0 to 2^63 - 1; default 1.",
    ),
    click.option(
        "--replicates", type=Whole(50, 100_000), metavar="N",
        help="In each simulation, 50 to 100,000; default 400.",
    ),
    click.option(
        "--pace", type=click.Choice(list(PACE)),
        help="Replicates 100, 400 or 2000; --replicates wins over it.",
    ),
    click.option(
        "--workers", type=Whole(1, 64), default=1, metavar="N",
        help="Processes, 1 to 64; results do not depend on it; default 1.",
    ),
    click.option(
        "--out", type=click.Path(path_type=Path), metavar="DIR",
        help="Also write the text and its JSON twin there.",
    ),
    click.option("--json", "as_json", is_flag=True, help="Print the JSON twin, not the text."),
)  # fmt: skip


def simulation_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add --seed, --replicates, --pace, --workers, --out and --json."""
    for option in reversed(SIMULATION):
        command = option(command)
    return command
