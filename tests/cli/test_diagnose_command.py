"""The diagnostics stage alone: of a bare series, from a file or standard input, and of a design."""

from __future__ import annotations

import gzip
import io
import json
import sys
from pathlib import Path

import numpy as np
import pytest

from scantling.cli.main import run
from scantling.design.series_file import read_series
from scantling.errors import InputError


@pytest.fixture(scope="module")
def heavy(tmp_path_factory):
    """A file of 600 GARCH values with t(4) shocks, one a line, under a heading."""
    rng = np.random.default_rng(11)
    out, variance = np.empty(600), 1.0
    for t in range(600):
        out[t] = np.sqrt(variance) * rng.standard_t(4) / np.sqrt(2)
        variance = 0.05 + 0.15 * out[t] ** 2 + 0.80 * variance
    path = tmp_path_factory.mktemp("series") / "errors.csv"
    path.write_text("residual\n" + "\n".join(map(repr, map(float, out))) + "\n", encoding="utf-8")
    return path, out


def refused(capsys, *arguments: str) -> str:
    """The one line of a refusal."""
    assert run(list(arguments)) == 2
    seen = capsys.readouterr()
    assert seen.out == ""
    assert seen.err.count("\n") == 1
    return seen.err


def test_a_series_is_read_as_it_stands(heavy, tmp_path):
    path, values = heavy
    found = read_series(str(path))
    assert found.name == "residual"
    assert found.values.tolist() == values.tolist()
    bare = tmp_path / "bare.txt"
    bare.write_text("\n".join(map(repr, map(float, values))), encoding="utf-8")
    assert read_series(str(bare)).values.tolist() == values.tolist()
    assert read_series(str(bare)).name == "bare.txt"
    packed = tmp_path / "bare.txt.gz"
    packed.write_bytes(gzip.compress(bare.read_bytes()))
    assert read_series(str(packed)).values.tolist() == values.tolist()


def test_text_says_what_the_series_is(heavy, capsys):
    path, _ = heavy
    assert run(["diagnose", str(path)]) == 0
    text = capsys.readouterr().out
    lines = text.split("\n")
    assert lines[0] == "scantling diagnose: residual"
    assert lines[1].split() == ["Values", "600"]
    assert any(line.startswith("Volatility  clusters") for line in lines[:8])
    assert "generalised Pareto, largest 10 %" in text
    assert "Hill, largest 5 %" in text
    assert "Largest values against the fitted law:" in text
    assert "\x1b" not in text
    assert max(map(len, lines)) <= 80


def test_json_agrees_with_the_python_interface(heavy, capsys):
    import scantling

    path, values = heavy
    assert run(["diagnose", str(path), "--json", "--seed", "3"]) == 0
    document = json.loads(capsys.readouterr().out, parse_constant=pytest.fail)
    assert document["schema"] == "scantling-diagnosis/1"
    tail = scantling.tail_index(values, seed=3)
    assert document["series"]["tail"]["index"] == pytest.approx(tail.index, rel=1e-9)
    assert document["series"]["moments"]["2"] == scantling.moment_exists(values, 2, seed=3).answer
    assert document["law"]["volatility"]["kind"] == "garch"
    assert document["receipt"]["seed"] == 3


