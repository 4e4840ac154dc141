"""A design file read and checked: TOML to the records of `design.spec`."""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from scantling.design.keys import LANGUAGE, REQUIRED, TITLE, Key, Language
from scantling.design.message import file_label, listed, nearest, printable, shown
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


def read_design(path: str | Path, *, response: str | None = None) -> Design:
    """Return the design that a TOML file states, every key checked.

    Paths in the file are resolved against its folder; keys left out take the
    defaults of `design.spec`, and the title defaults to the file's stem. The
    table it names is not opened.

    Parameters
    ----------
    path : str or Path
        The design file: TOML in UTF-8, of at most 8 MiB.
    response : str, optional
        Which response is meant; needed where the file lists several.

    Raises
    ------
    InputError
        If the file cannot be read as TOML, or a table, key or value is not
        accepted; one line with the file, the key, the value, what is accepted
        and the nearest known key. If it lists several responses and none is
        picked, or `response` is none of them.
    NotAvailableError
        If a key asks for a part of the language this version does not carry out.
    """
    return pick_response(read_designs(path), response)


def pick_response(designs: Sequence[Design], response: str | None) -> Design:
    """Return the design of one response, from those of one file; None: of the only one.

    Raises
    ------
    InputError
        If there are several and none is picked, or `response` is none of them.
    """
    names = [design.data.response for design in designs]
    label = file_label(designs[0].path)
    if response is None:
        if len(names) > 1:
            raise InputError(
                f"{label}: [data] response lists {len(names)}, {listed(names)}; one of them has"
                " to be picked here"
            )
        return designs[0]
    if response not in names:
        word = "there are" if len(names) > 1 else "there is only"
        raise InputError(
            f"{label}: {shown(response)} is no response of this design; {word}"
            f" {listed(names)}{nearest(response, names)}"
        )
    return designs[names.index(response)]


def read_designs(path: str | Path) -> tuple[Design, ...]:
    """Return one design for each response that a TOML file lists, in its order.

    They differ in `data.response`, `data.other_responses` and the title, which
    names the response where there are several. Parameters and errors as in
    `read_design`.
    """
    path = Path(path)
    content = read_bytes(path)
    label = file_label(path)
    tree = parse_toml(content, label)
    if "stated" in tree:
        raise InputError(
            f"{label}: [stated]: a design without data is for `scantling budget`; here a [data]"
            " table is needed"
        )
    check_tables(tree, label)
    values = {table: check_keys(tree, table, label) for table in LANGUAGE}
    title = printable(path.stem)
    if "title" in tree:
        title = check_value(tree["title"], TITLE, "title", label)
    whole = Design(
        title=title,
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
        data=_data_spec(values["data"], path, label),
        expand=ExpandSpec(**values["expand"]),
        kind=values["purpose"].get("kind", "regression"),
        target=_target_spec(values["target"], label),
        penalty=PenaltySpec(**values["penalty"]),
        simulation=SimulationSpec(**values["simulation"]),
    )
    return _one_each(whole)


def _one_each(whole: Design) -> tuple[Design, ...]:
    """Return the design of each response, from one that names them all."""
    data = whole.data
    names = (data.response, *data.other_responses)
    if len(names) == 1:
        return (whole,)
    return tuple(
        replace(
            whole,
            title=f"{whole.title}: {name}",
            data=replace(data, response=name, other_responses=tuple(n for n in names if n != name)),
        )
        for name in names
    )


def read_bytes(path: Path) -> bytes:
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


def parse_toml(content: bytes, label: str) -> dict[str, Any]:
    """Return the tables of a design file."""
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


