"""The shipped JSON schema: it is one, every kind of report fits it, and misfits are refused."""

from __future__ import annotations

import copy
import json
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

import scantling
from scantling.planning.verdict import ANSWERS
from scantling.report.document import noted, number
from scantling.report.schema import report_schema

Parse = Callable[[str], dict[str, Any]]
KEYS = (
    "schema", "title", "design", "diagnosis", "law", "budget", "stress", "remedies", "verdict",
    "cautions", "receipt",
)  # fmt: skip


@pytest.fixture(scope="module")
def document(small: Path, valid_document: Parse) -> dict[str, Any]:
    return valid_document(scantling.vet(scantling.read_design(small)).to_json())


@pytest.fixture(scope="module")
def validator() -> Draft202012Validator:
    return Draft202012Validator(report_schema())


def test_schema_is_one() -> None:
    schema = report_schema()
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    Draft202012Validator.check_schema(schema)
    assert report_schema() is not schema


def test_every_reference_resolves_and_every_definition_is_used() -> None:
    schema = report_schema()
    named = set(re.findall(r'"#/\$defs/(\w+)"', json.dumps(schema)))
    assert named == set(schema["$defs"])


def test_top_level_is_closed_and_complete() -> None:
    schema = report_schema()
    assert tuple(schema["properties"]) == KEYS and tuple(schema["required"]) == KEYS
    assert schema["additionalProperties"] is False
    answers = schema["$defs"]["verdict"]["properties"]["answer"]["enum"]
    assert tuple(answers) == ANSWERS


def test_every_null_needs_a_note() -> None:
    """Walk the schema: a property that takes null has a rule that asks for its note."""

    def takes_null(rule: dict[str, Any]) -> bool:
        kinds = rule.get("type", [])
        kinds = [kinds] if isinstance(kinds, str) else kinds
        return (
            "null" in kinds
            or None in rule.get("enum", [])
            or any(takes_null(inner) for inner in rule.get("anyOf", []))
        )

    found = 0

    def walk(node: Any) -> None:
        nonlocal found
        if isinstance(node, list):
            for inner in node:
                walk(inner)
        elif isinstance(node, dict):
            asked = {
                key: rule["then"]["required"]
                for rule in node.get("allOf", [])
                for key in rule["if"]["required"]
            }
            for key, rule in node.get("properties", {}).items():
                if "required" in node and "if" not in node and takes_null(rule):
                    found += 1
                    assert asked.get(key) == [f"{key}_note"], key
            for key, inner in node.items():
                if key != "allOf":
                    walk(inner)

    walk(report_schema())
    assert found >= 25


@pytest.mark.parametrize("key", KEYS)
def test_no_key_can_be_left_out(
    key: str, document: dict[str, Any], validator: Draft202012Validator
) -> None:
    assert validator.is_valid(document)
    assert not validator.is_valid({k: v for k, v in document.items() if k != key})
    inner = document[key]
    # In each nested record every key the contract names is required as well.
    for name in validator.schema["$defs"].get(key, {}).get("required", ()):
        less = {k: v for k, v in inner.items() if k != name}
        assert not validator.is_valid({**document, key: less}), (key, name)


MISFITS: list[tuple[str, Callable[[dict[str, Any]], Any]]] = [
    ("a key more", lambda d: d.update(extra=1)),
    ("other schema", lambda d: d.update(schema="scantling-report/2")),
    ("text for a number", lambda d: d["design"].update(rows="60")),
    ("fraction of a column", lambda d: d["budget"]["noise"].update(columns=1.5)),
    ("null, no note", lambda d: d["budget"]["noise"].update(low=None)),
    ("null, empty note", lambda d: d["budget"]["signal"].update(high=None, high_note="")),
    ("null where none may be", lambda d: d["design"].update(rows=None, rows_note="why")),
    ("risk above 1", lambda d: d["budget"]["risk_at_design"].update(value=1.2)),
    ("p-value below 0", lambda d: d["diagnosis"]["variance"][0].update(p_value=-0.1)),
    ("valid, yet lacking", lambda d: d["diagnosis"]["variance"][0].update(lacks="4th moment")),
    ("not valid, lacks unsaid", lambda d: d["diagnosis"]["variance"][0].update(valid=False)),
    (
        "unknown lack",
        lambda d: d["diagnosis"]["variance"][0].update(valid=False, lacks="patience"),
    ),
    ("remedy without answer", lambda d: d["remedies"][0].pop("answer")),
    ("remedy's answer unknown", lambda d: d["remedies"][0].update(answer="no budget")),
    ("nothing dropped", lambda d: d["remedies"][0].update(dropped=[])),
    ("half a pair", lambda d: d["remedies"][0].update(parts=["no powers"])),
    ("unknown answer", lambda d: d["verdict"].update(answer="fine")),
    ("answer in capitals", lambda d: d["verdict"].update(answer="OVER BUDGET")),
    ("unknown cover", lambda d: d["verdict"].update(cover="theory")),
    ("no cover, yet a budget", lambda d: d["verdict"].update(answer="borderline", cover="none")),
    ("no budget, yet a cover", lambda d: d["verdict"].update(answer="no budget")),
    ("no reason", lambda d: d["verdict"].update(reasons=[])),
    ("unknown law of a run", lambda d: d["stress"][0].update(law="normal")),
    ("unknown moment", lambda d: d["diagnosis"]["errors"]["moments"].update({"2": "yes"})),
    ("moment left out", lambda d: d["diagnosis"]["scores"]["moments"].pop("3")),
    ("unknown binding", lambda d: d["budget"].update(binding="geometry")),
    ("unknown mode", lambda d: d["budget"]["noise"].update(mode="guess")),
    ("not a digest", lambda d: d["receipt"]["inputs"].update({"small.csv": "abc"})),
    ("inputs missing", lambda d: d["receipt"].update(inputs={})),
    ("no caution", lambda d: d.update(cautions=[])),
]


