"""`scantling diagnose`: tails, moments and dependence alone."""

from __future__ import annotations

from pathlib import Path
from shlex import quote

import click

from scantling.cli.group import commands


@commands.command()
@click.argument("file")
@click.option("--column", metavar="NAME", help="Which column of a table holds the series.")
@click.option("--response", metavar="NAME", help="Only this one of a design's responses.")
@click.option("--unordered", is_flag=True, help="The values of a series have no order in time.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Instead of the design's, or 1.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON, not text.")
def diagnose(
    file: str,
    column: str | None,
    response: str | None,
    unordered: bool,
    seed: int | None,
    as_json: bool,
) -> int:
    """Diagnose tails, moments and dependence: of a design FILE.toml, or of a column of residuals.

    A column is read from a text file, one number a line, from a csv or tsv table, or, with '-',
    from standard input. Several responses of a design follow one another; with --json, as a list.
    """
    from scantling.cli.output import print_report

    if file.endswith(".toml"):
        if column is not None or unordered:
            raise click.UsageError("--column and --unordered go with a bare series, not a design")
        text = _diagnosed(Path(file), response, seed, as_json)
    elif response is not None:
        raise click.UsageError("--response goes with a design, not a bare series")
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


def _diagnosed(path: Path, response: str | None, seed: int | None, as_json: bool) -> str:
    """What is printed of a design: of its only response, or of one after another."""
    from scantling.design.parse import pick_response, read_designs
    from scantling.pipeline import diagnose_each, repeating, with_simulation
    from scantling.report.series_document import design_diagnosis_json
    from scantling.report.series_text import render_design_diagnosis
    from scantling.report.summary import json_list, separator

    designs = read_designs(path)
    if response is not None:
        designs = (pick_response(designs, response),)
    options = [] if seed is None else [f"--seed {seed}"]
    found = diagnose_each(
        [with_simulation(design, seed=seed) for design in designs],
        commands=[repeating("diagnose", design, *options) for design in designs],
    )
    if as_json:
        documents = [design_diagnosis_json(one) for one in found]
        return documents[0] if len(documents) == 1 else json_list(documents)
    texts = [render_design_diagnosis(one) for one in found]
    if len(texts) == 1:
        return texts[0]
    return "\n".join(
        separator(place, len(found), one.design.data.response) + text
        for place, (one, text) in enumerate(zip(found, texts, strict=True), start=1)
    )
