"""`scantling vet`: the whole job."""

from __future__ import annotations

from pathlib import Path
from shlex import quote
from typing import TYPE_CHECKING

import click

from scantling.cli.group import PACE, STATUS, commands

if TYPE_CHECKING:
    from scantling.cli.run_folder import Request


TABLES = (".csv", ".tsv", ".parquet")
"""Endings of files that are data, not designs."""


@commands.command()
@click.argument("design", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    default=Path("reports"),
    metavar="DIR",
    show_default=True,
    help="Where the text report and its JSON twin are written.",
)
@click.option("--response", metavar="NAME", help="Only this one of the design's responses.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Instead of the design's.")
@click.option("--replicates", type=click.IntRange(50, 100_000), help="Instead of the design's.")
@click.option(
    "--pace",
    type=click.Choice(list(PACE)),
    help="Replicates 100, 400 or 2000; --replicates wins over it.",
)
@click.option(
    "--workers",
    type=click.IntRange(1, 64),
    default=1,
    show_default=True,
    help="Processes; results do not depend on it.",
)
@click.option(
    "--cluster", metavar="ADDRESS", help="Work on a dask cluster instead (extra: cluster)."
)
@click.option("--quiet", is_flag=True, help="Print nothing; only write the files.")
@click.option("--json", "as_json", is_flag=True, help="Print the JSON twin, not the text.")
def vet(
    design: Path,
    out: Path,
    response: str | None,
    seed: int | None,
    replicates: int | None,
    pace: str | None,
    workers: int,
    cluster: str | None,
    quiet: bool,
    as_json: bool,
) -> int:
    """Vet DESIGN.toml: how many columns its rows can carry, and what binds.

    Prints the report and writes it to DIR as text and JSON. The exit status is the verdict:
    0 within budget, 3 borderline, 4 over budget, 5 no budget. What an interrupted or killed run
    has finished is kept in DIR/<design>.run: see `scantling resume`.

    Of several responses each has its report, <design>-<response>, and <design>.txt is a table of
    all; --json prints a list, and the status is that of the most severe verdict.
    """
    from scantling.cli.run_folder import Request

    refuse_table(design)
    asked = replicates if replicates is not None else PACE[pace] if pace else None
    return carry_out(
        Request(
            design=design, out=out, response=response, seed=seed, replicates=asked,
            workers=workers, cluster=cluster, quiet=quiet, as_json=as_json,
        )
    )  # fmt: skip


def refuse_table(path: Path) -> None:
    """Say what to do with a table that is given in place of a design.

    Raises
    ------
    InputError
        If the file is there and its name is that of a table.
    """
    from scantling.errors import InputError

    ending = Path(path.name.lower().removesuffix(".gz")).suffix
    if ending in TABLES and path.exists():
        raise InputError(
            f"{path}: a design (.toml) is needed; `scantling draft {quote(str(path))}` writes one"
        )


def carry_out(request: Request, folder: Path | None = None) -> int:
    """Vet a design, print and write the report of each response, and return the status.

    `folder` is that of an earlier run to go on from.
    """
    from scantling.cli.output import print_report, reserved_folder, write_files
    from scantling.cli.progress import stages
    from scantling.cli.run_folder import kept_run, refuse_newer
    from scantling.core.streams import Work
    from scantling.design.parse import pick_response, read_designs
    from scantling.pipeline import repeating, vet_each, with_simulation
    from scantling.pipeline import vet as run
    from scantling.report.summary import (
        file_stems,
        json_list,
        most_severe,
        render_all,
        render_summary,
    )
    from scantling.report.text import render

    seed, replicates = request.seed, request.replicates
    every = read_designs(request.design)
    stems = file_stems(request.design.stem, [one.data.response for one in every])
    read = every if request.response is None else (pick_response(every, request.response),)
    stems = tuple(stems[every.index(one)] for one in read)
    changed = [with_simulation(one, seed=seed, replicates=replicates) for one in read]
    options = [f"--seed {seed}"] if seed is not None else []
    options += [f"--replicates {replicates}"] if replicates is not None else []
    commands = [repeating("vet", one, *options) for one in changed]
    if folder is not None:
        refuse_newer(folder, [request.out / f"{stem}.json" for stem in stems], commands)
    with (
        reserved_folder(request.out),
        kept_run(request, (request.design, read[0].data.file), folder) as journal,
    ):
        with stages(request.quiet) as progress:
            work = Work(
                workers=request.workers, cluster=request.cluster, journal=journal,
                watch=None if progress is None else progress.watch,
            )  # fmt: skip
            if len(changed) == 1:
                reports = [run(changed[0], workers=work, progress=progress, command=commands[0])]
            else:
                reports = [*vet_each(changed, workers=work, progress=progress, commands=commands)]
        documents = [report.to_json() for report in reports]
        for stem, report, document in zip(stems, reports, documents, strict=True):
            write_files(request.out, stem, {".txt": render(report), ".json": document})
        if len(reports) > 1:
            summary = render_summary(reports, stems)
            write_files(request.out, request.design.stem, {".txt": summary})
    if not request.quiet:
        alone = len(reports) == 1
        text = render(reports[0]) if alone else render_all(reports, stems)
        printed = documents[0] if alone else json_list(documents)
        print_report(printed if request.as_json else text, plain=request.as_json)
    return STATUS[most_severe(reports)]
