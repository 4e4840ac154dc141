"""Options that the commands for a stage alone share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE

SIMULATION = (
    click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Of every random stream."),
    click.option("--replicates", type=click.IntRange(50, 100_000), help="In each simulation."),
    click.option(
        "--pace", type=click.Choice(list(PACE)),
        help="Replicates 100, 400 or 2000; --replicates wins over it.",
    ),
    click.option("--workers", type=click.IntRange(1, 64), default=1, show_default=True),
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