@pytest.mark.parametrize("change", [m[1] for m in MISFITS], ids=[m[0] for m in MISFITS])
def test_misfits_are_refused(
    change: Callable[[dict[str, Any]], Any],
    document: dict[str, Any],
    validator: Draft202012Validator,
) -> None:
    changed = copy.deepcopy(document)
    change(changed)
    assert changed != document
    assert not validator.is_valid(changed)


@given(st.one_of(st.none(), st.integers(-(10**12), 10**12), st.floats()))
def test_numbers_are_numbers_or_null_with_a_note(value: float | int | None) -> None:
    shown = noted("x", value, "why")
    json.dumps(shown, allow_nan=False)
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        assert shown == {"x": None, "x_note": "why"}
    else:
        assert set(shown) == {"x"}
        assert math.isclose(shown["x"], value, rel_tol=1e-9, abs_tol=0)
        assert number(shown["x"]) == shown["x"]


N = 120


def _columns(kind: str) -> tuple[np.ndarray, str]:
    """Response first, and what the design file adds."""
    rng = np.random.default_rng(12)
    X = rng.standard_normal((N, 4))
    y = X[:, 0] + rng.standard_t(4, N)
    if kind == "one column":
        return np.column_stack([y, X[:, 0]]), ""
    if kind == "more columns than rows":
        return np.column_stack([y, rng.standard_normal((N, 150))]), ""
    if kind == "no variance":
        return np.column_stack([rng.standard_cauchy(10 * N), rng.standard_t(1.1, (10 * N, 3))]), ""
    if kind == "dummies":
        dummies = np.column_stack([X > 0, np.arange(N)[:, None] % 40 == 3])
        return np.column_stack([y, dummies.astype(float)]), "[expand]\npowers = 2\n"
    if kind == "counts":
        return np.column_stack([rng.poisson(0.4, N), rng.poisson(2.0, (N, 3))]), ""
    if kind == "nothing to find":
        return np.column_stack([y, X]), "[target]\nsmallest_effect = 0.001\nrelevant = 3\n"
    if kind == "collinear":
        rule = '[penalty]\nrule = "self-normalised"\n'
        return np.column_stack([y, X, X.sum(axis=1)]), rule
    if kind == "units far apart":
        return np.column_stack([1e-12 * y, 1e9 * X + 1e12]), ""
    if kind == "thirty rows":
        return np.column_stack([y, X])[:30], ""
    raise AssertionError(kind)


KINDS = (
    "one column", "more columns than rows", "no variance", "dummies", "counts",
    "nothing to find", "collinear", "units far apart", "thirty rows",
)  # fmt: skip


@pytest.mark.parametrize("kind", KINDS)
def test_odd_designs_give_valid_reports(kind: str, tmp_path: Path, valid_document: Parse) -> None:
    values, more = _columns(kind)
    names = ["y", *(f"x{j}" for j in range(1, values.shape[1]))]
    lines = [",".join(names), *(",".join(map(repr, map(float, row))) for row in values)]
    (tmp_path / "odd.csv").write_text("\n".join(lines) + "\n")
    few = 1 if values.shape[1] == 2 else 2
    target = "" if "[target]" in more else f"[target]\nrelevant = {few}\nsmallest_effect = 0.4\n"
    (tmp_path / "odd.toml").write_text(
        f'[data]\nfile = "odd.csv"\nresponse = "y"\n{more}{target}[simulation]\nreplicates = 50\n'
    )
    report = scantling.vet(scantling.read_design(tmp_path / "odd.toml"))
    text = scantling.render(report)
    document = valid_document(report.to_json())
    assert [line for line in text.split("\n") if len(line) > 80] == []
    assert not re.search(r"\bnan\b|\binf\b|\bNone\b(?! computed)|np\.", text), text
    head = "\n".join(text.split("\n")[:12])
    for label in ("Verdict", "Because", "Columns", "Limits", "Rows", "Remedies"):
        assert f"\n{label} " in head
    if kind == "no variance":
        assert document["verdict"] == {
            "answer": "no budget",
            "cover": "none",
            "reasons": document["verdict"]["reasons"],
        }
        assert document["diagnosis"]["errors"]["moments"]["2"] == "missing"
    if kind in ("collinear", "more columns than rows"):
        assert document["diagnosis"]["structure"]["condition"] is None
    if kind == "more columns than rows":
        assert document["design"]["columns"] == 150 > document["design"]["rows"]
    for finding in document["diagnosis"]["variance"]:
        assert finding["valid"] is ("lacks" not in finding)
    for remedy in document["remedies"]:
        named = remedy.get("dropped", [])
        assert set(named) <= set(names)
        assert bool(named) is ("drop the" in remedy["remedy"])
        if "parts" in remedy:
            assert remedy["remedy"] == " and ".join(remedy["parts"])
        else:
            assert remedy["columns"] + len(named) in (len(names) - 1, remedy["columns"])
    if kind == "thirty rows":
        assert set(document["diagnosis"]["errors"]["moments"].values()) == {"unclear"}
    if kind == "nothing to find":
        assert document["budget"]["signal"]["columns"] == 0
        assert document["budget"]["rows_needed"] is None
        assert "are not enough for" in document["budget"]["rows_needed_note"]
