"""Where results go: files written whole or not at all, and the terminal."""

from __future__ import annotations

import os
import sys
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

import click

from scantling.errors import InputError, ResourceError

EMPHASISED = ("Verdict", "Because", "Columns", "Limits", "Rows", "Remedies")


@contextmanager
def reserved_folder(folder: Path) -> Iterator[None]:
    """Make sure before a run that its results can be written; leave no empty folder behind.

    Raises
    ------
    InputError
        If the folder cannot be created or written to.
    """
    made = [path for path in (folder, *folder.parents) if not path.exists()]
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        raise InputError(f"--out {folder}: cannot be made a folder ({fault.strerror})") from fault
    if not os.access(folder, os.W_OK):
        raise InputError(f"--out {folder}: cannot be written to")
    try:
        yield
    except BaseException:
        with suppress(OSError):
            for path in made:
                path.rmdir()
        raise


def write_files(folder: Path, stem: str, contents: dict[str, str]) -> None:
    """Write each content to folder/stem+suffix, over what was there, whole or not at all."""
    for suffix, text in contents.items():
        _replace(folder / (stem + suffix), text)


def write_new(path: Path, text: str) -> None:
    """Write a file that must not exist yet.

    Raises
    ------
    InputError
        If it exists or cannot be written.
    """
    if path.exists():
        raise InputError(f"{path}: exists; --out names another file")
    _replace(path, text)


def _replace(path: Path, text: str) -> None:
    """Write beside the target and rename: a reader sees the old file or the new one."""
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    except OSError as fault:
        raise ResourceError(f"{path}: cannot be written ({fault.strerror})") from fault
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        mask = os.umask(0)
        os.umask(mask)
        Path(name).chmod(0o666 & ~mask)
        Path(name).replace(path)
    except OSError as fault:
        Path(name).unlink(missing_ok=True)
        raise ResourceError(f"{path}: cannot be written ({fault.strerror})") from fault
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise


def print_report(text: str, *, plain: bool) -> None:
    """Print to stdout; on a terminal that takes styles the first screen's labels are bold."""
    if plain or not _styled():
        _echo(text)
        return
    lines = text.split("\n")
    for place, line in enumerate(lines[:12]):
        label = line.split(" ", 1)[0]
        if label in EMPHASISED:
            lines[place] = click.style(label, bold=True) + line[len(label) :]
    _echo("\n".join(lines))


def _echo(text: str) -> None:
    """Print; a reader that leaves early changes nothing about the verdict."""
    try:
        click.echo(text, nl=False)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _styled() -> bool:
    plain = os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb"
    return sys.stdout.isatty() and not plain
