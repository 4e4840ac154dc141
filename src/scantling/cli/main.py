"""Entry point: runs a command and turns whatever happens into one line and an exit status."""

from __future__ import annotations

import errno
import io
import os
import sys

import click

from scantling.cli.commands import commands
from scantling.errors import InputError

BAD_INPUT, FAULT, INTERRUPTED = 2, 1, 130
DISK_FULL = (errno.ENOSPC, errno.EDQUOT)


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
        return _refuse(str(fault), _kept(fault))
    except (KeyboardInterrupt, click.Abort) as stop:
        click.echo(f"scantling: interrupted; {_kept(stop) or 'nothing was written'}", err=True)
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output left; that is no fault of the run.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError as fault:
        more = "fewer columns, replicates or workers help"
        return _refuse(f"the run needs more memory than there is; {more}", _kept(fault))
    except Exception as fault:
        if isinstance(fault, OSError) and fault.errno in DISK_FULL:
            where = f"{fault.filename}: " if fault.filename else "output: "
            return _refuse(f"{where}cannot be written ({fault.strerror})", _kept(fault))
        if os.environ.get("SCANTLING_DEBUG"):
            raise
        click.echo(
            f"scantling: internal fault: {type(fault).__name__}: {_line(str(fault))}"
            f" (SCANTLING_DEBUG=1 shows where{'; ' * bool(_kept(fault))}{_kept(fault)})",
            err=True,
        )
        return FAULT


def _line(text: str) -> str:
    return " ".join(text.split())


def _refuse(message: str, kept: str = "") -> int:
    more = f"; what is done is kept: {kept}" if kept else ""
    click.echo(f"scantling: {_line(message)}{more}", err=True)
    return BAD_INPUT


def _kept(fault: BaseException) -> str:
    """How to go on, where a run folder was left behind; else empty."""
    notes = getattr(fault, "__notes__", []) + getattr(fault.__cause__, "__notes__", [])
    return next((note for note in notes if note.startswith("scantling resume ")), "")


def main() -> None:
    """Run the command line of this process."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            # A name the terminal cannot show is written with escapes, not refused.
            stream.reconfigure(errors="backslashreplace")
    sys.exit(run())
