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
from scantling.design.message import counted, file_label, nearest, shown
from scantling.design.source import SEPARATOR_NAMES
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
    `column` names the column, or which has just one. An empty line between numbers is refused,
    since values would move in time; at the end it is fine.

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
    rows = _rows(text, separator, label)
    heading = None if number(rows[0][0]) is not None and len(rows[0]) == 1 else rows.pop(0)
    names = [name.strip() for name in heading or [""]]
    below = separator.join(rows[0]) if rows else ""
    _check_separator(names, below, separator, label, named=column is not None)
    place = _place(names, column, label)
    ragged = next((k for k, row in enumerate(rows) if len(row) != len(names)), None)
    if ragged is not None:
        found = counted(len(rows[ragged]), "value")
        raise InputError(
            f"{label}: row {ragged + 1} has {found} separated by {SEPARATOR_NAMES[separator]}, and"
            f" {len(names)} {'is' if len(names) == 1 else 'are'} needed; decimals need a point"
        )
    values, wrong = column_numbers([row[place] for row in rows])
    if wrong is not None:
        point = "; decimals need a point, not a comma" if _numeric(wrong.text) else ""
        raise InputError(f"{label}: row {wrong.row + 1} is no number: {shown(wrong.text)}{point}")
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        found = counted(int(bad.size), "missing or infinite value")
        raise InputError(f"{label}: {found}, first in row {int(bad[0]) + 1}")
    if values.size < FEWEST_ROWS:
        found = counted(values.size, "value")
        raise InputError(f"{label}: {found}; at least {FEWEST_ROWS} are needed")
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
        why = getattr(fault, "strerror", None) or fault
        raise InputError(f"{label}: cannot be read ({why})") from fault
    return label, content


def _rows(text: str, separator: str, label: str) -> list[list[str]]:
    """Fields of each line that holds any, the first of them perhaps a heading."""
    reader = csv.reader(text.splitlines(), delimiter=separator, strict=True)
    rows: list[list[str]] = []
    empty: int | None = None
    try:
        for row in reader:
            if len(row) <= 1 and not "".join(row).strip():
                empty = empty or (reader.line_num if rows else None)
                continue
            # In a table of several columns an empty line is no row, as in a design's table.
            if empty is not None and len(row) == 1:
                raise InputError(
                    f"{label}: line {empty} is empty; one number on every line is needed"
                )
            rows.append(row)
    except csv.Error as fault:
        raise InputError(f"{label}: not a table ({fault})") from fault
    if not rows:
        raise InputError(f"{label}: empty; a column of numbers is needed")
    return rows


def _check_separator(
    names: list[str], below: str, separator: str, label: str, *, named: bool
) -> None:
    """Refuse a first line that another mark than the expected one seems to separate.

    `below` is the second line: a mark in a lone heading may be part of its name.
    """
    expected = SEPARATOR_NAMES[separator]
    joined = separator.join(names)
    for mark, word in SEPARATOR_NAMES.items():
        parts = joined.split(mark)
        alone = len(names) == 1 and mark in below
        if mark != separator and len(parts) > 1 and (alone or all(map(_numeric, parts))):
            raise InputError(
                f"{label}: the first line, {shown(joined)}, looks separated by {word};"
                f" {expected} are needed, and decimals need a point"
            )
    if len(names) > 1 and not named and all(map(_numeric, names)):
        raise InputError(
            f"{label}: the first line is {len(names)} numbers separated by {expected}; a table"
            " needs a heading, and decimals a point"
        )


def _numeric(text: str) -> bool:
    """Whether a cell is a number, also one with a decimal comma."""
    return number(text.replace(",", ".")) is not None


def _place(names: list[str], column: str | None, label: str) -> int:
    """Position of the column asked for, or of the only one."""
    if column is not None:
        if column not in names:
            raise InputError(f"{label}: no column {shown(column)}{nearest(column, names)}")
        return names.index(column)
    if len(names) > 1:
        raise InputError(f"{label}: {len(names)} columns; --column names the one to diagnose")
    return 0
