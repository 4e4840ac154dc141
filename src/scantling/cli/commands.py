"""The commands: each parses, calls one library function, renders, and returns a status."""

from __future__ import annotations

from pathlib import Path
from shlex import quote
from typing import Any

import click

PACE = {"quick": 100, "normal": 400, "thorough": 2000}
"""Monte Carlo replicates behind --pace."""
STATUS = {"within budget": 0, "borderline": 3, "over budget": 4, "no budget": 5}


class OneLine(click.Group):
    """A group whose unknown commands are answered with the known ones."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Find the command; an unknown one is a usage error that names the known."""
        if args and self.get_command(ctx, args[0]) is None and not args[0].startswith("-"):
            known = ", ".join(self.list_commands(ctx))
            raise click.UsageError(f"no command {args[0]!r}; there are {known}", ctx)
        return super().resolve_command(ctx, args)

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; an interrupt is passed on without the empty line click prints."""
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt as stop:
            raise click.Abort from stop


@click.group(
    cls=OneLine,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog="Exit status: 0 within budget, 3 borderline, 4 over budget, 5 no budget, 2 bad usage"
    " or input, 1 internal fault, 130 interrupted.",
)
@click.version_option(package_name="scantling", message="%(prog)s %(version)s")
def commands() -> None:
    """Size a sparse regression for the tails it will meet, before anyone fits it."""


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


@commands.command()
@click.argument("data", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Where to write; default: the table's name with .toml, here. '-' prints it.",
)
def draft(data: Path, out: Path | None) -> int:
    """Write a starter design file for the table DATA.csv."""
    from scantling.cli.output import write_new
    from scantling.design.draft import draft_design

    if out is not None and str(out) == "-":
        click.echo(draft_design(data, folder=Path.cwd()), nl=False)
        return 0
    name = data.name.removesuffix(".gz")
    target = out or Path(Path(name).stem + ".toml")
    write_new(target, draft_design(data, folder=target.absolute().parent))
    click.echo(f"wrote {target}; look at its response, then: scantling vet {target}")
    return 0


@commands.command()
@click.argument("file")
@click.option("--column", metavar="NAME", help="Which column of a table holds the series.")
@click.option("--unordered", is_flag=True, help="The values of a series have no order in time.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Instead of the design's, or 1.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON, not text.")
def diagnose(
    file: str, column: str | None, unordered: bool, seed: int | None, as_json: bool
) -> int:
    """Diagnose tails, moments and dependence: of a design FILE.toml, or of a column of residuals.

    A column is read from a text file, one number a line, from a csv or tsv table, or, with '-',
    from standard input.
    """
    from scantling.cli.output import print_report

    if file.endswith(".toml"):
        if column is not None or unordered:
            raise click.UsageError("--column and --unordered go with a bare series, not a design")
        from scantling.pipeline import diagnose_design, read_design, with_simulation
        from scantling.report.series_document import design_diagnosis_json
        from scantling.report.series_text import render_design_diagnosis

        design = diagnose_design(with_simulation(read_design(Path(file)), seed=seed))
        text = design_diagnosis_json(design) if as_json else render_design_diagnosis(design)
    else:
        from scantling.design.series_file import read_series
        from scantling.pipeline import diagnose_column
        from scantling.report.series_document import series_json
        from scantling.report.series_text import render_series

        source = read_series(file, column=column)
        repeat = [file if file == "-" else quote(source.file_name)]
        repeat += [] if column is None else ["--column", quote(column)]
        repeat += ["--unordered"] if unordered else []
        repeat += [] if seed is None else ["--seed", str(seed)]
        series = diagnose_column(
            source,
            time_ordered=not unordered,
            seed=1 if seed is None else seed,
            command=" ".join(["scantling diagnose", *repeat]),
        )
        text = series_json(series) if as_json else render_series(series)
    print_report(text, plain=True)
    return 0
