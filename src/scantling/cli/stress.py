"""`scantling stress`: selection under fresh errors at chosen rows and columns."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE, commands
from scantling.cli.options import simulation_options

STATUS = {"met": 0, "undecided": 3, "missed": 4, "no variance": 5}
REPEATED = ("response", "rows", "columns", "rule", "loss", "compare", "support", "seed",
            "replicates")  # fmt: skip


@commands.command()
@click.argument("source", type=click.Path(path_type=Path))
@click.option("--response", metavar="NAME", help="Which of a design's responses.")
@click.option("--rows", type=click.IntRange(30), metavar="N", help="Instead of the source's.")
@click.option("--columns", type=click.IntRange(2), metavar="P", help="Instead of the source's.")
@click.option("--rule", metavar="RULE", help="Penalty rule, instead of the source's.")
@click.option("--loss", metavar="LOSS", help="squared, huber, absolute or square-root.")
@click.option("--compare", metavar="RULE", help="A second penalty rule, on the same draws.")
@click.option(
    "--support", type=click.Choice(["random", "pilot"]),
    help="Which columns matter, instead of the design's.",
)  # fmt: skip
@simulation_options
def stress(
    source: Path, response: str | None, pace: str | None, workers: int, out: Path | None,
    as_json: bool, **said: Any,
) -> int:  # fmt: skip
    """Refit under fresh errors: is the same selection made again?

    SOURCE is a design, a stated design or a saved report. A design's own columns and volatility
    path are kept at its rows and up to its columns; elsewhere both are drawn from fitted laws.

    The exit status judges stability, power and false share of the rule at these rows and columns:
    0 every 90 % interval is on the right side of its bar, 4 one is wholly on the wrong side,
    3 undecided, 5 the errors have no variance.
    """
    from scantling.cli.output import print_report, reserved_folder, write_files
    from scantling.cli.progress import stages
    from scantling.core.streams import Work
    from scantling.design.stated import read_statement, states_no_data
    from scantling.report.stress_text import render_stress
    from scantling.stressed import Asked, stress_design, stress_statement

    if pace is not None and said["replicates"] is None:
        said["replicates"] = PACE[pace]
    command = repeating(source, {"response": response, **said})
    with stages(False) as progress:
        watch = None if progress is None else progress.watch
        how: dict[str, Any] = {
            "workers": Work(workers=workers, watch=watch), "progress": progress,
            "command": command,
        }  # fmt: skip
        if states_no_data(source):
            if response is not None:
                raise click.UsageError("--response goes with a design that has data")
            report = stress_statement(read_statement(source), Asked(**said), **how)
        else:
            from scantling.design.parse import read_design

            report = stress_design(read_design(source, response=response), Asked(**said), **how)
    text, document = render_stress(report), report.to_json()
    if out is not None:
        with reserved_folder(out):
            write_files(out, f"{source.stem}-stress", {".txt": text, ".json": document})
    print_report(document if as_json else text, plain=as_json)
    return STATUS[report.judgement.answer]


def repeating(source: Path, given: dict[str, Any]) -> str:
    """The command line that repeats the run."""
    from shlex import quote

    words = ["scantling stress", quote(source.name)]
    words += [f"--{name} {quote(str(given[name]))}" for name in REPEATED if given[name] is not None]
    return " ".join(words)
