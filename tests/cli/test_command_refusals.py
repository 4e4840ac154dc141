"""Bad usage and bad input: one line on stderr, nothing on stdout, status 2, no file written."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from shlex import quote

import numpy as np
import pytest

from scantling.cli.commands import commands
from scantling.cli.main import run

ROWS = 40
BASE = {
    "data": 'file = "t.csv"\ntime = "day"\nresponse = "y"',
    "expand": "",
    "purpose": 'kind = "regression"',
    "target": "relevant = 1",
    "penalty": 'rule = "plug-in"\nloss = "squared"',
    "simulation": "replicates = 50",
}
Grid = list[list[str]]


def grid(rows: int = ROWS, columns: int = 3) -> Grid:
    """A clean table as cells, header first: day, y, x1, x2, ..."""
    values = np.random.default_rng(2).standard_normal((rows, columns + 1))
    head = ["day", "y", *(f"x{j + 1}" for j in range(columns))]
    return [head, *([str(t + 1), *map(str, map(float, row))] for t, row in enumerate(values))]


def cell(row: int, column: int, value: str) -> Grid:
    """The clean table with one cell changed."""
    cells = grid()
    cells[row][column] = value
    return cells


def column(place: int, values: Callable[[int], str]) -> Grid:
    """The clean table with one column's values replaced."""
    cells = grid()
    for t in range(1, len(cells)):
        cells[t][place] = values(t)
    return cells


def design(**tables: str) -> str:
    """A clean design file with some tables replaced."""
    parts = {**BASE, **tables}
    return "\n".join(f"[{name}]\n{body}" for name, body in parts.items()) + "\n"


def refused(
    folder: Path, text: str, cells: Grid, capsys: pytest.CaptureFixture[str], *options: str
) -> str:
    """Vet a design that cannot be vetted and return the line on stderr."""
    (folder / "d.toml").write_text(text)
    (folder / "t.csv").write_text("\n".join(",".join(row) for row in cells) + "\n")
    status = run(["vet", str(folder / "d.toml"), "--out", str(folder / "out"), *options])
    printed, message = capsys.readouterr()
    assert status == 2, message
    assert printed == ""
    assert message.startswith("scantling: ") and message.endswith("\n")
    assert message.count("\n") == 1 and message.strip().isprintable()
    assert not (folder / "out").exists()
    written = [path for path in folder.rglob("*") if path.is_file()]
    assert sorted(path.name for path in written) == ["d.toml", "t.csv"]
    return message


