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
    from scantling.design.draft import Draft, drafted
    from scantling.design.message import counted, shown

    def tell(made: Draft) -> None:
        notes = counted(made.to_mend, "comment")
        mend = f"; {notes} in the draft on what to mend" if made.to_mend else ""
        click.echo(f"response taken: {shown(made.response)}, a guess{mend}", err=True)

    if out is not None and str(out) == "-":
        made = drafted(data, folder=Path.cwd())
        click.echo(made.text, nl=False)
        tell(made)
        return 0
    name = data.name.removesuffix(".gz")
    target = out or Path(Path(name).stem + ".toml")
    made = drafted(data, folder=target.absolute().parent)
    write_new(target, made.text)
    click.echo(f"wrote {target}; look at its response, then: scantling vet {target}")
    tell(made)
    return 0
