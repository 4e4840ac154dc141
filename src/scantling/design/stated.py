"""A stated design: no data, only rows, columns and laws; from a design file or a saved report."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from statistics import median
from typing import Any

from scantling.design.keys import STATED_LANGUAGE, TITLE
from scantling.design.message import file_label, printable, shown
from scantling.design.parse import check_keys, check_tables, check_value, parse_toml, read_bytes
from scantling.errors import InputError

LEAST_KEPT = 0.1
"""Median first autocorrelation below which columns are taken as independent from row to row."""
LIGHT_FROM = 50.0
"""Column tail indices above it are read as normal columns."""
LEAST_INDEX = 2.05
"""A column's tail index below it is read as this: a stated column needs a variance."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Statement:
    """What a stated design, a saved report or flags say; None: not said."""

    title: str
    """Shown first."""
    stem: str
    """For file names."""
    inputs: tuple[tuple[str, str], ...] = ()
    """Base name and sha-256 of the file it was read from."""
    values: Mapping[str, Any]
    """rows, columns, law, column_law, correlation, the target's keys, rule, loss, replicates,
    seed; those said."""
    facts: tuple[str, ...] = ()
    """What the reader has to know about where it comes from."""
    places: Mapping[str, str] = field(default_factory=dict)
    """Where a value stands, for refusals: 'quay.toml: [stated] error', '--law'; of the others
    their keys are named."""

    def changed(self, said: Mapping[str, Any], places: Mapping[str, str]) -> Statement:
        """The same with values said instead, and where those stand."""
        kept = {key: place for key, place in self.places.items() if key not in said}
        return replace(self, values={**self.values, **said}, places={**kept, **places})

    def placed(self, message: str) -> str:
        """A refusal that begins with a key, with where its value stands instead."""
        key, colon, rest = message.partition(":")
        return f"{self.places.get(key, key)}{colon}{rest}"


def read_statement(path: str | Path) -> Statement:
    """Read a stated design (.toml) or the laws, rows and columns of a saved report (.json).

    Raises
    ------
    InputError
        If the file is neither, or a key or value is not accepted.
    """
    path = Path(path)
    content = read_bytes(path)
    label = file_label(path)
    digest = (((path.name, hashlib.sha256(content).hexdigest())),)
    if path.suffix == ".json":
        return _from_report(content, path, label, digest)
    tree = parse_toml(content, label)
    if "data" in tree:
        raise InputError(
            f"{label}: [data]: a design with data is for `scantling vet`; a stated one has"
            " [stated] rows, columns and error"
        )
    check_tables(tree, label, STATED_LANGUAGE, {"stated": ("rows", "columns", "error")})
    tables = {name: check_keys(tree, name, label, STATED_LANGUAGE) for name in STATED_LANGUAGE}
    title = printable(path.stem)
    if "title" in tree:
        title = check_value(tree["title"], TITLE, "title", label)
    stated = tables["stated"]
    values: dict[str, Any] = {
        key: stated[key] for key in ("rows", "columns", "correlation") if key in stated
    }
    values["law"] = stated["error"]
    if "column" in stated:
        values["column_law"] = stated["column"]
    for name in ("target", "simulation"):
        values |= tables[name]
    values |= {k: v for k, v in tables["penalty"].items() if k in ("rule", "loss")}
    keys = {key: f"[{table}] {key}" for table, found in tables.items() for key in found}
    keys |= {"law": "[stated] error", "column_law": "[stated] column"}
    return Statement(
        title=title, stem=path.stem, inputs=digest, values=values,
        places={key: f"{label}: {keys[key]}" for key in values},
    )  # fmt: skip


