"""A design file read and checked: TOML to the records of `design.spec`."""

from __future__ import annotations

import hashlib
import tomllib
from pathlib import Path
from typing import Any

from scantling.design.keys import LANGUAGE, REQUIRED, TITLE, UNAVAILABLE_TABLES, Key
from scantling.design.message import file_label, nearest, printable, shown
from scantling.design.spec import (
    DataSpec,
    Design,
    ExpandSpec,
    PenaltySpec,
    SimulationSpec,
    TargetSpec,
)
from scantling.errors import InputError, NotAvailableError

_LARGEST_FILE = 8 * 1024 * 1024
_NOT_AVAILABLE = "is part of the design language but not available in this version; available:"


def read_design(path: str | Path) -> Design:
    """Return the design that a TOML file states, every key checked.

    Paths in the file are resolved against its folder; keys left out take the
    defaults of `design.spec`, and the title defaults to the file's stem. The
    table it names is not opened.

    Parameters
    ----------
    path : str or Path
        The design file: TOML in UTF-8, of at most 8 MiB.

    Raises
    ------
    InputError
        If the file cannot be read as TOML, or a table, key or value is not
        accepted; one line with the file, the key, the value, what is accepted
        and the nearest known key.
    NotAvailableError
        If a key asks for a part of the language this version does not carry out.
    """
    path = Path(path)
    content = _read_bytes(path)
    label = file_label(path)
    tree = _parse_toml(content, label)
    _check_tables(tree, label)
    values = {table: _check_keys(tree, table, label) for table in LANGUAGE}
    title = printable(path.stem)
    if "title" in tree:
        title = _check_value(tree["title"], TITLE, "title", label)
    return Design(
        title=title,
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
        data=_data_spec(values["data"], path, label),
        expand=ExpandSpec(**values["expand"]),
        kind=values["purpose"].get("kind", "regression"),
        target=TargetSpec(**values["target"]),
        penalty=PenaltySpec(**values["penalty"]),
        simulation=SimulationSpec(**values["simulation"]),
    )


def _read_bytes(path: Path) -> bytes:
    """Return the bytes of a regular file that is not too large to be a design."""
    name = printable(str(path))
    try:
        if path.is_dir():
            raise InputError(f"{name}: this is a folder; a design file (.toml) is needed")
        if not path.exists():
            raise InputError(f"{name}: no such file; a design file (.toml) is needed")
        if not path.is_file():
            raise InputError(f"{name}: not a regular file; a design file (.toml) is needed")
        if path.stat().st_size > _LARGEST_FILE:
            raise InputError(
                f"{name}: {path.stat().st_size} bytes; a design file of at most 8 MiB is needed"
            )
        return path.read_bytes()
    except InputError:
        raise
    except OSError as fault:
        raise InputError(f"{name}: cannot be read ({fault.strerror or fault})") from fault


def _parse_toml(content: bytes, label: str) -> dict[str, Any]:
    try:
        # The byte order mark some editors write is not TOML, and harmless.
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        line = content[: fault.start].count(b"\n") + 1
        raise InputError(
            f"{label}: line {line}: not UTF-8 text (byte 0x{content[fault.start]:02x});"
            " a design file is TOML in UTF-8"
        ) from fault
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        raise InputError(f"{label}: not valid TOML: {printable(str(fault))}") from fault
    except (ValueError, RecursionError) as fault:
        # tomllib lets through what int() and the interpreter's stack refuse.
        raise InputError(
            f"{label}: not valid TOML: a number too long or values nested too deeply"
        ) from fault


def _check_tables(tree: dict[str, Any], label: str) -> None:
    """Refuse unknown tables, tables of the wrong type and those not available."""
    known = ["title", *LANGUAGE, *UNAVAILABLE_TABLES]
    for name, value in tree.items():
        if name in known:
            continue
        if not isinstance(value, dict):
            homes = {key: table for table, keys in LANGUAGE.items() for key in keys}
            found = f"; {name} belongs in [{homes[name]}]" if name in homes else ""
            raise InputError(
                f"{label}: {printable(name)} = {shown(value)}: unknown key outside the tables;"
                f" known: title, and the tables {', '.join(LANGUAGE)}"
                + (found or nearest(name, [*known, *homes]))
            )
        raise InputError(
            f"{label}: [{printable(name)}]: unknown table; known: {', '.join(LANGUAGE)}"
            + nearest(name, known)
        )
    for name in UNAVAILABLE_TABLES:
        if name in tree:
            raise NotAvailableError(f"{label}: [{name}] {_NOT_AVAILABLE} a [data] table")
    for name in LANGUAGE:
        if name in tree and not isinstance(tree[name], dict):
            raise InputError(
                f"{label}: {name} = {shown(tree[name])}: a table [{name}] is needed, once"
            )
    for name, keys in REQUIRED.items():
        for key in keys:
            if key not in tree.get(name, {}):
                raise InputError(
                    f"{label}: [{name}] {key} is missing; {LANGUAGE[name][key].accepted} is needed"
                    + _misspelt(tree.get(name, {}), name, key)
                )


def _misspelt(table: dict[str, Any], name: str, missing: str) -> str:
    """Return a hint when an unknown key of the table may be the missing one."""
    unknown = [key for key in table if key not in LANGUAGE[name]]
    return nearest(missing, unknown).replace("nearest", "nearest found") if unknown else ""


def _check_keys(tree: dict[str, Any], table: str, label: str) -> dict[str, Any]:
    """Return the values of one table, each checked and converted."""
    values = {}
    for key, value in tree.get(table, {}).items():
        known = LANGUAGE[table]
        if key not in known:
            elsewhere = [name for name, keys in LANGUAGE.items() if key in keys]
            hint = f"; {key} belongs in [{elsewhere[0]}]" if elsewhere else nearest(key, known)
            raise InputError(
                f"{label}: [{table}] {printable(key)} = {shown(value)}: unknown key;"
                f" known: {', '.join(known)}{hint}"
            )
        values[key] = _check_value(value, known[key], f"[{table}] {key}", label)
    return values


def _check_value(value: Any, key: Key, name: str, label: str) -> Any:
    if not key.fits(value):
        hint = nearest(value, key.choices) if isinstance(value, str) and key.choices else ""
        raise InputError(
            f"{label}: {name} = {shown(value)}: not accepted; {key.accepted} is needed{hint}"
        )
    if key.available and value not in key.available:
        words = [word if isinstance(word, str) else shown(word) for word in key.available]
        raise NotAvailableError(
            f"{label}: {name} = {shown(value)} {_NOT_AVAILABLE} {', '.join(words)}"
        )
    return key.convert(value)


def _data_spec(values: dict[str, Any], path: Path, label: str) -> DataSpec:
    """Return [data], its parts checked against one another."""
    response = values["response"]
    if isinstance(response, list):
        if len(response) > 1:
            raise NotAvailableError(
                f"{label}: [data] response = {shown(response)}: a list of several responses"
                f" {_NOT_AVAILABLE} one response"
            )
        response = response[0]
    if response == values.get("time"):
        raise InputError(
            f"{label}: [data] time = {shown(response)}: also the response; two columns are needed"
        )
    for role, name in (("response", response), ("time", values.get("time"))):
        if name is not None and name in values.get("columns", ()):
            raise InputError(
                f"{label}: [data] columns names {shown(name)}, the {role}; name candidate columns"
                " only (lags of the response are [expand] own_lags)"
            )
    return DataSpec(**{**values, "file": path.parent / values["file"], "response": response})
