"""What several test folders share: made-up tables, designs, reports that fit their schema."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

ROWS, COLUMNS = 305, 12
DESIGN = """\
title = "Harbour dues, heavy tails"

[data]
file = "harbour.csv"
time = "day"
response = "dues"

[expand]
lags = 1
contemporaneous = true
own_lags = 1

[target]
relevant = 3
smallest_effect = 0.35

[simulation]
replicates = 60
seed = 3
"""


def garch_table(rows: int = ROWS, columns: int = COLUMNS, seed: int = 11) -> np.ndarray:
    """Response and columns with Student t(3) innovations on one common GARCH(1,1) path."""
    rng = np.random.default_rng(seed)
    z = rng.standard_t(3, size=(rows, columns + 1)) / math.sqrt(3)
    level, out = 1.0, np.empty_like(z)
    for t in range(rows):
        out[t] = math.sqrt(level) * z[t]
        level = 0.05 + 0.25 * min(float(out[t, 0] ** 2), 20.0) + 0.7 * level
    out[:, 0] += 0.8 * out[:, 1] - 0.6 * out[:, 2]
    return out


def csv_text(values: np.ndarray, names: list[str]) -> str:
    """A table as text, its first column the number of the row."""
    lines = ["day," + ",".join(names)]
    lines += [
        f"{t + 1}," + ",".join(repr(float(value)) for value in row) for t, row in enumerate(values)
    ]
    return "\n".join(lines) + "\n"


@pytest.fixture(scope="session")
def harbour(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A design file: 305 rows and 12 raw columns, volatile and heavy-tailed; table beside it."""
    folder = tmp_path_factory.mktemp("harbour")
    names = ["dues", *(f"berth_{j}" for j in range(1, COLUMNS + 1))]
    (folder / "harbour.csv").write_text(csv_text(garch_table(), names))
    (folder / "harbour.toml").write_text(DESIGN)
    return folder / "harbour.toml"


def _numbers_only(value: Any, where: str) -> None:
    """Refuse NaN, infinities, and numbers that are written as text."""
    if isinstance(value, dict):
        for key, inner in value.items():
            _numbers_only(inner, f"{where}.{key}")
    elif isinstance(value, list):
        for place, inner in enumerate(value):
            _numbers_only(inner, f"{where}[{place}]")
    elif isinstance(value, float):
        assert math.isfinite(value), where
    elif isinstance(value, str) and not where.startswith("$.receipt"):
        with pytest.raises(ValueError, match="could not convert"):
            float(value)


def _no_constant(word: str) -> float:
    raise AssertionError(f"{word} in a report")


@pytest.fixture(scope="session")
def valid_document() -> Callable[[str], dict[str, Any]]:
    """A function that parses a report's JSON text and holds it against the shipped schema."""
    from jsonschema import Draft202012Validator

    from scantling.report.schema import report_schema

    validator = Draft202012Validator(report_schema())

    def parse(text: str) -> dict[str, Any]:
        document: dict[str, Any] = json.loads(text, parse_constant=_no_constant)
        faults = [f"{e.json_path}: {e.message[:200]}" for e in validator.iter_errors(document)]
        assert not faults, "\n".join(faults)
        _numbers_only(document, "$")
        return document

    return parse


@pytest.fixture(scope="session")
def command() -> list[str]:
    """How the installed command is started."""
    script = Path(sys.executable).parent / "scantling"
    return [str(script)] if script.exists() else [sys.executable, "-m", "scantling"]


@pytest.fixture(scope="session")
def scantling(command: list[str]) -> Callable[..., subprocess.CompletedProcess[str]]:
    """A function that runs the installed command in a process of its own, output piped."""

    def start(
        *arguments: str | Path, env: dict[str, str] | None = None
    ) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [*command, *map(str, arguments)],
            capture_output=True,
            text=True,
            encoding="utf-8",
            timeout=120,
            env={**os.environ, **(env or {})},
            check=False,
        )

    return start


@pytest.fixture(scope="session")
def small(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The quickest design there is: 60 rows, 3 thin columns, no time."""
    folder = tmp_path_factory.mktemp("small")
    values = np.random.default_rng(5).standard_normal((60, 4))
    (folder / "small.csv").write_text(csv_text(values, ["y", "a", "b", "c"]))
    (folder / "small.toml").write_text(
        '[data]\nfile = "small.csv"\nresponse = "y"\ncolumns = ["a", "b", "c"]\n'
        "[target]\nrelevant = 1\nsmallest_effect = 0.5\n[simulation]\nreplicates = 50\n"
    )
    return folder / "small.toml"
