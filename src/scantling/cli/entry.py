"""The installed command: an interrupt while libraries load is an interrupt, not a traceback."""

from __future__ import annotations

import sys


def main() -> None:
    """Run the command line of this process."""
    try:
        from scantling.cli.main import main as command

        command()
    except KeyboardInterrupt:
        sys.stderr.write("scantling: interrupted; nothing was written\n")
        sys.exit(130)
