"""What the written results of every study start with, and their tables."""

from __future__ import annotations

import platform
import shlex
import sys
from collections.abc import Iterable, Sequence
from datetime import UTC, datetime

import numpy as np
import scipy

import scantling


def preamble(title: str, seconds: float) -> list[str]:
    """Title, command, date, versions and time taken."""
    return [
        f"# {title}",
        "",
        f"Command: `python {shlex.join(sys.argv)}`.",
        f"{datetime.now(UTC):%Y-%m-%d}; scantling {scantling.__version__}, Python"
        f" {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__};"
        f" {seconds:.0f} s.",
        "",
    ]


def table(header: Sequence[str], rows: Iterable[Sequence[str]]) -> list[str]:
    """A markdown table and an empty line."""
    lines = ["| " + " | ".join(header) + " |", "|" + "---|" * len(header)]
    lines += ["| " + " | ".join(row) + " |" for row in rows]
    return [*lines, ""]


def share_error(share: float, replications: int) -> float:
    """Monte Carlo standard error of a share."""
    return float(np.sqrt(share * (1 - share) / replications))
