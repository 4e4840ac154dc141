"""`scantling draft`: a starter design from a table."""

from __future__ import annotations

from pathlib import Path

import click

from scantling.cli.group import commands


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
