"""Stated designs: what is read from a design file or a saved report, and what is refused."""

from __future__ import annotations

import hashlib
import json

import pytest

from scantling.design.stated import read_statement, written_law
from scantling.errors import InputError
from scantling.law.notation import parse_law

DESIGN = """\
title = "Quay wall"

[stated]
rows = 400
columns = 900
correlation = 0.25
error = {family = "student-t", df = 3.5}
column = "normal"

[target]
relevant = 4
risk = 0.1

[penalty]
rule = "self-normalised"
loss = "huber"

[simulation]
replicates = 120
seed = 9
"""
REPORT = {
    "schema": "scantling-report/1",
    "title": "Harbour dues",
    "design": {
        "rows": 300, "columns": 40, "rule": "plug-in", "loss": "squared", "replicates": 400,
        "target": {"relevant": 3, "smallest_effect": 0.3, "risk": 0.05},
    },
    "diagnosis": {"columns": {"tail": {"index": 4.2, "finite": True}}},
    "law": {"family": "student-t", "parameters": {"scale": 2.0, "df": 5.5}, "volatility": None},
    "receipt": {"seed": 7},
}  # fmt: skip


def written(folder, text, name="quay.toml"):
    path = folder / name
    path.write_text(text if isinstance(text, str) else json.dumps(text))
    return path


def changed(*keys, to=None, drop=False):
    """The report with one part replaced or left out."""
    tree = json.loads(json.dumps(REPORT))
    inner = tree
    for key in keys[:-1]:
        inner = inner[key]
    if drop:
        del inner[keys[-1]]
    else:
        inner[keys[-1]] = to
    return tree


def test_a_stated_design_is_read_whole(tmp_path):
    path = written(tmp_path, DESIGN)
    found = read_statement(path)
    assert (found.title, found.stem) == ("Quay wall", "quay")
    assert found.inputs == (("quay.toml", hashlib.sha256(path.read_bytes()).hexdigest()),)
    assert found.values == {
        "rows": 400, "columns": 900, "correlation": 0.25,
        "law": {"family": "student-t", "df": 3.5}, "column_law": "normal", "relevant": 4,
        "risk": 0.1, "rule": "self-normalised", "loss": "huber", "replicates": 120, "seed": 9,
    }  # fmt: skip
    assert found.facts == ()


def test_what_is_not_said_is_left_out(tmp_path):
    found = read_statement(
        written(tmp_path, '[stated]\nrows = 60\ncolumns = 9\nerror = "laplace"\n')
    )
    assert found.title == "quay"
    assert found.values == {"rows": 60, "columns": 9, "law": "laplace"}


@pytest.mark.parametrize(
    ("given", "line"),
    [
        ("normal", "normal"),
        ("student-t:df=3,alpha=0.1,beta=0.8", "student-t:df=3,alpha=0.1,beta=0.8"),
        ({"family": "student-t", "df": 3.5}, "student-t:df=3.5"),
        ({"family": "normal"}, "normal"),
        ({"df": 4, "family": "skewed-t", "skew": -0.3}, "skewed-t:df=4,skew=-0.3"),
    ],
)
def test_a_law_as_text_or_table_is_one_line(given, line):
    assert written_law(given) == line
    assert parse_law(written_law(given)) == parse_law(line)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("rows = 400", "rows = 29", "rows"),
        ("rows = 400\n", "", "rows"),
        ("columns = 900", "columns = 0", "columns"),
        ("columns = 900", "columns = 9.5", "columns"),
        ("correlation = 0.25", "correlation = 1.0", "correlation"),
        ("correlation = 0.25", "correlation = -0.1", "correlation"),
        ('error = {family = "student-t", df = 3.5}\n', "", "error"),
        ('error = {family = "student-t", df = 3.5}', "error = {df = 3.5}", "error"),
        ('error = {family = "student-t", df = 3.5}', 'error = {family = "t", df = "x"}', "error"),
        ('error = {family = "student-t", df = 3.5}', "error = 3", "error"),
        ("[stated]", "[state]", "state"),
        ("relevant = 4", "relevent = 4", "relevent"),
        ("risk = 0.1", "risk = 0.7", "risk"),
        ("[stated]", '[data]\nfile = "a.csv"\nresponse = "y"\n[stated]', "vet"),
        ('loss = "huber"', 'loss = "cubic"', "loss"),
        ("rows = 400", "rows = 400\nrows = 500", "quay"),
    ],
)
def test_a_stated_design_that_is_not_one_is_refused_by_key(tmp_path, old, new, words):
    assert old in DESIGN
    with pytest.raises(InputError) as refusal:
        read_statement(written(tmp_path, DESIGN.replace(old, new)))
    message = str(refusal.value)
    assert words in message
    assert "quay.toml" in message
    assert "\n" not in message


