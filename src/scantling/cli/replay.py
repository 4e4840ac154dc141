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
    help="The design; default: the one the receipt names, beside the report, in a folder above or"
    " in one beside the report's.",
)
@click.option("--workers", type=click.IntRange(1, 64), default=1, show_default=True,
              help="Processes; results do not depend on it.")  # fmt: skip
@click.option("--cluster", metavar="ADDRESS", help="Work on a dask cluster (extra: cluster).")
@click.option("--quiet", is_flag=True, help="Print nothing; only the status says.")
def replay(
    report: Path, design: Path | None, workers: int, cluster: str | None, quiet: bool
) -> int:
    """Recompute REPORT.json, a report of `scantling vet`, and say whether the two agree.

    Exit status 0: they agree, to 1e-6; with other library versions, or on the numbers a
    simulation gives an interval, to two Monte Carlo errors. 6: they do not, and where.
    """
    from scantling.cli.comparison import differences
    from scantling.cli.progress import stages
    from scantling.core.streams import Work
    from scantling.pipeline import read_design, vet, with_simulation

    saved = read_report(report)
    settings = receipt_settings(report, saved)
    path, apart = find_design(report, saved, design)
    if apart and not quiet:
        click.echo(f"design taken: {path}", err=True)
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


def find_design(path: Path, saved: dict[str, Any], given: Path | None) -> tuple[Path, bool]:
    """The design file a report was made from, and whether it was found in a folder beside.

    Looked for beside the report, in the two folders above, and in those beside the report's
    folder. The first with the receipt's checksum is taken; else the first, to be refused.

    Raises
    ------
    InputError
        If it is in none of them.
    """
    if given is not None:
        return given, False
    inputs = saved["receipt"]["inputs"]
    # Base names only: a report must not point anywhere else.
    names = [name for name in inputs if name.endswith(".toml") and name == Path(name).name]
    home = path.absolute().parent
    near = (home, home.parent, home.parent.parent)
    folders = [(folder, False) for folder in near]
    folders += [(folder, True) for folder in _beside(home) if folder not in near]
    found = [
        (folder / name, apart)
        for folder, apart in folders
        for name in names
        if (folder / name).is_file()
    ]
    if not found:
        raise InputError(
            f"{path}: {names[0] if names else 'its design'} is not beside it, in a folder above"
            " or in one beside its folder; --design names it"
        )
    return next((each for each in found if _agrees(each[0], inputs)), found[0])


def _beside(home: Path) -> list[Path]:
    """Folders beside one, in order of their names; none where they cannot be listed."""
    try:
        return sorted(folder for folder in home.parent.iterdir() if folder.is_dir())
    except OSError:
        return []


def _agrees(file: Path, inputs: dict[str, str]) -> bool:
    """Whether a file has the checksum a receipt gives for its name."""
    from scantling.cli.run_folder import checksum

    try:
        return checksum(file) == inputs[file.name]
    except InputError:
        return False


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