def states_no_data(path: str | Path) -> bool:
    """Whether a file is a saved report or a stated design, not a design with data.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    path = Path(path)
    content = read_bytes(path)
    return path.suffix == ".json" or "stated" in parse_toml(content, file_label(path))


def written_law(given: Any) -> str:
    """A law as one line of text, from that or from a table with `family` and parameters."""
    if isinstance(given, str):
        return given
    rest = ",".join(f"{key}={value!r}" for key, value in given.items() if key != "family")
    return f"{given['family']}:{rest}" if rest else str(given["family"])


def _from_report(
    content: bytes, path: Path, label: str, digest: tuple[tuple[str, str], ...]
) -> Statement:
    try:
        tree = json.loads(content)
        schema = tree["schema"]
    except (ValueError, TypeError, KeyError, RecursionError) as fault:
        raise InputError(f"{label}: not a report of scantling (JSON with a schema)") from fault
    if schema not in ("scantling-report/1", "scantling-budget/1"):
        raise InputError(f"{label}: schema = {shown(schema)}: a scantling report is needed")
    try:
        design = tree["design"]
        values = {
            "rows": design["rows"], "columns": design["columns"], "rule": design["rule"],
            "loss": design["loss"], "replicates": design["replicates"], **design["target"],
            "seed": tree["receipt"]["seed"],
        }  # fmt: skip
        facts, values["law"] = _law_of(tree["law"])
        if "column_law" in design:  # of a budget on paper
            values["column_law"] = _law_of(design["column_law"])[1]
            values["correlation"] = design["correlation"]
        if "diagnosis" in tree:
            more, values["column_law"] = _columns_of(tree["diagnosis"])
            facts += more
    except KeyError as fault:
        raise InputError(f"{label}: a whole report is needed; {fault} is missing in it") from fault
    except (TypeError, AttributeError, ValueError) as fault:
        raise InputError(
            f"{label}: a whole report is needed; a part of it is not what a report has there"
        ) from fault
    title = str(tree.get("title", path.stem))
    if "diagnosis" in tree:  # that of a budget is on paper as it is
        title += ", on paper"
    where = {key: f"design.{key}" for key in ("rows", "columns", "rule", "loss", "replicates")}
    where |= {key: f"design.target.{key}" for key in design["target"]}
    where |= {"seed": "receipt.seed", "law": "law", "correlation": "design.correlation"}
    where["column_law"] = "design.column_law" if "column_law" in design else "diagnosis.columns"
    return Statement(
        title=printable(title), stem=path.stem, inputs=digest, values=values, facts=tuple(facts),
        places={key: f"{label}: {where[key]}" for key in values if key in where},
    )  # fmt: skip


def _law_of(law: Mapping[str, Any]) -> tuple[list[str], str]:
    """The report's error law as it is written; what cannot be is replaced by a Student t.

    Volatility and autoregression are kept with either.
    """
    family, parameters = law["family"], dict(law["parameters"])
    facts: list[str] = []
    own = {k: v for k, v in parameters.items() if k in ("df", "skew", "shape", "index")}
    if family == "spliced":
        index = 1 / parameters["gamma"] if parameters["gamma"] > 0 else math.inf
        family, own = ("student-t", {"df": index}) if index < LIGHT_FROM else ("normal", {})
        facts.append(
            "The report's spliced law cannot be stated on one line; the law here has its tail"
            " index."
        )
    # A budget on paper has its recurrence, and the lags, among the parameters.
    path = law.get("volatility") or parameters
    if "alpha" in path:
        own["alpha"] = path["alpha"]
        own |= {key: path[key] for key in ("beta", "leverage") if path.get(key)}
    lags = [(key, value) for key, value in parameters.items() if key.startswith("lag")]
    if law.get("autoregression"):
        coefficients = law["autoregression"]["coefficients"]
        lags = [(f"lag{lag}", value) for lag, value in enumerate(coefficients, start=1)]
    own |= dict(lags)
    rest = ",".join(f"{key}={value}" for key, value in own.items())
    return facts, f"{family}:{rest}" if rest else family


def _columns_of(diagnosis: Mapping[str, Any]) -> tuple[list[str], str]:
    """Independent columns with the median column's tail index and first autocorrelation.

    Heavy where thin tails are excluded or the interval of the index has an upper end.
    """
    tail = diagnosis["columns"]["tail"]
    index = tail.get("index")
    bounded = tail.get("finite", True) or tail.get("high") is not None
    heavy = index is not None and index < LIGHT_FROM and bounded
    law = f"student-t:df={max(float(index), LEAST_INDEX):g}" if heavy and index else "normal"
    levels = diagnosis.get("column_autocorrelations")
    kept = float(median(levels)) if levels else 0.0
    if abs(kept) >= LEAST_KEPT:
        law += f"{',' if ':' in law else ':'}lag1={kept:.3f}"
    return [
        f"Columns are taken as independent, each {law}: the median tail index and, with rows in"
        " order, the median first autocorrelation of the report's columns. Their correlation and"
        " other differences are left out."
    ], law
