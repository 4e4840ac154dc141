"""Kill a run at random moments, go on each time, and compare the report with an unbroken run's.

    python tests/validation/kill_and_resume.py examples/strait_wide.toml \
        --out reports/validation/kill_and_resume.md

Moments are uniform over the time that an unbroken run takes; each run is killed once (SIGKILL to
the process alone) and resumed, then one run is killed again and again. Reports are compared byte
for byte without receipt.wall_clock. A moment before the run directory is there or after the
report is written counts too: what is asked is that the report is there in the end.
"""

from __future__ import annotations

import argparse
import json
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from tempfile import TemporaryDirectory

from write_up import preamble, table

COMMAND = [sys.executable, "-m", "scantling"]


def document(path: Path) -> str:
    """The report without its volatile key."""
    found = json.loads(path.read_text("utf-8"))
    del found["receipt"]["wall_clock"]
    return json.dumps(found, indent=2)


def killed(arguments: list[str], after: float) -> bool:
    """Whether the run was still going when it was killed so many seconds after its start."""
    with subprocess.Popen(
        [*COMMAND, *arguments], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    ) as running:
        try:
            running.wait(timeout=after)
            return False
        except subprocess.TimeoutExpired:
            running.send_signal(signal.SIGKILL)
            return running.wait() == -signal.SIGKILL


def finish(begin: list[str], folder: Path) -> tuple[str, int]:
    """Go on from the folder, or begin where there is none; what was done, and the status."""
    how = "resume" if folder.is_dir() else "vet"
    arguments = ["resume", str(folder), "--quiet"] if how == "resume" else begin
    return how, subprocess.run([*COMMAND, *arguments], check=False).returncode


def main() -> None:
    """Run, compare and write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("design", type=Path)
    parser.add_argument("--replicates", type=int, default=100)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--kills", type=int, default=10)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    began = time.monotonic()
    rng = random.Random(options.seed)
    stem = options.design.stem
    rows = []
    with TemporaryDirectory() as scratch:

        def begin(out: str) -> list[str]:
            return [
                "vet", str(options.design), "--quiet", "--out", str(Path(scratch) / out),
                "--replicates", str(options.replicates), "--workers", str(options.workers),
            ]  # fmt: skip

        started = time.monotonic()
        status = subprocess.run([*COMMAND, *begin("whole")], check=False).returncode
        length = time.monotonic() - started
        wanted = document(Path(scratch) / "whole" / f"{stem}.json")

        def outcome(out: str, moment: str) -> None:
            folder = Path(scratch) / out / f"{stem}.run"
            units = folder / "units"
            kept = units.stat().st_size if units.exists() else 0
            how, ended = finish(begin(out), folder)
            found = document(Path(scratch) / out / f"{stem}.json")
            same = found == wanted and ended == status and not folder.exists()
            rows.append((moment, f"{kept / 2**20:.1f}", how, "yes" if same else "NO"))

        for place in range(options.kills):
            after = rng.uniform(0, length)
            hit = killed(begin(str(place)), after)
            outcome(str(place), f"{after:.1f} s" + ("" if hit else " (had ended)"))
        folder = Path(scratch) / "often" / f"{stem}.run"
        hits = 0
        for _ in range(options.kills):
            arguments = ["resume", str(folder)] if folder.is_dir() else begin("often")
            hits += killed(arguments, rng.uniform(0, length))
        outcome("often", f"{hits} times in one run")
    good = sum(row[3] == "yes" for row in rows)
    lines = [
        *preamble("Kill a run, resume it, compare the reports", time.monotonic() - began),
        f"An unbroken run takes {length:.1f} s here; {options.workers} worker(s), design"
        f" `{options.design.name}`.",
        "",
        *table(("killed after", "journal, MiB", "then", "identical"), rows),
        f"Identical: {good} of {len(rows)}.",
        "",
    ]
    options.out.write_text("\n".join(lines), encoding="utf-8")
    print("\n".join(lines))
    if good < len(rows):
        sys.exit(1)


if __name__ == "__main__":
    main()