def test_the_base_case_is_accepted(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without it every refusal below could be of something else."""
    (tmp_path / "d.toml").write_text(design())
    (tmp_path / "t.csv").write_text("\n".join(",".join(row) for row in grid()) + "\n")
    assert run(["vet", str(tmp_path / "d.toml"), "--out", str(tmp_path / "out")]) in (0, 3, 4, 5)
    printed, message = capsys.readouterr()
    assert printed.startswith("scantling: d\n") and message == ""


TABLES = [
    ("ragged row", [*grid(), ["41", "1.0"]], ["t.csv", "line 42"]),
    ("duplicate names", cell(0, 3, "x1"), ["t.csv", "'x1'", "twice"]),
    ("empty name", cell(0, 3, ""), ["t.csv", "column 4", "empty name"]),
    ("response absent", cell(0, 1, "z"), ["t.csv", "'y'", "response"]),
    ("time absent", cell(0, 0, "date"), ["t.csv", "'day'", "time", "'date'"]),
    ("not a number", cell(7, 2, "n/k"), ["t.csv", "'x1'", "row 7", "line 8", "'n/k'"]),
    ("response not a number", cell(3, 1, "low"), ["'y'", "row 3", "'low'"]),
    ("digits grouped", cell(5, 4, '"1,204"'), ["'x3'", "row 5", "'1,204'"]),
    ("missing", cell(9, 3, ""), ["1 missing", "'x2'", "row 9", "drop-rows"]),
    ("missing by name", cell(9, 3, "NA"), ["1 missing", "'x2'", "row 9"]),
    ("infinite", cell(11, 4, "inf"), ["1 infinite", "'x3'", "row 11"]),
    ("overflow", cell(11, 4, "1e999"), ["1 infinite", "'x3'", "row 11"]),
    ("constant column", column(3, lambda t: "4.5"), ["constant", "'x2'"]),
    ("constant response", column(1, lambda t: "4.5"), ["response 'y'", "constant", "4.5"]),
    ("duplicated column", column(3, lambda t: grid()[t][2]), ["'x1'", "'x2'", "identical"]),
    ("response copied", column(3, lambda t: grid()[t][1]), ["'y'", "'x2'", "identical"]),
    ("time falls", cell(20, 0, "3"), ["'day'", "row 20", "'3'", "'19'", "increasing"]),
    ("time repeats", cell(20, 0, "19"), ["'day'", "row 20", "repeats", "'19'"]),
    ("time unreadable", cell(20, 0, "soon"), ["'day'", "row 20", "'soon'"]),
    ("few rows", grid(29), ["29 rows", "at least 30"]),
    ("no rows", grid(0), ["t.csv", "no rows", "30"]),
]  # fmt: skip


@pytest.mark.parametrize(("cells", "parts"), [c[1:] for c in TABLES], ids=[c[0] for c in TABLES])
def test_bad_tables(
    cells: Grid, parts: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    message = refused(tmp_path, design(), cells, capsys)
    assert all(part in message for part in parts), message


@pytest.mark.parametrize("name", ["t.csv", "my t.TSV", "t.csv.gz", "t.parquet"])
def test_a_table_in_place_of_a_design(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    path = tmp_path / name
    path.write_text("")
    assert run(["vet", str(path), "--out", str(tmp_path / "out")]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and not (tmp_path / "out").exists()
    assert message == (
        f"scantling: {path}: a design (.toml) is needed; `scantling draft {quote(str(path))}`"
        " writes one\n"
    )
    path.unlink()
    assert run(["vet", str(path)]) == 2
    assert "no such file" in capsys.readouterr().err


DATA = BASE["data"]
DESIGNS = [
    ("not toml", "[data\n", ["d.toml"]),
    ("empty", "", ["d.toml", "data"]),
    ("no response", design(data='file = "t.csv"'), ["[data]", "response"]),
    ("missing file", design(data='file = "none.csv"\nresponse = "y"'), ["none.csv", "No such"]),
    ("a folder", design(data='file = "."\nresponse = "y"'), ["folder"]),
    ("unknown ending", design(data='file = "d.toml"\nresponse = "y"'), ["'.toml'", ".csv"]),
    ("unknown key", design(target="smalest_effect = 0.1"), ["smalest_effect", "smallest_effect"]),
    ("unknown table", design(goals="a = 1"), ["goals"]),
    ("key elsewhere", design(target="powers = 2"), ["powers", "[expand]"]),
    ("wrong type", design(expand='lags = "five"'), ["[expand] lags", "'five'", "whole number"]),
    ("fraction", design(expand="lags = 1.5"), ["lags", "1.5", "whole number from 0 to 60"]),
    ("truth for number", design(target="risk = true"), ["risk", "true", "number"]),
    ("nan", design(target="risk = nan"), ["risk", "nan", "below 0.5"]),
    ("risk too large", design(target="risk = 0.5"), ["risk", "0.5", "below 0.5"]),
    ("no effect", design(target="smallest_effect = 0"), ["smallest_effect", "0", "above 0"]),
    ("few replicates", design(simulation="replicates = 10"), ["replicates", "10", "50"]),
    ("negative seed", design(simulation="seed = -1"), ["seed", "-1"]),
    ("too many lags", design(expand="lags = 45"), ["[expand]", "45 lags", "40"]),
    ("lags leave few rows", design(expand="own_lags = 15"), ["15 lags", "25 of 40", "30"]),
    ("no match", design(data=DATA + '\ncolumns = ["price*"]'), ["price*", "no column"]),
    ("absent column", design(data=DATA + '\ncolumns = ["x9"]'), ["'x9'", "nearest"]),
    ("response as column", design(data=DATA + '\ncolumns = ["y"]'), ["'y'", "response"]),
    ("stated", "[stated]\nrows = 500\ncolumns = 900\n", ["stated", "scantling budget"]),
    *[
        (f"kind {kind}", design(purpose=f'kind = "{kind}"'), [kind, "not available", "regression"])
        for kind in ("treatment", "instruments", "binary", "system", "chain")
    ],
    ("unheard-of rule", design(penalty='rule = "lasso"'), ["lasso", "plug-in", "extended-bic"]),
    ("unheard-of loss", design(penalty='loss = "huge"'), ["huge", "huber", "absolute"]),
    ("unheard-of kind", design(purpose='kind = "regresion"'), ["regresion", "regression"]),
]  # fmt: skip


@pytest.mark.parametrize(("text", "parts"), [c[1:] for c in DESIGNS], ids=[c[0] for c in DESIGNS])
def test_bad_designs(
    text: str, parts: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    message = refused(tmp_path, text, grid(), capsys)
    assert all(part in message for part in parts), message


def test_response_that_leaves_no_errors(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    cells = grid()
    for row in cells[1:]:
        row[1] = str(2 * float(row[2]) + 1)
    message = refused(tmp_path, design(), cells, capsys)
    assert "t.csv" in message and "'y'" in message and "exactly" in message, message


def test_more_columns_than_memory(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """150 raw columns, 6 powers, products, 60 lags: 724,500 columns; refused with the figure."""
    expand = "powers = 6\nproducts = true\nlags = 60"
    message = refused(tmp_path, design(expand=expand), grid(200, 150), capsys)
    # (150 * 6 + 150 * 149 / 2) * 60 columns of 140 rows, 8 bytes, four copies.
    size = (150 * 6 + 150 * 149 // 2) * 60 * 140 * 8 * 4 / 1024**3
    assert "724500 columns" in message and f"{size:.1f} GiB" in message, message


def test_folder_that_cannot_be_made(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "d.toml").write_text(design())
    (tmp_path / "t.csv").write_text("\n".join(",".join(row) for row in grid()) + "\n")
    for out in (tmp_path / "t.csv", tmp_path / "t.csv" / "below"):
        assert run(["vet", str(tmp_path / "d.toml"), "--out", str(out)]) == 2
        printed, message = capsys.readouterr()
        assert printed == "" and message.count("\n") == 1
        assert message.startswith(f"scantling: --out {out}: ")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["d.toml", "t.csv"]


USAGE = [
    ([], ["draft", "vet"]),
    (["bogus"], ["'bogus'", "draft", "vet"]),
    (["vet"], ["DESIGN"]),
    (["draft"], ["DATA"]),
    (["vet", "absent.toml"], ["absent.toml"]),
    (["vet", "absent.toml", "--nonsense"], ["--nonsense"]),
    (["vet", "absent.toml", "--seed", "x"], ["--seed", "'x'"]),
    (["vet", "absent.toml", "--seed", "-1"], ["--seed", "-1"]),
    (["vet", "absent.toml", "--replicates", "49"], ["--replicates", "49", "50"]),
    (["vet", "absent.toml", "--workers", "0"], ["--workers", "0"]),
    (["vet", "absent.toml", "--pace", "fast"], ["--pace", "quick", "thorough"]),
    (["vet", "absent.toml", "other.toml"], ["other.toml"]),
    (["vet", "absent.toml", "--out"], ["--out"]),
    (["draft", "absent.csv"], ["absent.csv", "no such"]),
]


@pytest.mark.parametrize(("arguments", "parts"), USAGE)
def test_bad_usage(
    arguments: list[str],
    parts: list[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert run(arguments) == 2
    printed, message = capsys.readouterr()
    assert printed == ""
    assert message.count("\n") == 1 and message.startswith("scantling: ")
    assert all(part in message for part in parts), message
    assert list(tmp_path.iterdir()) == []


def test_the_bare_command_is_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    assert run([]) == 2
    printed, message = capsys.readouterr()
    names = ", ".join(sorted(commands.commands))
    assert "draft" in names and names.endswith("vet")
    assert (printed, message) == (
        "", f"scantling: a command is needed: {names} (--help says more)\n"
    )  # fmt: skip


def test_fault_inside_is_one_line_too(
    small: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def broken(*args: object, **named: object) -> None:
        raise RuntimeError("two\nlines")

    monkeypatch.setattr("scantling.pipeline.vet", broken)
    monkeypatch.delenv("SCANTLING_DEBUG", raising=False)
    assert run(["vet", str(small), "--out", str(tmp_path)]) == 1
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    assert message.startswith("scantling: internal fault: RuntimeError: two lines")
    monkeypatch.setenv("SCANTLING_DEBUG", "1")
    with pytest.raises(RuntimeError):
        run(["vet", str(small), "--out", str(tmp_path)])


@pytest.mark.parametrize("relevant", [3, 300])
def test_as_many_relevant_columns_as_there_are_is_refused(small, tmp_path, capsys, relevant):
    """There would be nothing to tell them apart from; the number is said."""
    from scantling.cli.main import run

    text = small.read_text(encoding="utf-8").replace("relevant = 1", f"relevant = {relevant}")
    text = text.replace('"small.csv"', f'"{small.with_name("small.csv").as_posix()}"')
    design = tmp_path / "many.toml"
    design.write_text(text, encoding="utf-8")
    assert run(["vet", str(design), "--out", str(tmp_path / "out")]) == 2
    seen = capsys.readouterr()
    assert seen.out == ""
    assert seen.err == (
        f"scantling: many.toml: [target] relevant = {relevant}: the design has 3 candidate columns;"
        " a number below 3 is needed\n"
    )
    assert not (tmp_path / "out").exists()
