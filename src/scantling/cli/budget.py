"""`scantling budget`: the planning stage alone, for a design on paper."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE, STATUS, commands
from scantling.cli.options import LOSS_WORDS, RULE_WORDS, simulation_options

SAID = (
    "rows", "columns", "law", "column_law", "correlation", "rule", "loss", "relevant",
    "smallest_effect", "risk", "power", "stability", "false_share", "replicates", "seed",
)  # fmt: skip


@commands.command()
@click.argument("source", required=False, type=click.Path(path_type=Path))
@click.option("--rows", type=int, metavar="N", help="Rows of the sample, at least 30.")
@click.option(
    "--columns", type=int, metavar="P", help="Candidate columns, more than are relevant."
)  # fmt: skip
@click.option(
    "--law", metavar="LAW",
    help="Of the errors, as in student-t:df=3; `scantling laws` lists them.",
)  # fmt: skip
@click.option("--column-law", metavar="LAW", help="Of the columns; default: the errors' law.")
@click.option(
    "--correlation", type=float, metavar="R",
    help="Between every two columns, from 0 to below 1; default 0.",
)  # fmt: skip
@click.option("--rule", metavar="RULE", help=f"{RULE_WORDS}; default plug-in.")
@click.option("--loss", metavar="LOSS", help=f"{LOSS_WORDS}; default squared.")
@click.option(
    "--relevant", type=int, metavar="S",
    help="Columns expected to matter, at least 1; default 10.",
)  # fmt: skip
@click.option(
    "--effect", "smallest_effect", type=float, metavar="B",
    help="Smallest effect to be found, sd of the response per sd of a column, above 0 and at most"
    " 5; default 0.15. S B^2 has to be below 1.",
)  # fmt: skip
@click.option(
    "--risk", type=float, metavar="R",
    help="Accepted risk that noise passes the penalty, above 0 and below 0.5; default 0.05.",
)  # fmt: skip
@click.option(
    "--power", type=float, metavar="R",
    help="Share of relevant columns to be selected, above 0 and below 1; default 0.8.",
)  # fmt: skip
@click.option(
    "--stability", type=float, metavar="R",
    help="Stability index to be reached, 0 to 1; default 0.75.",
)  # fmt: skip
@click.option(
    "--false-share", type=float, metavar="R",
    help="Largest share of false columns among those selected, from 0 to below 1; default 0.2.",
)  # fmt: skip
@simulation_options
def budget(
    source: Path | None, pace: str | None, workers: int, out: Path | None, as_json: bool,
    **said: Any,
) -> int:  # fmt: skip
    """How many columns so many rows can carry, without data.

    From flags (--rows, --columns and --law at least), from a stated design SOURCE.toml, or from a
    saved report SOURCE.json, whose fitted law, rows and columns it takes; flags win over either,
    and defaults are for what neither says. The exit status is the verdict, as with vet: 0 within
    budget, 3 borderline, 4 over budget, 5 no budget.
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
    statement = read.changed(given, {name: flag_of(name) for name in given})
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
    words += [f"{flag_of(name)} {quote(str(value))}" for name, value in given.items()]
    return " ".join(words)


def flag_of(name: str) -> str:
    """The flag by which a value is said."""
    return "--" + ("effect" if name == "smallest_effect" else name.replace("_", "-"))