def test_a_saved_report_gives_its_law_rows_columns_and_target(tmp_path):
    found = read_statement(written(tmp_path, REPORT, "harbour.json"))
    assert found.title == "Harbour dues, on paper"
    assert found.stem == "harbour"
    assert found.values["law"] == "student-t:df=5.5"
    assert found.values["column_law"] == "student-t:df=4.2"
    for key, value in (
        ("rows", 300), ("columns", 40), ("relevant", 3), ("smallest_effect", 0.3), ("risk", 0.05),
        ("seed", 7), ("replicates", 400), ("rule", "plug-in"), ("loss", "squared"),
    ):  # fmt: skip
        assert found.values[key] == value
    assert len(found.facts) == 1
    assert "independent, each student-t:df=4.2" in found.facts[0]


@pytest.mark.parametrize(
    ("tail", "law"),
    [
        ({"index": 4.2, "finite": True}, "student-t:df=4.2"),
        ({"index": 4.2, "finite": False}, "normal"),
        ({"index": 4.2, "finite": False, "high": None}, "normal"),
        # Thin tails are not excluded, but the interval has an upper end.
        ({"index": 4.1, "finite": False, "high": 7.4}, "student-t:df=4.1"),
        ({"index": None, "index_note": "above 50"}, "normal"),
        ({"index": 60.0}, "normal"),
        ({"index": 1.4}, "student-t:df=2.05"),
        ({}, "normal"),
    ],
)
def test_columns_of_a_report_follow_its_median_column(tmp_path, tail, law):
    tree = changed("diagnosis", "columns", "tail", to=tail)
    assert read_statement(written(tmp_path, tree, "h.json")).values["column_law"] == law


@pytest.mark.parametrize(
    ("levels", "law"),
    [
        ([0.9, 0.5, 0.7], "student-t:df=4.2,lag1=0.700"),
        ([0.05, 0.09, 0.02], "student-t:df=4.2"),
        (None, "student-t:df=4.2"),
    ],
)
def test_columns_of_a_report_keep_their_median_persistence(tmp_path, levels, law):
    tree = changed("diagnosis", "columns", "tail", to={"index": 4.2, "finite": True})
    tree["diagnosis"]["column_autocorrelations"] = levels
    found = read_statement(written(tmp_path, tree, "h.json"))
    assert found.values["column_law"] == law
    assert any("median first autocorrelation" in fact for fact in found.facts)


@pytest.mark.parametrize(
    ("law", "line"),
    [
        ({"family": "normal", "parameters": {"scale": 3.0}}, "normal"),
        ({"family": "laplace", "parameters": {"scale": 3.0}}, "laplace"),
        (
            {"family": "skewed-t", "parameters": {"scale": 1, "df": 4, "skew": -0.2}},
            "skewed-t:df=4,skew=-0.2",
        ),
        (
            {
                "family": "student-t", "parameters": {"scale": 1.0, "df": 6.0, "omega": 0.1},
                "volatility": {"omega": 0.1, "alpha": 0.08, "beta": 0.9, "leverage": 0.0},
            },
            "student-t:df=6.0,alpha=0.08,beta=0.9",
        ),
        (
            {"family": "normal", "parameters": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}},
            "normal:alpha=0.1,beta=0.8",
        ),
        (
            {
                "family": "normal", "parameters": {"scale": 1.0, "lag1": 0.3},
                "volatility": {"omega": 0.1, "alpha": 0.0, "beta": 0.9, "leverage": 0.1},
                "autoregression": {"coefficients": [0.3, -0.1], "root": 0.4, "variance_gain": 1.1},
            },
            "normal:alpha=0.0,beta=0.9,leverage=0.1,lag1=0.3,lag2=-0.1",
        ),
        (
            {"family": "laplace", "parameters": {"scale": 1.0, "lag1": 0.3},
             "autoregression": None},
            "laplace:lag1=0.3",
        ),
        (
            {"family": "spliced", "parameters": {"gamma": 0.25},
             "volatility": {"alpha": 0.1, "beta": 0.8, "leverage": -0.1},
             "autoregression": {"coefficients": [0.2]}},
            "student-t:df=4.0,alpha=0.1,beta=0.8,leverage=-0.1,lag1=0.2",
        ),
        ({"family": "spliced", "parameters": {"gamma": 0.25}}, "student-t:df=4.0"),
        ({"family": "spliced", "parameters": {"gamma": 0.01}}, "normal"),
        ({"family": "spliced", "parameters": {"gamma": -0.2}}, "normal"),
    ],
)  # fmt: skip
def test_a_reports_law_on_one_line(tmp_path, law, line):
    found = read_statement(written(tmp_path, changed("law", to=law), "h.json"))
    assert found.values["law"] == line
    parse_law(line)
    # A spliced law is replaced, and the reader is told.
    assert any("spliced" in fact for fact in found.facts) == (law["family"] == "spliced")


