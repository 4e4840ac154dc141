"""`scantling resume`: finish a run that was interrupted or killed."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import click

from scantling.cli.group import commands


@commands.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--workers", type=click.IntRange(1, 64), help="Instead of the run's.")
@click.option("--cluster", metavar="ADDRESS", help="Instead of the run's (extra: cluster).")
@click.option("--quiet", is_flag=True, help="Print nothing; only write the files.")
@click.option("--json", "as_json", is_flag=True, help="Print the JSON twin, not the text.")
def resume(run: Path, workers: int | None, cluster: str | None, quiet: bool, as_json: bool) -> int:
    """Go on with the run kept in the directory RUN.

    Ends with the report the run would have had, and with its exit status. Refused where the
    design, its table or the program has changed since.
    """
    from scantling.cli.run_folder import read_request
    from scantling.cli.vet import carry_out

    asked = read_request(run)
    if workers is not None:
        asked = replace(asked, workers=workers, cluster=None)
    if cluster is not None:
        asked = replace(asked, cluster=cluster)
    asked = replace(asked, quiet=quiet or asked.quiet, as_json=as_json or asked.as_json)
    return carry_out(asked, folder=run)
