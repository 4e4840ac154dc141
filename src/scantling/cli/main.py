"""Entry point: runs a command and turns whatever happens into one line and an exit status."""

from __future__ import annotations

import io
import os
import sys

import click

from scantling.cli.commands import commands
from scantling.errors import InputError

BAD_INPUT, FAULT, INTERRUPTED = 2, 1, 130


def run(arguments: list[str] | None = None) -> int:
    """Run a command line and return its exit status; messages go to stderr, one line each."""
    try:
        status = commands.main(args=arguments, prog_name="scantling", standalone_mode=False)
        sys.stdout.flush()
        return int(status or 0)
    except click.exceptions.Exit as leave:
        return int(leave.exit_code)
    except click.exceptions.NoArgsIsHelpError:
        known = ", ".join(commands.list_commands(click.Context(commands)))
        return _refuse(f"a command is needed: {known} (--help says more)")
    except click.UsageError as fault:
        path = "" if fault.ctx is None else fault.ctx.command_path.removeprefix("scantling").strip()
        where = f"{path}: " if path else ""
        return _refuse(f"{where}{fault.format_message()} (--help says more)")
    except click.ClickException as fault:
        return _refuse(fault.format_message())
    except InputError as fault:
        return _refuse(str(fault))
    except (KeyboardInterrupt, click.Abort):
        click.echo("scantling: interrupted; nothing was written", err=True)
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output left; that is no fault of the run.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError:
        return _refuse("the run needs more memory than there is; fewer columns or replicates help")
    except Exception as fault:
        if os.environ.get("SCANTLING_DEBUG"):
            raise
        click.echo(
            f"scantling: internal fault: {type(fault).__name__}: {_line(str(fault))}"
            " (SCANTLING_DEBUG=1 shows where)",
            err=True,
        )
        return FAULT


def _line(text: str) -> str:
    return " ".join(text.split())


def _refuse(message: str) -> int:
    click.echo(f"scantling: {_line(message)}", err=True)
    return BAD_INPUT


def main() -> None:
    """Run the command line of this process."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            # A name the terminal cannot show is written with escapes, not refused.
            stream.reconfigure(errors="backslashreplace")
    sys.exit(run())
