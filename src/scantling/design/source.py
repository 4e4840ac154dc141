"""The user's data file opened: delimited text or parquet to columns of numbers.

Text is read with the standard library's csv reader in strict mode and not with
pandas: pandas fills short rows, takes a surplus first field for an index and
renames repeated names, where a refusal with the line's number is wanted. Rows
are converted block by block, so that only numbers, never the text of the
whole file, are held.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import zlib
from collections.abc import Collection, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from io import TextIOWrapper
from itertools import islice
from pathlib import Path
from typing import Any, TextIO

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.core.streams import MEMORY_BOUND
from scantling.design.cells import Fault, column_numbers
from scantling.design.message import file_label, printable, shown
from scantling.errors import InputError

_LONGEST_LINE = 16 * 1024 * 1024
_CELLS_PER_BLOCK = 1_000_000
# Numbers are held twice while blocks are joined, and once more by what follows.
_COPIES = 3
_SEPARATORS = {".csv": ",", ".tsv": "\t"}
_ACCEPTED = ".csv, .tsv, .csv.gz, .tsv.gz or .parquet"
SEPARATOR_NAMES = {",": "commas", "\t": "tabs", ";": "semicolons", "|": "bars"}
"""What may separate the values of a line, in words; the first two are taken."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RawColumns:
    """Columns of a data file as numbers, before any of them is judged."""

    names: tuple[str, ...]
    """Names of the columns that were converted, in file order."""
    numbers: FloatArray
    """Shape (n, k): nan where a value is missing or is not a number."""
    faults: tuple[Fault | None, ...]
    """For each column the first value that is neither a number nor missing."""
    labels: dict[str, list[str]]
    """Text, as in the file, of the columns that were asked for as labels."""
    lines: NDArray[np.int64] | None
    """Shape (n,): line of the file at which each row ends; None for parquet."""

    def where(self, row: int) -> str:
        """Return how a row, counted from 0, is named in a message."""
        line = f" (line {self.lines[row]})" if self.lines is not None else ""
        return f"row {row + 1}{line}"


def file_sha256(path: Path) -> str:
    """Return the sha-256 of the file's bytes, in hexadecimal.

    Raises
    ------
    InputError
        If the file is missing, is not a regular file or cannot be read.
    """
    with _readable(path), path.open("rb") as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()


def read_header(path: Path) -> tuple[str, ...]:
    """Return the names of a data file's columns, in file order, spaces around them removed.

    Raises
    ------
    InputError
        If the file is missing, a folder, empty, of an unknown kind, or not a table.
    """
    with _readable(path):
        if _ending(path) == ".parquet":
            return tuple(_open_parquet(path).schema_arrow.names)
        with _open_text(path) as handle:
            return next(_rows(handle, path))[1]


def read_columns(
    path: Path, positions: Sequence[int], *, labels: Collection[int] = ()
) -> RawColumns:
    """Return the columns at `positions` as numbers, and those at `labels` as text.

    Parameters
    ----------
    path : Path
        The data file.
    positions : sequence of int
        Positions, from 0, of the columns to convert.
    labels : collection of int
        Positions of the columns whose text is kept.

    Raises
    ------
    InputError
        If the file is not a table (ragged rows, bytes that are not text, a
        damaged archive), or if its numbers would exceed the memory bound.
    """
    with _readable(path):
        if _ending(path) == ".parquet":
            return _parquet_columns(path, positions, labels)
        with _open_text(path) as handle:
            return _text_columns(handle, path, positions, labels)


@contextmanager
def _readable(path: Path) -> Iterator[None]:
    """Refuse what cannot be opened, and turn the faults of reading into one line."""
    name, label = printable(str(path)), file_label(path)
    try:
        if path.is_dir():
            raise InputError(f"{name}: this is a folder; a data file ({_ACCEPTED}) is needed")
        if not path.exists():
            raise InputError(f"{name}: no such data file")
        if not path.is_file():
            raise InputError(f"{name}: not a regular file; a data file ({_ACCEPTED}) is needed")
        if path.stat().st_size == 0:
            raise InputError(f"{label}: the file is empty; a header and rows are needed")
        yield
    except InputError:
        raise
    except (gzip.BadGzipFile, EOFError, zlib.error) as fault:
        raise InputError(
            f"{label}: a damaged or incomplete gzip archive ({printable(str(fault))})"
        ) from fault
    except OSError as fault:
        raise InputError(f"{name}: cannot be read ({fault.strerror or fault})") from fault