def test_unordered_values_are_not_tested_for_dependence(heavy, capsys):
    path, _ = heavy
    assert run(["diagnose", str(path), "--unordered", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["series"]["dependence"] == []
    assert document["law"]["volatility"] is None


def test_standard_input(heavy, capsys, monkeypatch):
    path, values = heavy
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(path.read_bytes())))
    assert run(["diagnose", "-", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["series"]["rows"] == values.size
    assert list(document["receipt"]["inputs"]) == ["standard input"]


def test_a_column_of_a_table(heavy, tmp_path, capsys):
    _, values = heavy
    table = tmp_path / "table.tsv"
    rows = [f"{i}\t{v!r}" for i, v in enumerate(map(float, values))]
    table.write_text("t\te\n" + "\n".join(rows) + "\n", encoding="utf-8")
    assert run(["diagnose", str(table), "--column", "e"]) == 0
    assert capsys.readouterr().out.startswith("scantling diagnose: e\n")
    assert "2 columns; --column names the one" in refused(capsys, "diagnose", str(table))
    message = refused(capsys, "diagnose", str(table), "--column", "ee")
    assert "no column 'ee'; nearest: 'e'" in message


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "empty"),
        (b"e\n" + b"1\n2\n" * 10, "20 values; at least 30 are needed"),
        (b"e\n" + b"1\n" * 40, "every value is 1"),
        (b"e\n" + b"1\n2\n" * 20 + b"x\n", "row 41 is no number: 'x'"),
        (b"e\n" + b"1\n2\n" * 20 + b"NA\n", "1 missing or infinite value, first in row 41"),
        (b"e\n" + b"1\n2\n" * 20 + b"inf\n", "1 missing or infinite value, first in row 41"),
        (b"\xff\xfe\x00", "not text in UTF-8"),
        (b"1.5\n", "bad.csv: 1 value; at least 30 are needed"),
        (b"1\n2\n" * 20 + b"\n" + b"1\n2\n", "line 41 is empty; one number on every line"),
        (b"e\n" + b"1\n2\n" * 20 + b"  \n\n1\n", "line 42 is empty; one number on every line"),
        (b"0,5\n1,5\n" * 20, "the first line is 2 numbers separated by commas; a table needs a"),
        (b"e\n" + b"0,5\n1,5\n" * 20, "row 1 has 2 values separated by commas, and 1 is needed;"),
        (b"e\n" + b'"0,5"\n"1,5"\n' * 20, "no number: '0,5'; decimals need a point, not a comma"),
        (b"t;e\n" + b"1;0,5\n2;1,5\n" * 20, "'t;e', looks separated by semicolons; commas are"),
        (b"1;0,5\n2;1,5\n" * 20, "'1;0,5', looks separated by semicolons; commas are needed, and"),
        (b"e|f\n" + b"1|2\n" * 40, "'e|f', looks separated by bars; commas are needed"),
        (b"e\n1\n2,3\n" + b"1\n" * 40, "row 2 has 2 values separated by commas, and 1 is needed"),
    ],
)
def test_bad_series_are_refused_in_one_line(tmp_path, capsys, content, words):
    path = tmp_path / "bad.csv"
    path.write_bytes(content)
    assert words in refused(capsys, "diagnose", str(path))


def test_empty_lines_at_the_end_and_in_a_table_are_no_rows(heavy, tmp_path):
    _, values = heavy
    numbers = list(map(repr, map(float, values)))
    path = tmp_path / "a.csv"
    path.write_text("\n\n|e|\n" + "\n".join(numbers) + "\n\n  \n\n", encoding="utf-8")
    found = read_series(str(path))
    assert found.values.tolist() == values.tolist() and found.name == "|e|"
    rows = [f"{place},{each}" for place, each in enumerate(numbers)]
    path.write_text("t,e\n" + "\n\n".join(rows) + "\n", encoding="utf-8")
    assert read_series(str(path), column="e").values.tolist() == values.tolist()


def test_an_unreadable_file_is_named_without_a_number(tmp_path, capsys, monkeypatch):
    def denied(path):
        raise PermissionError(13, "Permission denied", str(path))

    path = tmp_path / "secret.txt"
    path.write_text("1\n")
    monkeypatch.setattr(Path, "read_bytes", denied)
    message = refused(capsys, "diagnose", str(path))
    assert message == "scantling: secret.txt: cannot be read (Permission denied)\n"


def test_what_cannot_be_opened(tmp_path, capsys):
    assert "no such file" in refused(capsys, "diagnose", str(tmp_path / "none.csv"))
    assert "a folder" in refused(capsys, "diagnose", str(tmp_path))
    broken = tmp_path / "broken.gz"
    broken.write_bytes(b"\x1f\x8b nothing")
    assert "cannot be read" in refused(capsys, "diagnose", str(broken))
    with pytest.raises(InputError):
        read_series(str(tmp_path / "none.csv"))


def test_a_discrete_series_is_answered_in_words(tmp_path, capsys):
    path = tmp_path / "coins.txt"
    path.write_text("\n".join(["0", "1"] * 100), encoding="utf-8")
    assert run(["diagnose", str(path)]) == 0
    text = capsys.readouterr().out
    assert "not assessed: two-valued" in text
    assert run(["diagnose", str(path), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["series"]["tail"]["index"] is None


def test_a_design(small, capsys):
    """The diagnosis of a design is the one its report holds."""
    import scantling

    report = json.loads(scantling.vet(scantling.read_design(small)).to_json())
    assert run(["diagnose", str(small), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["diagnosis"] == report["diagnosis"]
    assert document["law"] == report["law"]
    assert run(["diagnose", str(small)]) == 0
    text = capsys.readouterr().out
    assert "Tails\n-----" in text
    assert max(map(len, text.split("\n"))) <= 80
    message = refused(capsys, "diagnose", str(small), "--unordered")
    assert "go with a bare series" in message
