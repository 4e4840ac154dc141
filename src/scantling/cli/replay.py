"""`scantling replay`: recompute a saved report and say whether it agrees."""

from __future__ import annotations

import json
import shlex
from pathlib import Path
from typing import Any

import click

from scantling.cli.group import commands
from scantling.errors import InputError

AGREES, DISAGREES = 0, 6
SHOWN = 8
"""Keys named at most where reports differ."""


@commands.command()
@click.argument("report", type=click.Path(path_type=Path))
@click.option(
    "--design",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="The design; default: the one the receipt names, beside the report or a folder above.",
)
@click.option("--workers", type=click.IntRange(1, 64), default=1, show_default=True,
              help="Processes; results do not depend on it.")  # fmt: skip
@click.option("--cluster", metavar="ADDRESS", help="Work on a dask cluster (extra: cluster).")
@click.option("--quiet", is_flag=True, help="Print nothing; only the status says.")
def replay(
    report: Path, design: Path | None, workers: int, cluster: str | None, quiet: bool
) -> int:
    """Recompute REPORT.json from its receipt and say whether the two agree.

    Exit status 0: they agree, to 1e-6; with other library versions, or on the numbers a
    simulation gives an interval, to two Monte Carlo errors. 6: they do not, and where.
    """
    from scantling.cli.comparison import differences
    from scantling.cli.progress import stages
    from scantling.core.streams import Work
    from scantling.pipeline import read_design, vet, with_simulation

    saved = read_report(report)
    settings = receipt_settings(report, saved)
    path = find_design(report, saved, design)
    read = read_design(path, response=settings.pop("response"))
    check_inputs(report, saved, (path, read.data.file))
    with stages(quiet) as progress:
        again = vet(
            with_simulation(read, **settings),
            workers=Work(
                workers=workers, cluster=cluster, watch=None if progress is None else progress.watch
            ),
            progress=progress,
            command=saved["receipt"]["command"],
        )
    fresh = json.loads(again.to_json())
    found = differences(saved, fresh)
    if not quiet:
        click.echo(f"{report}: {found.sentence}")
        for line in found.lines[:SHOWN]:
            click.echo(f"  {line}")
        if len(found.lines) > SHOWN:
            click.echo(f"  and {len(found.lines) - SHOWN} more")
    return AGREES if found.agree else DISAGREES


def read_report(path: Path) -> dict[str, Any]:
    """A saved report.

    Raises
    ------
    InputError
        If it is none, or lacks what a replay needs.
    """
    from scantling.report.document import SCHEMA

    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except OSError as fault:
        raise InputError(f"{path}: cannot be read ({fault.strerror})") from fault
    except ValueError as fault:
        raise InputError(f"{path}: not a JSON report") from fault
    if not isinstance(found, dict) or found.get("schema") != SCHEMA:
        schema = found.get("schema") if isinstance(found, dict) else None
        raise InputError(f"{path}: schema: {SCHEMA} is needed; found {schema!r}")
    receipt = found.get("receipt")
    inputs = receipt.get("inputs") if isinstance(receipt, dict) else None
    if (
        not isinstance(receipt, dict)
        or not isinstance(receipt.get("command"), str)
        or not isinstance(inputs, dict)
        or not all(isinstance(value, str) for value in inputs.values())
    ):
        raise InputError(f"{path}: receipt: command and inputs are needed; found none")
    return found


def receipt_settings(path: Path, saved: dict[str, Any]) -> dict[str, Any]:
    """Response, seed and replicates of the receipt's command.

    Raises
    ------
    InputError
        If the command is not one of `scantling vet`.
    """
    from scantling.cli.vet import vet

    command = saved["receipt"]["command"]
    try:
        words = shlex.split(command)
        if words[:2] != ["scantling", "vet"]:
            raise ValueError
        asked = vet.make_context("scantling vet", words[2:]).params
    except (ValueError, click.ClickException) as fault:
        raise InputError(
            f"{path}: receipt: command: one of scantling vet is needed; found {command!r}"
        ) from fault
    return {name: asked[name] for name in ("response", "seed", "replicates")}


def find_design(path: Path, saved: dict[str, Any], given: Path | None) -> Path:
    """The design file a report was made from.

    Raises
    ------
    InputError
        If it is not beside the report nor a folder above.
    """
    if given is not None:
        return given
    names = [name for name in saved["receipt"]["inputs"] if name.endswith(".toml")]
    beside = path.absolute().parent
    for folder in (beside, beside.parent, beside.parent.parent):
        for name in names:
            # Base names only: a report must not point anywhere else.
            if name == Path(name).name and (folder / name).is_file():
                return folder / name
    raise InputError(
        f"{path}: {names[0] if names else 'its design'} is not beside it nor a folder above;"
        " --design names it"
    )


def check_inputs(path: Path, saved: dict[str, Any], inputs: tuple[Path, ...]) -> None:
    """Hold the inputs against the checksums of the receipt.

    Raises
    ------
    InputError
        If one is not the file the report was made from.
    """
    from scantling.cli.run_folder import checksum

    known = saved["receipt"]["inputs"]
    for file in inputs:
        then, now = known.get(file.name), checksum(file)
        if then is None:
            raise InputError(f"{path}: receipt: inputs: {file.name} is not among them")
        if then != now:
            raise InputError(
                f"{file}: changed since {path.name} was made"
                f" (sha-256 {now[:12]}..., then {then[:12]}...)"
            )