@contextmanager
def _open_text(path: Path) -> Iterator[TextIO]:
    """Open delimited text, unpacked if need be, line ends left as they are."""
    _separator(path)
    with path.open("rb") as handle:
        unpacked: Any = gzip.GzipFile(fileobj=handle) if _ending(path) == ".gz" else handle
        yield TextIOWrapper(unpacked, encoding="utf-8-sig", newline="")


def _ending(path: Path) -> str:
    return path.suffix.lower()


def _separator(path: Path) -> str:
    packed = _ending(path) == ".gz"
    ending = _ending(Path(path.stem)) if packed else _ending(path)
    if ending not in _SEPARATORS:
        found = ending + _ending(path) if packed else ending
        raise InputError(
            f"{file_label(path)}: the ending {shown(found)} is not known; {_ACCEPTED} is needed"
        )
    return _SEPARATORS[ending]


def _lines(handle: TextIO, label: str) -> Iterator[str]:
    """Yield the lines of a text, refusing what no table holds."""
    number = 0
    while True:
        number += 1
        try:
            line = handle.readline(_LONGEST_LINE)
        except UnicodeDecodeError as fault:
            raise InputError(
                f"{label}: not UTF-8 text (byte 0x{fault.object[fault.start]:02x} at or after"
                f" line {number}); save the table as UTF-8"
            ) from fault
        if not line:
            return
        if "\0" in line:
            raise InputError(f"{label}: line {number} holds a NUL byte; not a table of text")
        if len(line) >= _LONGEST_LINE:
            raise InputError(f"{label}: line {number} is over 16 MiB long; not a table")
        yield line


def _rows(handle: TextIO, path: Path) -> Iterator[tuple[int, tuple[str, ...]]]:
    """Yield (line number, fields): the header first, then every row, all of one width."""
    label, separator = file_label(path), _separator(path)
    reader = csv.reader(_lines(handle, label), delimiter=separator, strict=True)
    width, pending = 0, []
    while True:
        try:
            fields = next(reader)
        except StopIteration:
            break
        except csv.Error as fault:
            raise InputError(
                f"{label}: line {reader.line_num}: not a row of a table ({fault}; is a quotation"
                " mark left open?)"
            ) from fault
        line = reader.line_num
        if not fields or (len(fields) == 1 and not fields[0].strip() and width != 1):
            # An empty line is no row, except where a row is a single value:
            # there it is a missing one, unless nothing follows.
            pending += [line] if width == 1 else []
            continue
        if not width:
            width = len(fields)
            fields = [name.strip() for name in fields]
            _check_separator(fields, separator, label)
        elif len(fields) != width:
            raise InputError(
                f"{label}: line {line} has {len(fields)} values where the header has {width}"
                " names; every row needs one value per name"
            )
        for earlier in pending:
            yield earlier, ("",)
        pending = []
        yield line, tuple(fields)
    if not width:
        raise InputError(f"{label}: the file is empty; a header and rows are needed")


def _check_separator(header: list[str], separator: str, label: str) -> None:
    """Refuse a header that is one name only because another separator was used."""
    other = [mark for mark in SEPARATOR_NAMES if mark != separator and mark in header[0]]
    if len(header) == 1 and other:
        raise InputError(
            f"{label}: the header is one name, {shown(header[0])}; values separated by"
            f" {SEPARATOR_NAMES[separator]} are needed, these look separated by"
            f" {SEPARATOR_NAMES[other[0]]}"
        )


