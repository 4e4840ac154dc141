"""`scantling budget`: the planning stage alone, for a design on paper."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE, STATUS, commands
from scantling.cli.options import simulation_options

SAID = (
    "rows", "columns", "law", "column_law", "correlation", "rule", "loss", "relevant",
    "smallest_effect", "risk", "power", "stability", "false_share", "replicates", "seed",
)  # fmt: skip


@commands.command()
@click.argument("source", required=False, type=click.Path(path_type=Path))
@click.option("--rows", type=int, metavar="N", help="Rows of the sample.")
@click.option("--columns", type=int, metavar="P", help="Candidate columns.")
@click.option("--law", metavar="LAW", help="Of the errors, as in student-t:df=3; see `laws`.")
@click.option("--column-law", metavar="LAW", help="Of the columns; default: the errors' law.")
@click.option("--correlation", type=float, metavar="R", help="Between every two columns.")
@click.option("--rule", metavar="RULE", help="plug-in or self-normalised.")
@click.option("--loss", metavar="LOSS", help="squared, huber, absolute or square-root.")
@click.option("--relevant", type=int, metavar="S", help="Columns expected to matter.")
@click.option(
    "--effect", "smallest_effect", type=float, metavar="B",
    help="Smallest effect to be found, sd of the response per sd of a column.",
)  # fmt: skip
@click.option("--risk", type=float, help="Accepted break-through risk.")
@click.option("--power", type=float, help="Share of relevant columns to be selected.")
@click.option("--stability", type=float, help="Stability index to be reached.")
@click.option("--false-share", type=float, help="Largest share of false columns selected.")
@simulation_options
def budget(
    source: Path | None, pace: str | None, workers: int, out: Path | None, as_json: bool,
    **said: Any,
) -> int:  # fmt: skip
    """How many columns so many rows can carry, without data.

    From flags (--rows, --columns and --law at least), from a stated design SOURCE.toml, or from a
    saved report SOURCE.json, whose fitted law, rows and columns it takes; flags win over either.
    The exit status is the verdict, as with vet.
    """
    from scantling.cli.output import print_report, reserved_folder, write_files
    from scantling.cli.progress import stages
    from scantling.design.stated import Statement, read_statement
    from scantling.planned import plan_design
    from scantling.report.text import render_plan

    given = {name: said[name] for name in SAID if said.get(name) is not None}
    if pace is not None:
        given.setdefault("replicates", PACE[pace])
    read = Statement(title="a design on paper", stem="budget", values={})
    if source is not None:
        read = read_statement(source)
    statement = Statement(
        title=read.title, stem=read.stem, inputs=read.inputs, facts=read.facts,
        values={**read.values, **given},
    )  # fmt: skip
    command = repeating(source, given)
    with stages(False) as progress:
        report = plan_design(statement, workers=workers, progress=progress, command=command)
    text, document = render_plan(report), report.to_json()
    if out is not None:
        stem = statement.stem if source is None else f"{statement.stem}-budget"
        with reserved_folder(out):
            write_files(out, stem, {".txt": text, ".json": document})
    print_report(document if as_json else text, plain=as_json)
    return STATUS[report.verdict.answer]


def repeating(source: Path | None, given: dict[str, Any]) -> str:
    """The command line that repeats the run."""
    from shlex import quote

    words = ["scantling budget"] + ([] if source is None else [quote(source.name)])
    names = {"smallest_effect": "effect"}
    for name, value in given.items():
        flag = names.get(name, name).replace("_", "-")
        words.append(f"--{flag} {quote(str(value))}")
    return " ".join(words)
