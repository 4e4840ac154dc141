"""`scantling diagnose`: tails, moments and dependence alone."""

from __future__ import annotations

from pathlib import Path
from shlex import quote

import click

from scantling.cli.group import commands


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
