"""A bare column of numbers, such as residuals, from a file or from standard input."""

from __future__ import annotations

import csv
import gzip
import hashlib
import sys
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.design.cells import column_numbers, number
from scantling.design.message import file_label, nearest, shown
from scantling.design.table import FEWEST_ROWS
from scantling.errors import InputError

STANDARD_INPUT = "-"
LARGEST_BYTES = 512 * 1024**2


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesFile:
    """One column of numbers, all of them finite."""

    name: str
    """The column's name, or that of the file if it has none."""
    values: FloatArray
    """Shape (n,), in the order of the file; read-only."""
    file_name: str
    """Base name of the file, or 'standard input'."""
    sha256: str
    """Of the bytes read."""


def read_series(source: str, *, column: str | None = None) -> SeriesFile:
    """Read a column of numbers.

    One number a line, with or without a heading; or a csv or tsv table with a heading, of which
    `column` names the column, or which has just one.

    Parameters
    ----------
    source : str
        A path (.gz is unpacked), or '-' for standard input.
    column : str, optional

    Raises
    ------
    InputError
        One line: what cannot be read, is no number, is missing or infinite, or is too short.
    """
    label, content = _content(source)
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        raise InputError(f"{label}: not text in UTF-8 (byte {fault.start + 1})") from fault
    first = text.split("\n", 1)[0]
    separator = "\t" if "\t" in first else ","
    try:
        reader = csv.reader(text.splitlines(), delimiter=separator, strict=True)
        rows = [row for row in reader if row]
    except csv.Error as fault:
        raise InputError(f"{label}: not a table ({fault})") from fault
    if not rows:
        raise InputError(f"{label}: empty; a column of numbers is needed")
    heading = None if number(rows[0][0]) is not None and len(rows[0]) == 1 else rows.pop(0)
    place = _place([name.strip() for name in heading or [""]], column, label)
    short = next((k for k, row in enumerate(rows) if len(row) <= place), None)
    if short is not None:
        raise InputError(f"{label}: row {short + 1} has {len(rows[short])} values; not a table")
    values, wrong = column_numbers([row[place] for row in rows])
    if wrong is not None:
        raise InputError(f"{label}: row {wrong.row + 1} is no number: {shown(wrong.text)}")
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise InputError(
            f"{label}: {bad.size} missing or infinite values, first in row {int(bad[0]) + 1}"
        )
    if values.size < FEWEST_ROWS:
        raise InputError(f"{label}: {values.size} values; at least {FEWEST_ROWS} are needed")
    if np.ptp(values) == 0:
        raise InputError(f"{label}: every value is {values[0]:g}; a series that varies is needed")
    name = heading[place].strip() if heading else label
    return SeriesFile(
        name=name or label,
        values=read_only(values),
        file_name=label,
        sha256=hashlib.sha256(content).hexdigest(),
    )


def _content(source: str) -> tuple[str, bytes]:
    if source == STANDARD_INPUT:
        return "standard input", sys.stdin.buffer.read(LARGEST_BYTES)
    path = Path(source)
    label = file_label(path)
    try:
        content = path.read_bytes()
        if path.suffix == ".gz":
            content = gzip.decompress(content)
    except FileNotFoundError as fault:
        raise InputError(f"{label}: no such file") from fault
    except IsADirectoryError as fault:
        raise InputError(f"{label}: a folder; a file is needed") from fault
    except (OSError, EOFError, zlib.error) as fault:
        raise InputError(f"{label}: cannot be read ({fault})") from fault
    return label, content


def _place(names: list[str], column: str | None, label: str) -> int:
    """Position of the column asked for, or of the only one."""
    if column is not None:
        if column not in names:
            raise InputError(f"{label}: no column {shown(column)}{nearest(column, names)}")
        return names.index(column)
    if len(names) > 1:
        raise InputError(f"{label}: {len(names)} columns; --column names the one to diagnose")
    return 0
