"""Progress: stage, units done and the time they still take; silent unless on a terminal."""

from __future__ import annotations

import os
import pty
import subprocess
from pathlib import Path
from typing import Any

import pytest

from scantling.cli.progress import Stages, clock, stages


class Recorder:
    """Takes the place of rich's progress."""

    def __init__(self) -> None:
        """Nothing shown."""
        self.shown: list[dict[str, Any]] = []

    def add_task(self, description: str, **fields: Any) -> int:
        """The only line."""
        return 0

    def update(self, task: int, **fields: Any) -> None:
        """Remember."""
        self.shown.append(fields)


def test_time_left_is_at_the_rate_of_units_computed_not_of_those_found(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    now = [100.0]
    monkeypatch.setattr("scantling.cli.progress.time.monotonic", lambda: now[0])
    recorder = Recorder()
    line = Stages(recorder)  # type: ignore[arg-type]
    line("stress")
    assert recorder.shown[-1]["description"].endswith(" refitting under fresh errors")
    for done in range(60, 101):  # 60 of 100 were in the journal; 2 s for each of the rest
        line.watch(done, 100)
        now[0] += 2.0
    lefts = [fields["left"] for fields in recorder.shown[1:]]
    assert lefts[0] == "60 of 100"
    assert lefts[1] == "61 of 100, 1:18 left" and lefts[-1] == "100 of 100, 0:00 left"
    line.watch(0, 5)  # the next step begins anew
    assert recorder.shown[-1]["left"] == "0 of 5"


@pytest.mark.parametrize(
    ("seconds", "text"), [(0, "0:00"), (59.6, "1:00"), (3599, "59:59"), (3661, "1:01:01")]
)
def test_clock(seconds: float, text: str) -> None:
    assert clock(seconds) == text


def test_nothing_is_shown_without_a_terminal_or_when_quiet() -> None:
    with stages(False) as shown:
        assert shown is None


def test_a_terminal_sees_stages_and_stdout_stays_plain(
    small: Path, command: list[str], tmp_path: Path
) -> None:
    master, slave = pty.openpty()
    with subprocess.Popen(
        [*command, "vet", str(small), "--out", str(tmp_path)],
        stdout=subprocess.PIPE, stderr=slave, env={**os.environ, "TERM": "xterm", "COLUMNS": "80"},
    ) as running:  # fmt: skip
        os.close(slave)
        seen = b""
        while True:
            try:
                block = os.read(master, 4096)
            except OSError:
                break
            if not block:
                break
            seen += block
        printed = running.stdout.read() if running.stdout else b""
    os.close(master)
    assert running.returncode in (0, 3, 4, 5)
    # A stage shorter than a refresh of the screen may pass unseen.
    words = (b"fitting the", b"diagnosing tails", b"simulating scores", b"refitting under",
             b"trying other rows", b"recomputing under")  # fmt: skip
    assert sum(word in seen for word in words) >= 2
    assert b"Verdict" not in seen and printed.startswith(b"scantling: small\n")
    assert b"\x1b" not in printed