def _check_size(rows: int, columns: int, label: str) -> None:
    size = rows * columns * 8 * _COPIES
    if size > MEMORY_BOUND:
        raise InputError(
            f"{label}: {rows} rows of {columns} columns take {size / 1024**3:.1f} GiB"
            f" ({_COPIES} copies) and at most {MEMORY_BOUND / 1024**3:g} GiB are held;"
            " name fewer columns, or fewer rows"
        )


def _text_columns(
    handle: TextIO, path: Path, positions: Sequence[int], labels: Collection[int]
) -> RawColumns:
    """Convert delimited text block by block."""
    rows = _rows(handle, path)
    header = next(rows)[1]
    size = max(1, _CELLS_PER_BLOCK // len(header))
    faults: list[Fault | None] = [None] * len(positions)
    texts: dict[str, list[str]] = {header[place]: [] for place in labels}
    parts, lines, done = [], [], 0
    while block := list(islice(rows, size)):
        _check_size(done + len(block), len(positions), file_label(path))
        lines += [line for line, _ in block]
        columns = list(zip(*(fields for _, fields in block), strict=True))
        for place in labels:
            texts[header[place]] += columns[place]
        part = np.empty((len(positions), len(block)))
        for target, place in enumerate(positions):
            part[target], fault = column_numbers(columns[place])
            if fault is not None and faults[target] is None:
                faults[target] = Fault(row=done + fault.row, text=fault.text)
        parts.append(part)
        done += len(block)
    numbers = np.concatenate(parts, axis=1).T if parts else np.empty((0, len(positions)))
    return RawColumns(
        names=tuple(header[place] for place in positions),
        numbers=numbers,
        faults=tuple(faults),
        labels=texts,
        lines=np.asarray(lines, dtype=np.int64),
    )


def _open_parquet(path: Path) -> Any:
    """Return the file as pyarrow opens it; pyarrow is an optional extra."""
    label = file_label(path)
    try:
        from pyarrow import ArrowException, parquet
    except ImportError as fault:
        raise InputError(
            f"{label}: parquet needs pyarrow; pip install scantling[parquet], or save the table"
            " as .csv"
        ) from fault
    try:
        return parquet.ParquetFile(path)
    except ArrowException as fault:
        raise InputError(f"{label}: not a parquet file, or a damaged one") from fault


def _parquet_columns(path: Path, positions: Sequence[int], labels: Collection[int]) -> RawColumns:
    """Convert parquet column by column; text and dates are treated as in a text file."""
    from pyarrow import ArrowException

    file, label = _open_parquet(path), file_label(path)
    _check_size(file.metadata.num_rows, file.metadata.num_columns, label)
    names = file.schema_arrow.names
    numbers = np.empty((len(positions), file.metadata.num_rows))
    faults: list[Fault | None] = []
    try:
        table = file.read()
        for target, place in enumerate(positions):
            numbers[target], fault = _arrow_numbers(table.column(place))
            faults.append(fault)
        texts = {names[place]: _arrow_texts(table.column(place)) for place in labels}
    except (ArrowException, OSError, ValueError, OverflowError) as fault:
        raise InputError(f"{label}: a damaged parquet file, or types it cannot hold") from fault
    return RawColumns(
        names=tuple(names[place] for place in positions),
        numbers=numbers.T,
        faults=tuple(faults),
        labels=texts,
        lines=None,
    )


def _arrow_numbers(column: Any) -> tuple[FloatArray, Fault | None]:
    """Return a column of numbers, decimals or true and false as numbers; others by their text."""
    import pyarrow

    kind = column.type
    kinds = pyarrow.types
    if kinds.is_boolean(kind):
        column, kind = column.cast(pyarrow.uint8()), pyarrow.uint8()
    if kinds.is_integer(kind) or kinds.is_floating(kind):
        return column.cast(pyarrow.float64(), safe=False).to_numpy(), None
    return column_numbers(_arrow_texts(column))


def _arrow_texts(column: Any) -> list[str]:
    """Return the values as a text file would hold them."""
    return ["" if value is None else str(value) for value in column.to_pylist()]