def check_tables(
    tree: dict[str, Any], label: str, language: Language = LANGUAGE,
    required: Mapping[str, tuple[str, ...]] = REQUIRED,
) -> None:  # fmt: skip
    """Refuse unknown tables, tables of the wrong type and missing keys."""
    known = ["title", *language]
    for name, value in tree.items():
        if name in known:
            continue
        if not isinstance(value, dict):
            homes = {key: table for table, keys in language.items() for key in keys}
            found = f"; {name} belongs in [{homes[name]}]" if name in homes else ""
            raise InputError(
                f"{label}: {printable(name)} = {shown(value)}: unknown key outside the tables;"
                f" known: title, and the tables {', '.join(language)}"
                + (found or nearest(name, [*known, *homes]))
            )
        raise InputError(
            f"{label}: [{printable(name)}]: unknown table; known: {', '.join(language)}"
            + nearest(name, known)
        )
    for name in language:
        if name in tree and not isinstance(tree[name], dict):
            raise InputError(
                f"{label}: {name} = {shown(tree[name])}: a table [{name}] is needed, once"
            )
    for name, keys in required.items():
        for key in keys:
            if key not in tree.get(name, {}):
                raise InputError(
                    f"{label}: [{name}] {key} is missing; {language[name][key].accepted} is needed"
                    + _misspelt(tree.get(name, {}), language[name], key)
                )


def _misspelt(table: dict[str, Any], known: Mapping[str, Key], missing: str) -> str:
    """Return a hint when an unknown key of the table may be the missing one."""
    unknown = [key for key in table if key not in known]
    return nearest(missing, unknown).replace("nearest", "nearest found") if unknown else ""


def check_keys(
    tree: dict[str, Any], table: str, label: str, language: Language = LANGUAGE
) -> dict[str, Any]:
    """Return the values of one table, each checked and converted."""
    values = {}
    for key, value in tree.get(table, {}).items():
        known = language[table]
        if key not in known:
            elsewhere = [name for name, keys in language.items() if key in keys]
            hint = f"; {key} belongs in [{elsewhere[0]}]" if elsewhere else nearest(key, known)
            raise InputError(
                f"{label}: [{table}] {printable(key)} = {shown(value)}: unknown key;"
                f" known: {', '.join(known)}{hint}"
            )
        values[key] = check_value(value, known[key], f"[{table}] {key}", label)
    return values


def check_value(value: Any, key: Key, name: str, label: str) -> Any:
    """Return one value, converted; refuse what is not accepted or not available."""
    if not key.fits(value):
        near = key.available or key.choices
        hint = nearest(value, near) if isinstance(value, str) and key.choices else ""
        raise InputError(
            f"{label}: {name} = {shown(value)}: not accepted; {key.accepted} is needed{hint}"
        )
    if key.available and value not in key.available:
        words = [word if isinstance(word, str) else shown(word) for word in key.available]
        raise NotAvailableError(
            f"{label}: {name} = {shown(value)} {_NOT_AVAILABLE} {', '.join(words)}"
        )
    return key.convert(value)


def _target_spec(values: dict[str, Any], label: str) -> TargetSpec:
    """Return [target]; named columns are as many as are relevant, unless more are said to be."""
    named = values.get("support")
    if isinstance(named, tuple):
        values = {"relevant": len(named), **values}
        if values["relevant"] < len(named):
            raise InputError(
                f"{label}: [target] support names {len(named)} columns; relevant ="
                f" {values['relevant']} has to be at least that, or be left out"
            )
    return TargetSpec(**values)


def _data_spec(values: dict[str, Any], path: Path, label: str) -> DataSpec:
    """Return [data], its parts checked against one another."""
    given = values["response"]
    responses = given if isinstance(given, list) else [given]
    time = values.get("time")
    if time in responses:
        several = "also a response" if len(responses) > 1 else "also the response"
        raise InputError(f"{label}: [data] time = {shown(time)}: {several}; two columns are needed")
    # One of several responses may be a column for the others: named outright, by no pattern.
    single = responses[0] if len(responses) == 1 else None
    for role, name in (("response", single), ("time", time)):
        if name is not None and name in values.get("columns", ()):
            raise InputError(
                f"{label}: [data] columns names {shown(name)}, the {role}; name candidate columns"
                " only (lags of the response are [expand] own_lags)"
            )
    changed = {
        "file": path.parent / values["file"],
        "response": responses[0],
        "other_responses": tuple(responses[1:]),
    }
    return DataSpec(**{**values, **changed})