def test_a_saved_budget_keeps_its_columns_law_and_correlation(tmp_path):
    tree = changed("schema", to="scantling-budget/1")
    del tree["diagnosis"]
    tree["design"] |= {
        "column_law": {"family": "student-t", "parameters": {"scale": 0.5, "df": 3.0}},
        "correlation": 0.4,
    }
    found = read_statement(written(tmp_path, tree, "b.json"))
    assert found.values["column_law"] == "student-t:df=3.0"
    assert found.values["correlation"] == 0.4
    assert found.facts == ()


def test_a_saved_budget_is_on_paper_already(tmp_path):
    tree = changed("schema", to="scantling-budget/1")
    del tree["diagnosis"]
    tree["title"] = "a design on paper"
    assert read_statement(written(tmp_path, tree, "b.json")).title == "a design on paper"


def test_every_value_says_where_it_stands(tmp_path):
    found = read_statement(written(tmp_path, DESIGN))
    assert found.places.keys() == found.values.keys()
    assert found.places["law"] == "quay.toml: [stated] error"
    assert found.places["column_law"] == "quay.toml: [stated] column"
    assert found.places["relevant"] == "quay.toml: [target] relevant"
    assert found.placed("law: no such one: x") == "quay.toml: [stated] error: no such one: x"
    assert found.placed("power: too low") == "power: too low"
    said = found.changed({"law": "normal", "rows": 50}, {"law": "--law"})
    assert said.places["law"] == "--law"
    assert "rows" not in said.places
    assert said.values["rows"] == 50
    saved = read_statement(written(tmp_path, REPORT, "h.json"))
    assert saved.places.keys() == saved.values.keys()
    assert saved.places["law"] == "h.json: law"
    assert saved.places["risk"] == "h.json: design.target.risk"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "JSON with a schema"),
        ("[1, 2]", "JSON with a schema"),
        ("{}", "JSON with a schema"),
        ('{"schema": "other/1"}', "other/1"),
        ('{"schema": "scantling-report/1"}', "'design' is missing"),
        ('{"schema": "scantling-report/1", "design": 3}', "not what a report has"),
        ("[" * 100_000, "JSON with a schema"),
        (changed("law", drop=True), "'law' is missing"),
        (changed("receipt", "seed", drop=True), "'seed' is missing"),
        (changed("law", to={"family": "spliced", "parameters": {}}), "'gamma' is missing"),
        (changed("law", to=None), "not what a report has"),
        (changed("diagnosis", "columns", "tail", to=None), "not what a report has"),
        (changed("diagnosis", "columns", "tail", "index", to="four"), "not what a report has"),
    ],
)
def test_what_is_no_report_is_refused(tmp_path, text, words):
    with pytest.raises(InputError) as refusal:
        read_statement(written(tmp_path, text, "h.json"))
    assert words in str(refusal.value)
    assert "h.json" in str(refusal.value)
    assert "\n" not in str(refusal.value)


def test_a_file_that_is_not_there(tmp_path):
    for name in ("none.toml", "none.json"):
        with pytest.raises(InputError, match=name):
            read_statement(tmp_path / name)
