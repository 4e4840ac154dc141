"""`scantling vet`: the whole job."""

from __future__ import annotations

from pathlib import Path
from shlex import quote

import click

from scantling.cli.group import PACE, STATUS, commands


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
    help="Threads; results do not depend on it.",
)
@click.option("--quiet", is_flag=True, help="Print nothing; only write the files.")
@click.option("--json", "as_json", is_flag=True, help="Print the JSON twin, not the text.")
def vet(
    design: Path,
    out: Path,
    seed: int | None,
    replicates: int | None,
    pace: str | None,
    workers: int,
    quiet: bool,
    as_json: bool,
) -> int:
    """Vet DESIGN.toml: how many columns its rows can carry, and what binds.

    Prints the report and writes it to DIR as text and JSON. The exit status is the verdict:
    0 within budget, 3 borderline, 4 over budget, 5 no budget.
    """
    from scantling.cli.output import print_report, reserved_folder, write_files
    from scantling.cli.progress import stages
    from scantling.pipeline import read_design, with_simulation
    from scantling.pipeline import vet as run
    from scantling.report.text import render

    read = read_design(design)
    asked = replicates if replicates is not None else PACE[pace] if pace else None
    changed = with_simulation(read, seed=seed, replicates=asked)
    options = [f"--seed {seed}"] if seed is not None else []
    options += [f"--replicates {asked}"] if asked is not None else []
    with reserved_folder(out), stages(quiet) as progress:
        report = run(
            changed, workers=workers, progress=progress,
            command=" ".join(["scantling vet", quote(design.name), *options]),
        )  # fmt: skip
    text, document = render(report), report.to_json()
    write_files(out, design.stem, {".txt": text, ".json": document})
    if not quiet:
        print_report(document if as_json else text, plain=as_json)
    return STATUS[report.verdict.answer]
