"""A starter design file for a table, with comments on what has to be decided or mended."""

from __future__ import annotations

import json
import os
import re
import textwrap
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.design.clock import disorder, looks_like_date
from scantling.design.keys import LANGUAGE, has_control
from scantling.design.message import counted, file_label, listed, shown
from scantling.design.source import RawColumns, read_columns, read_header
from scantling.design.spec import ExpandSpec, PenaltySpec, SimulationSpec, TargetSpec
from scantling.design.table import FEWEST_ROWS, constant_columns, identical_columns
from scantling.errors import InputError

_TIME_NAME = re.compile(
    r"(date|time|timestamp|datetime|day|week|month|quarter|year|period|t|index|obs|row)s?",
    re.IGNORECASE,
)
_DRAFT_OWN_LAGS = 5
_WIDEST = 80
# Dropping the rows of a column with more gaps than values would cost most of the table.
_LEAST_FILLED = 0.5


_MEANING = {
    "transform": "of the raw columns",
    "powers": "each column alone, up to this power",
    "products": "pairs of raw columns",
    "lags": "lags 1 to this of all of these; 0 as they stand",
    "contemporaneous": "also lag 0 when lags > 0",
    "own_lags": "lags 1 to this of the response",
    "kind": "what is to be fitted",
    "relevant": "columns expected to matter",
    "smallest_effect": "sd of the response per sd of a column",
    "risk": "that a noise column passes the penalty",
    "power": "share of relevant columns selected",
    "stability": "of selection under fresh errors",
    "false_share": "of false columns among the selected",
    "support": "which columns matter in refits",
    "rule": "how the penalty is chosen",
    "loss": "of the regression",
    "adaptive": "whether a second, reweighted lasso follows",
    "replicates": "draws of each simulation",
    "seed": "the same seed gives the same report",
}


_RESPONSES = ("y", "response", "target", "dependent")
"""Names a response often has; else the first numeric column is guessed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Findings:
    """What a table offers to a design, and what has to be mended in it."""

    time: str | None
    """First column that increases strictly and is named or shaped like a time."""
    response: str
    """First numeric column that varies and is not the time."""
    columns: tuple[str, ...]
    """The candidates."""
    all_others: bool
    """Whether the candidates are all that "*" would take."""
    drop_rows: bool
    """Whether rows with missing or infinite values have to be dropped."""
    notes: tuple[str, ...]
    """Comments: columns skipped, what is to be mended."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Draft:
    """A starter design file, and what was decided for its reader."""

    text: str
    """Of the file."""
    response: str
    """Column taken as the response: a guess, unless it is the only one named so."""
    to_mend: int
    """Notes in the text on what has to be mended in the table."""


def draft_design(data_path: str | Path, *, folder: str | Path | None = None) -> str:
    """Return the text of a starter design file for a table: see `drafted`."""
    return drafted(data_path, folder=folder).text


