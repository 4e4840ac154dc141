"""`scantling stress`: selection under fresh errors at chosen rows and columns."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from scantling.cli.group import PACE, commands
from scantling.cli.options import LOSS_WORDS, RULE_WORDS, Whole, simulation_options

STATUS = {"met": 0, "undecided": 3, "missed": 4, "no variance": 5}
REPEATED = ("response", "rows", "columns", "rule", "loss", "compare", "support", "seed",
            "replicates")  # fmt: skip


@commands.command()
@click.argument("source", type=click.Path(path_type=Path))
@click.option(
    "--response", metavar="NAME", help="Which of a design's responses; needed if it has several."
)  # fmt: skip
@click.option(
    "--rows", type=Whole(30), metavar="N", help="At least 30; default: the source's."
)  # fmt: skip
@click.option(
    "--columns", type=Whole(2), metavar="P",
    help="More than are relevant; default: the source's.",
)  # fmt: skip
@click.option("--rule", metavar="RULE", help=f"{RULE_WORDS}; default: the source's.")
@click.option("--loss", metavar="LOSS", help=f"{LOSS_WORDS}; default: the source's.")
@click.option(
    "--compare", metavar="RULE",
    help="A second rule, of those above, on the same draws; the first alone sets the status.",
)  # fmt: skip
@click.option(
    "--support", type=click.Choice(["random", "pilot"]),
    help="Which columns matter; default: the design's, or random on paper.",
)  # fmt: skip
@simulation_options
def stress(
    source: Path, response: str | None, pace: str | None, workers: int, out: Path | None,
    as_json: bool, **said: Any,
) -> int:  # fmt: skip
    """Refit under fresh errors: is the same selection made again?

    SOURCE is a design, a stated design or a saved report; what it says comes before defaults. A
    design's own columns, and its volatility path if it has one, are kept at its rows and up to its
    columns; elsewhere both are drawn from fitted laws.

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
