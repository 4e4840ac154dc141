"""The command group: what `scantling` is as a whole, and what its statuses mean."""

from __future__ import annotations

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

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the commands, each with its whole first sentence."""
        known = [(name, self.get_command(ctx, name)) for name in self.list_commands(ctx)]
        with formatter.section("Commands"):
            formatter.write_dl(
                [(name, found.get_short_help_str(limit=1000)) for name, found in known if found]
            )

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
