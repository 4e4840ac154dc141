"""The names at the head of a data file: checked, and those that a design takes as columns."""

from __future__ import annotations

from collections.abc import Sequence
from fnmatch import fnmatchcase

from scantling.design.keys import has_control
from scantling.design.message import nearest, shown
from scantling.design.spec import DataSpec
from scantling.errors import InputError


def check_names(names: Sequence[str], label: str) -> None:
    """Refuse a header with an empty name, a name given twice, or one not on one line.

    Raises
    ------
    InputError
        With the column's position, counted from 1.
    """
    seen: dict[str, int] = {}
    for place, name in enumerate(names, start=1):
        if not name:
            raise InputError(
                f"{label}: column {place} has an empty name; every column needs a name"
            )
        if has_control(name):
            raise InputError(
                f"{label}: column {place} is named {shown(name)}; a name without line breaks and"
                " control characters is needed"
            )
        if name in seen:
            raise InputError(
                f"{label}: the name {shown(name)} is given twice (columns {seen[name]} and"
                f" {place}); names must differ"
            )
        seen[name] = place


def check_roles(names: Sequence[str], data: DataSpec, label: str) -> None:
    """Refuse a response or a time that is not a column of the file.

    Raises
    ------
    InputError
        With the key, the name and the nearest name of the file.
    """
    for key, name in (("response", data.response), ("time", data.time)):
        if name is not None and name not in names:
            raise InputError(
                f"{label}: no column {shown(name)}, named by [data] {key}{nearest(name, names)}"
            )


def choose_columns(
    names: Sequence[str], data: DataSpec, label: str
) -> tuple[list[int], frozenset[str]]:
    """Return the positions of the raw columns, in file order, and those named outright.

    An entry of [data] columns that is a name of the file stands for that
    column; another with *, ? or [ is a pattern (fnmatch, case-sensitive), which
    never matches the time or a response. One of several responses that is named
    outright is a column for the others, and left out where it is itself vetted.

    Raises
    ------
    InputError
        If an entry matches no column, with the nearest name.
    """
    roles = {data.response, data.time}
    candidates = [name for name in names if name not in roles]
    matching = [name for name in candidates if name not in data.other_responses]
    outright, matched = set(), set()
    for entry in data.columns:
        if entry == data.response and data.other_responses:
            continue
        if entry in roles:
            raise InputError(
                f"{label}: [data] columns names {shown(entry)}, the response or the time; name"
                " candidate columns only"
            )
        if entry in candidates:
            outright.add(entry)
        elif any(mark in entry for mark in "*?["):
            found = {name for name in matching if fnmatchcase(name, entry)}
            # The default stands for "all others", of which there may be none.
            if not found and entry != "*":
                raise InputError(
                    f"{label}: the pattern {shown(entry)} in [data] columns matches no column"
                    + nearest(entry, candidates)
                )
            matched |= found
        else:
            raise InputError(
                f"{label}: no column {shown(entry)}, named by [data] columns"
                + nearest(entry, candidates)
            )
    wanted = outright | matched
    return [place for place, name in enumerate(names) if name in wanted], frozenset(outright)