def drafted(data_path: str | Path, *, folder: str | Path | None = None) -> Draft:
    """Return a starter design file for a table, and which response it takes.

    The time is the first column that increases strictly and is named or shaped
    like a date or an index; the response, a guess to be changed, is one named so or the first
    numeric column that is not the time. When the table is clean the draft can
    be vetted as it is; when not, columns that cannot be used are left out of
    `columns`, rows with missing values are dropped, and comments name what has
    to be mended.

    Parameters
    ----------
    data_path : str or Path
        The table: .csv, .tsv (also .gz) or .parquet.
    folder : str or Path, optional
        Where the draft will be written; the path of the table in it is relative
        to this folder. By default the folder of the table.

    Raises
    ------
    InputError
        If the file cannot be read, is not a table, has no numeric column that varies, or too
        few rows for any to.
    """
    path = Path(data_path)
    findings = _examine(path)
    about = f"A draft for {shown(file_label(path))}: read it through before relying on it."
    rows = [line for note in (about, *findings.notes) for line in _comment(note)]
    rows += [f"title = {_quoted(_stem(path))}", ""]
    rows += _data_rows(findings, _relative(path, folder))
    defaults = ExpandSpec(own_lags=0 if findings.columns else _DRAFT_OWN_LAGS)
    target = TargetSpec()
    relevant = min(target.relevant, max(len(findings.columns) // 2, 1))
    rows += _table_rows("expand", asdict(defaults))
    rows += _table_rows("purpose", {"kind": "regression"})
    rows += _table_rows("target", {**asdict(target), "relevant": relevant})
    rows += _table_rows("penalty", asdict(PenaltySpec()))
    rows += _table_rows("simulation", asdict(SimulationSpec()))
    return Draft(
        text="\n".join(rows[:-1]) + "\n",
        response=findings.response,
        to_mend=sum(note.startswith("To mend") for note in findings.notes),
    )


def _data_rows(findings: _Findings, file: str) -> list[str]:
    """Return the lines of [data]."""
    lines = ["[data]", *_line("file", _quoted(file), "csv or tsv (also .gz), or parquet")]
    if findings.time is not None:
        lines += _line("time", _quoted(findings.time), "unique and increasing; optional")
    else:
        lines += _line("# time", '"..."', "unique and increasing; without it rows have no order")
    lines += _line(
        "response", _quoted(findings.response), "a guess, to be changed, or a list of several"
    )
    about = "names or glob patterns of the candidate columns"
    if findings.all_others:
        lines += _line("columns", '["*"]', f'{about}; "*": all other numeric ones')
    elif not findings.columns:
        lines += _line(
            "columns", "[]", f"{about}; none is usable, so lags of the response are used"
        )
    else:
        lines += [*_comment(about), "columns = ["]
        lines += [f"    {_quoted(name)}," for name in findings.columns]
        lines.append("]")
    missing = "drop-rows" if findings.drop_rows else "refuse"
    return [*lines, *_line("missing", f'"{missing}"', _accepted("data", "missing")), ""]


def _table_rows(table: str, values: dict[str, object]) -> list[str]:
    """Return the lines of one table: each key with its meaning and what is accepted."""
    lines = [f"[{table}]"]
    for key, value in values.items():
        lines += _line(key, json.dumps(value), f"{_MEANING[key]}: {_accepted(table, key)}")
    return [*lines, ""]


def _line(key: str, value: str, about: str) -> list[str]:
    """Return a key with its comment behind it, or above it where both would be too wide."""
    together = f"{key} = {value}  # {about}"
    return [together] if len(together) <= _WIDEST else [*_comment(about), f"{key} = {value}"]


def _comment(text: str) -> list[str]:
    """Return a comment, wrapped; names are not broken, however long."""
    return textwrap.wrap(
        text, _WIDEST, initial_indent="# ", subsequent_indent="# ",
        break_long_words=False, break_on_hyphens=False,
    )  # fmt: skip


def _accepted(table: str, key: str) -> str:
    rule = LANGUAGE[table][key]
    if rule.available:
        words = [word if isinstance(word, str) else json.dumps(word) for word in rule.available]
        return "in this version " + " or ".join(words)
    return rule.accepted


def _examine(path: Path) -> _Findings:
    """Return what the table offers, every column judged as `read_table` would."""
    label = file_label(path)
    header = read_header(path)
    notes, places = _header_notes(header)
    raw = read_columns(path, places)
    rows = len(raw.numbers)
    if not rows:
        raise InputError(f"{label}: a header and no rows; at least {FEWEST_ROWS} rows are needed")
    empty: NDArray[np.bool_] = np.asarray(np.isnan(raw.numbers).all(axis=0))
    time, time_notes = _find_time(path, header, raw, empty)
    notes += time_notes
    mixed = [j for j, fault in enumerate(raw.faults) if fault is not None and not empty[j]]
    notes += [_mixed_note(raw, j) for j in mixed]
    usable = [
        j for j, name in enumerate(raw.names) if not empty[j] and j not in mixed and name != time
    ]
    skipped = [name for j, name in enumerate(raw.names) if empty[j] and name != time]
    if skipped:
        notes.append(f"Columns without any number, skipped: {listed(skipped, most=len(skipped))}.")
    gaps = [j for j in usable if np.isfinite(raw.numbers[:, j]).mean() < _LEAST_FILLED]
    if gaps:
        usable = [j for j in usable if j not in gaps]
        names = [raw.names[j] for j in gaps]
        notes.append(
            f"To mend: over half of the values missing or infinite, left out:"
            f" {listed(names, most=len(names))}."
        )
    kept, row_notes = _kept_rows(raw, usable)
    notes += row_notes
    good, bad_notes = _varying(raw, usable, kept)
    notes += bad_notes
    if not good and rows < FEWEST_ROWS:
        raise InputError(
            f"{label}: {counted(rows, 'row')}, too few; at least {FEWEST_ROWS} rows are needed"
        )
    if not good:
        raise InputError(f"{label}: no numeric column that varies; a response is needed")
    if len(kept) < FEWEST_ROWS:
        left = counted(len(kept), "usable row")
        notes.append(f"To mend: {left}; at least {FEWEST_ROWS} are needed.")
    names = [raw.names[j] for j in good]
    response = next((name for name in names if name.lower() in _RESPONSES), names[0])
    return _Findings(
        time=time,
        response=response,
        columns=tuple(name for name in names if name != response),
        all_others=len(good) == len(usable) and not mixed and not gaps,
        drop_rows=len(kept) < rows,
        notes=tuple(notes),
    )


def _header_notes(header: tuple[str, ...]) -> tuple[list[str], list[int]]:
    """Return what is to be mended in the header, and the positions of the usable names."""
    notes: list[str] = []
    places: list[int] = []
    seen: set[str] = set()
    for place, name in enumerate(header):
        if name and name not in seen and not has_control(name):
            places.append(place)
            seen.add(name)
            continue
        fault = f"a name used before, {shown(name)}" if name in seen else f"the name {shown(name)}"
        notes.append(f"To mend in the file: column {place + 1} has {fault}.")
    return notes, places


def _find_time(
    path: Path, header: tuple[str, ...], raw: RawColumns, empty: NDArray[np.bool_]
) -> tuple[str | None, list[str]]:
    """Return the first column that orders the rows, and notes on those that nearly do."""
    notes: list[str] = []
    for place, name in enumerate(raw.names):
        fault = raw.faults[place]
        if fault is None:
            if not empty[place] and _numbers_order(raw.numbers[:, place], name, place):
                return name, notes
            continue
        if not empty[place] or not looks_like_date(fault.text):
            continue
        labels = read_columns(path, [], labels=(header.index(name),)).labels[name]
        out_of_order = disorder(labels)
        if out_of_order is None:
            return name, notes
        what = "is no date" if out_of_order.unreadable else "does not come after the one before"
        notes.append(
            f"To mend: {shown(name)} looks like the time, but {raw.where(out_of_order.position)},"
            f" {shown(labels[out_of_order.position])}, {what}."
        )
    return None, notes


def _numbers_order(column: FloatArray, name: str, place: int) -> bool:
    """Return whether a numeric column increases and is named like a time or counts the rows."""
    if not np.isfinite(column).all() or not (np.diff(column) > 0).all():
        return False
    counts = place == 0 and bool((column == np.round(column)).all())
    return counts or _TIME_NAME.fullmatch(name) is not None


def _mixed_note(raw: RawColumns, place: int) -> str:
    fault = raw.faults[place]
    assert fault is not None
    return (
        f"To mend: {shown(raw.names[place])} is left out; {raw.where(fault.row)},"
        f" {shown(fault.text)}, is not a number."
    )


def _kept_rows(raw: RawColumns, usable: list[int]) -> tuple[NDArray[np.intp], list[str]]:
    """Return the rows without missing or infinite values, and a note if there are others."""
    fine = np.isfinite(raw.numbers[:, usable])
    kept = np.flatnonzero(fine.all(axis=1))
    if len(kept) == len(fine):
        return kept, []
    filled = fine.sum(axis=0)
    order = np.argsort(filled, kind="stable")[:3]
    worst = [raw.names[usable[j]] for j in order if filled[j] < len(fine)]
    return kept, [
        f"{counted(int((~fine).sum()), 'missing or infinite value')}, most in {listed(worst)};"
        f" this draft drops their rows: {len(kept)} of {len(fine)} are left."
    ]


def _varying(
    raw: RawColumns, usable: list[int], kept: NDArray[np.intp]
) -> tuple[list[int], list[str]]:
    """Return the columns that vary and differ from earlier ones, and notes on the others."""
    # With too few rows left, whole columns are judged by all of them.
    rows = kept if len(kept) >= FEWEST_ROWS else np.arange(len(raw.numbers))
    values = raw.numbers[rows][:, usable]
    notes = []
    constant = {usable[j] for j in constant_columns(values)}
    if constant:
        names = [raw.names[j] for j in usable if j in constant]
        notes.append(f"To mend: constant, left out: {listed(names, most=len(names))}.")
    copies = {usable[later]: usable[first] for first, later in identical_columns(values)}
    for later, first in copies.items():
        if later not in constant:
            notes.append(
                f"To mend: {shown(raw.names[later])} is left out; identical to"
                f" {shown(raw.names[first])}."
            )
    return [j for j in usable if j not in constant and j not in copies], notes


def _relative(path: Path, folder: str | Path | None) -> str:
    """Return the path of the table as the design file in `folder` has to give it."""
    start = path.parent if folder is None else Path(folder)
    try:
        text = Path(os.path.relpath(path, start)).as_posix()
    except ValueError:
        # Another drive cannot be reached by a relative path.
        text = path.resolve().as_posix()
    if not text.isprintable():
        raise InputError(
            f"{shown(text)}: a design file cannot hold this name; rename the data file or folder"
        )
    return text


def _stem(path: Path) -> str:
    name = path.name
    for ending in (".gz", ".csv", ".tsv", ".parquet"):
        name = name.removesuffix(ending)
    return name or path.name


def _quoted(text: str) -> str:
    """Return `text` as a TOML basic string."""
    # JSON escapes quotation marks, backslashes and control characters as TOML does, but 0x7f.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
