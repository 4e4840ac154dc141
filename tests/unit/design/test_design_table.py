"""A design's table: values as in the file, every refusal's wording, no input that escapes."""

from __future__ import annotations

import gzip
import hashlib
import os
import sys
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from scantling.design import source
from scantling.design.cells import number
from scantling.design.clock import disorder
from scantling.design.spec import (
    DataSpec,
    Design,
    ExpandSpec,
    PenaltySpec,
    SimulationSpec,
    TargetSpec,
)
from scantling.design.table import Table, read_table
from scantling.errors import InputError

ROWS = 40
DAYS = [str(date(2020, 1, 30) + timedelta(days=i)) for i in range(ROWS)]
DRAWS = np.random.default_rng(7).standard_normal((ROWS, 3))
HEADER = ["day", "y", "x1", "x2"]


def grid() -> list[list[str]]:
    """Return the rows of a clean table as text, the header first."""
    return [
        HEADER,
        *([day, *map(repr, map(float, row))] for day, row in zip(DAYS, DRAWS, strict=True)),
    ]


def text_of(rows: list[list[str]], separator: str = ",") -> str:
    return "".join(separator.join(row) + "\n" for row in rows)


def design_for(file: Path, *, own_lags: int = 0, **data: object) -> Design:
    entries: dict[str, object] = {"response": "y", "time": "day", **data}
    return Design(
        title="t",
        path=file.parent / "d.toml",
        sha256="0" * 64,
        data=DataSpec(file=file, **entries),  # type: ignore[arg-type]
        expand=ExpandSpec(own_lags=own_lags),
        kind="regression",
        target=TargetSpec(),
        penalty=PenaltySpec(),
        simulation=SimulationSpec(),
    )


def read(folder: Path, content: str | bytes, name: str = "panel.csv", **data: object) -> Table:
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    own_lags = data.pop("own_lags", 0)
    return read_table(design_for(path, own_lags=own_lags, **data))  # type: ignore[arg-type]


def refusal(folder: Path, content: str | bytes, name: str = "panel.csv", **data: object) -> str:
    with pytest.raises(InputError) as caught:
        read(folder, content, name, **data)
    message = str(caught.value)
    assert message.isprintable() and name in message, message
    return message


def changed(row: int, column: int, value: str) -> str:
    """Return the clean table with one value replaced; row 0 is the header."""
    rows = [list(entries) for entries in grid()]
    rows[row][column] = value
    return text_of(rows)


def with_column(name: str, values: list[str]) -> str:
    head, *body = grid()
    return text_of(
        [[*head, name], *([*row, value] for row, value in zip(body, values, strict=True))]
    )


def test_clean_table_is_read_bit_for_bit(tmp_path: Path) -> None:
    content = text_of(grid())
    table = read(tmp_path, content)
    assert table.names == ("x1", "x2") and table.response_name == "y"
    np.testing.assert_array_equal(table.values, DRAWS[:, 1:])
    np.testing.assert_array_equal(table.response, DRAWS[:, 0])
    assert table.time_name == "day" and table.time == tuple(DAYS)
    assert table.rows_dropped == 0 and table.skipped == ()
    assert table.sha256 == hashlib.sha256(content.encode()).hexdigest()
    assert table.file_name == "panel.csv"
    for array in (table.values, table.response):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


@pytest.mark.parametrize("name", ["p.csv", "p.CSV", "p.csv.gz", "p.tsv", "p.tsv.gz"])
def test_separators_and_archives_agree(tmp_path: Path, name: str) -> None:
    content = text_of(grid(), "\t" if "tsv" in name else ",").encode()
    table = read(tmp_path, gzip.compress(content) if name.endswith(".gz") else content, name)
    np.testing.assert_array_equal(table.values, DRAWS[:, 1:])


def test_blocks_join_without_losing_a_row(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    whole = read(tmp_path, text_of(grid()))
    for cells in (1, 4, 12, 28, 160):
        monkeypatch.setattr(source, "_CELLS_PER_BLOCK", cells)
        table = read(tmp_path, text_of(grid()))
        np.testing.assert_array_equal(table.values, whole.values)
        assert table.time == whole.time
        assert "row 17 (line 18): 'oops'" in refusal(tmp_path, changed(17, 2, "oops"))


def test_line_ends_quotes_blank_lines_and_byte_order_mark(tmp_path: Path) -> None:
    content = text_of(grid())
    for variant in (
        content.replace("\n", "\r\n"),
        content.replace("\n", "\r"),
        "\ufeff" + content,
        "\n\n" + content.replace("\n", "\n\n") + "   \n",
        content.replace("x1", '"x1"').replace("2020-02-03", '"2020-02-03"'),
        content.replace("day,y,x1", " day , y, x1 "),
    ):
        table = read(tmp_path, variant)
        np.testing.assert_array_equal(table.values, DRAWS[:, 1:])
        assert table.time == tuple(DAYS)


def test_lines_are_counted_past_blank_and_broken_ones(tmp_path: Path) -> None:
    rows = [[*entries, "note"] for entries in grid()]
    rows[3][4] = '"a\nb"'
    rows[9][2] = "oops"
    message = refusal(tmp_path, "\n" + text_of(rows))
    assert "column 'x1', row 9 (line 12): 'oops' is not a number" in message


def test_booleans_are_numbers_and_text_columns_are_skipped(tmp_path: Path) -> None:
    flags = ["True" if i % 3 else "false" for i in range(ROWS)]
    table = read(tmp_path, with_column("flag", flags))
    assert table.names[-1] == "flag"
    np.testing.assert_array_equal(table.values[:, -1], [float(i % 3 > 0) for i in range(ROWS)])
    table = read(tmp_path, with_column("name", [f"n{i}" for i in range(ROWS)]))
    assert table.names == ("x1", "x2") and table.skipped == ("name",)
    table = read(tmp_path, with_column("none", ["NA"] * ROWS))
    assert table.skipped == ("none",)


def test_globs_and_names(tmp_path: Path) -> None:
    content = text_of(grid())
    assert read(tmp_path, content, columns=("x?",)).names == ("x1", "x2")
    assert read(tmp_path, content, columns=("x2", "x*")).names == ("x1", "x2")
    assert read(tmp_path, content, columns=("x2",)).names == ("x2",)
    # A name of the file is a name, even where it could be a pattern.
    assert read(tmp_path, content.replace("x1", "x[2]"), columns=("x[2]",)).names == ("x[2]",)
    for pattern in ("X*", "da*", "[y]"):
        message = refusal(tmp_path, content, columns=(pattern,))
        assert f"the pattern {pattern!r} in [data] columns matches no column" in message
    message = refusal(tmp_path, content, columns=("x3",))
    assert "no column 'x3', named by [data] columns; nearest: 'x" in message
    message = refusal(tmp_path, content, columns=("day",))
    assert "[data] columns names 'day', the response or the time" in message


def test_only_a_response_needs_own_lags(tmp_path: Path) -> None:
    series = "y\n" + "".join(f"{float(value)!r}\n" for value in DRAWS[:, 0])
    table = read(tmp_path, series + "\n\n", time=None, own_lags=1)
    assert table.values.shape == (ROWS, 0) and table.time is None
    assert "no candidate columns" in refusal(tmp_path, series, time=None)
    # An empty line within a single column is a missing value, not no row.
    gap = series.replace("\n", "\n\n", 2).replace("\n\n", "\n", 1)
    assert "1 missing values, first in column 'y', row 2 (line 3)" in refusal(
        tmp_path, gap, time=None, own_lags=1
    )


@pytest.mark.parametrize(
    ("content", "fragments"),
    [
        ("", ["the file is empty"]),
        ("\n\n  \n", ["the file is empty"]),
        ("day,y,x1,x2\n", ["a header and no rows; at least 30 rows"]),
        (text_of(grid()[:30]), ["29 rows; at least 30 rows are needed"]),
        (text_of([*grid(), ["a", "b"]]), ["line 42 has 2 values where the header has 4 names"]),
        (text_of([*grid(), ["1"] * 5]), ["line 42 has 5 values where the header has 4 names"]),
        (text_of(grid(), ";"), ["the header is one name", "look separated by semicolons"]),
        (text_of(grid(), "\t"), ["the header is one name", "commas are needed", "by tabs"]),
        (text_of(grid()) + '"open,1,2,3\n', ["line 42: not a row of a table", "quotation mark"]),
        (text_of(grid()).replace("x1", "x2"), ["'x2' is given twice (columns 3 and 4)"]),
        (text_of(grid()).replace("x1", " "), ["column 3 has an empty name"]),
        (text_of(grid()).replace("x1", '"a\nb"'), ["column 3 is named 'a\\nb'", "line breaks"]),
        (text_of(grid()).encode("utf-16"), ["not UTF-8 text (byte 0xff at or after line 1)"]),
        (text_of(grid()).replace("x1", "\xe9").encode("latin-1"), ["not UTF-8 text (byte 0xe9"]),
        (changed(3, 2, "1\0"), ["line 4 holds a NUL byte"]),
        (gzip.compress(text_of(grid()).encode()), ["not UTF-8 text (byte 0x8b"]),
    ],
)
def test_files_that_are_no_table(
    tmp_path: Path, content: str | bytes, fragments: list[str]
) -> None:
    message = refusal(tmp_path, content)
    for fragment in fragments:
        assert fragment in message


def test_files_that_cannot_be_opened(tmp_path: Path) -> None:
    def message(path: Path) -> str:
        with pytest.raises(InputError) as caught:
            read_table(design_for(path))
        return str(caught.value)

    assert message(tmp_path / "no.csv").endswith("no.csv: no such data file")
    assert "this is a folder" in message(tmp_path)
    assert "no such data file" in message(Path("a\0.csv"))
    assert "File name too long" in message(Path("x" * 5000))
    os.mkfifo(tmp_path / "pipe.csv")
    assert "not a regular file" in message(tmp_path / "pipe.csv")
    packed = gzip.compress(text_of(grid()).encode())
    for content in (packed[:-20], packed[:40], b"plain", packed[:60] + b"zz" + packed[62:]):
        text = refusal(tmp_path, content, "p.csv.gz")
        assert "a damaged or incomplete gzip archive" in text
    assert "the ending '.txt' is not known; .csv, .tsv" in refusal(tmp_path, "a", "p.txt")
    assert "the ending '.txt.gz' is not known" in refusal(tmp_path, packed, "p.txt.gz")


def test_a_line_without_end_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(source, "_LONGEST_LINE", 500)
    content = gzip.compress(text_of(grid()).encode() + b"1" * 2000)
    assert "line 42 is over 16 MiB long" in refusal(tmp_path, content, "p.csv.gz")


def test_memory_is_refused_with_the_figure(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(source, "MEMORY_BOUND", ROWS * 3 * 8 * 3)
    assert read(tmp_path, text_of(grid())).values.shape == (ROWS, 2)
    monkeypatch.setattr(source, "MEMORY_BOUND", ROWS * 3 * 8 * 3 - 1)
    message = refusal(tmp_path, text_of(grid()))
    assert "40 rows of 3 columns take 0.0 GiB (3 copies)" in message and "are held" in message


@pytest.mark.parametrize(
    ("content", "data", "fragments"),
    [
        (text_of(grid()), {"response": "yy"}, ["no column 'yy', named by [data] response", "'y'"]),
        (text_of(grid()), {"time": "days"}, ["no column 'days', named by [data] time", "'day'"]),
        (
            text_of(grid()),
            {"response": "day", "time": None},
            ["column 'day', row 1 (line 2): '2020-01-30' is not a number"],
        ),
        (changed(5, 2, "1_000"), {}, ["column 'x1', row 5 (line 6): '1_000' is not a number"]),
        (changed(5, 2, '"1,000"'), {}, ["row 5 (line 6): '1,000' is not a number"]),
        (changed(5, 2, "$3"), {}, ["'$3' is not a number; plain numbers, True or False"]),
        (changed(5, 2, "n/a"), {}, ["'n/a' is not a number"]),
        (changed(5, 2, "\u0663"), {}, ["is not a number"]),
        (changed(5, 2, "oops"), {"missing": "drop-rows"}, ["'oops' is not a number"]),
        (with_column("n", ["a"] * ROWS), {"columns": ("n",)}, ["column 'n', row 1 (line 2): 'a'"]),
        (with_column("n", ["NA"] * ROWS), {"columns": ("n",)}, ["column 'n' holds no value"]),
        (changed(5, 2, "NA"), {}, ["1 missing values, first in column 'x1', row 5 (line 6)"]),
        (changed(5, 1, "null"), {}, ["first in column 'y'", 'set [data] missing = "drop-rows"']),
        (changed(5, 2, "NaN"), {}, ["1 missing values"]),
        (changed(5, 2, ""), {}, ["1 missing values"]),
        (changed(5, 2, "-inf"), {}, ["1 infinite values, first in column 'x1', row 5 (line 6)"]),
        (changed(5, 2, "1e999"), {}, ["1 infinite values"]),
        (changed(5, 0, "NA"), {}, ["time column 'day' has 1 missing values, first in row 5"]),
        (with_column("c", ["1.50", "1.5"] * 20), {}, ["constant columns: 'c'; leave them out"]),
        (
            with_column("c", [row[2] for row in grid()[1:]]),
            {},
            ["columns 'x1' and 'c' are identical; leave one out"],
        ),
        (
            with_column("c", [row[1] for row in grid()[1:]]),
            {},
            ["the response 'y' is identical to column 'c'"],
        ),
        (
            with_column("c", ["3"] * ROWS),
            {"response": "c"},
            ["the response 'c' is constant (3); there is nothing to explain"],
        ),
    ],
)
def test_columns_and_values_refused(
    tmp_path: Path, content: str, data: dict[str, object], fragments: list[str]
) -> None:
    message = refusal(tmp_path, content, **data)
    for fragment in fragments:
        assert fragment in message


def test_zeros_of_both_signs_are_identical(tmp_path: Path) -> None:
    head, *body = grid()
    rows = [[*row, str(i % 2), "-0.0" if i % 2 == 0 else "1"] for i, row in enumerate(body)]
    assert "columns 'a' and 'b' are identical" in refusal(
        tmp_path, text_of([[*head, "a", "b"], *rows])
    )


def test_rows_dropped_are_counted_and_only_for_columns_used(tmp_path: Path) -> None:
    rows = [list(entries) for entries in grid()]
    rows[5][2], rows[6][1], rows[7][2], rows[8][0], rows[9][3] = "NA", "inf", "", "", "nan"
    table = read(tmp_path, text_of(rows), missing="drop-rows", columns=("x1",))
    kept = [i for i in range(ROWS) if i not in (4, 5, 6, 7)]
    assert table.rows_dropped == 4
    np.testing.assert_array_equal(table.values[:, 0], DRAWS[kept, 1])
    np.testing.assert_array_equal(table.response, DRAWS[kept, 0])
    assert table.time == tuple(DAYS[i] for i in kept)
    for i in range(10, 20):
        rows[i][2] = "NA"
    message = refusal(tmp_path, text_of(rows), missing="drop-rows")
    assert "25 rows after 15 with missing or infinite values were dropped; at least 30" in message


def test_time_out_of_order(tmp_path: Path) -> None:
    for value, fragments in (
        (DAYS[3], ["row 5 (line 6)", f"'{DAYS[3]}' repeats '{DAYS[3]}'", "unique and increasing"]),
        (DAYS[2], ["row 5 (line 6)", f"'{DAYS[2]}' follows '{DAYS[3]}'", "unique and increasing"]),
        ("today", ["row 5 (line 6): 'today' is not an ISO date; times are all ISO dates"]),
        ("2020-02-31", ["'2020-02-31' is not an ISO date"]),
        ("7", ["'7' is not an ISO date"]),
    ):
        message = refusal(tmp_path, changed(5, 0, value))
        assert "time column 'day'" in message
        for fragment in fragments:
            assert fragment in message
    message = refusal(tmp_path, changed(1, 0, "Jan 2020"))
    assert "row 1 (line 2): 'Jan 2020' is not an ISO date or a number" in message


@pytest.mark.parametrize(
    ("labels", "position", "unreadable"),
    [
        (["1", "2.5", "1e3"], None, None),
        (["1", "1.0"], 1, False),
        (["2", "1"], 1, False),
        (["1", "inf"], 1, True),
        (["True", "2"], 0, True),
        (["1", "x"], 1, True),
        # Nanoseconds since 1970 that one float cannot tell apart.
        (["1600000000000000001", "1600000000000000002"], None, None),
        (["2020-01", "2020-02"], None, None),
        (["2020-01-01 10:00", "2020-01-01T10:00:00.5"], None, None),
        (["2020-01-01 10:00:00.000000001", "2020-01-01 10:00:00.000000002"], None, None),
        (["2020-01-01T10:00:00+02:00", "2020-01-01T09:00:00Z"], None, None),
        (["2020-01-01T10:00:00Z", "2020-01-01T11:00:00+02:00"], 1, False),
        (["2020-01-01", "2020-13-01"], 1, True),
        (["1500-01-01", "9999-12-31"], None, None),
        ([], None, None),
    ],
)
def test_order_of_times(labels: list[str], position: int | None, unreadable: bool | None) -> None:
    found = disorder(labels)
    if position is None:
        assert found is None
    else:
        assert found is not None
        assert (found.position, found.unreadable) == (position, unreadable)


@given(value=st.floats(allow_nan=False))
def test_printed_numbers_come_back(value: float) -> None:
    assert number(f" {value!r} ") == value


@given(text=st.text(max_size=12))
def test_what_is_a_number_is_one_to_float(text: str) -> None:
    found = number(text)
    if found is None or text.strip().lower() in ("", "na", "null", "true", "false"):
        return
    np.testing.assert_equal(found, float(text))


def test_parquet_agrees_with_text(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pyarrow = pytest.importorskip("pyarrow")
    from pyarrow import parquet

    days = [date.fromisoformat(day) for day in DAYS]
    columns = {
        "day": days,
        "y": DRAWS[:, 0],
        "x1": DRAWS[:, 1],
        "flag": [bool(i % 2) for i in range(ROWS)],
        "count": list(range(ROWS)),
        "text": [repr(float(value)) for value in DRAWS[:, 2]],
        "name": ["a"] * ROWS,
    }
    parquet.write_table(pyarrow.table(columns), tmp_path / "p.parquet")
    table = read_table(design_for(tmp_path / "p.parquet"))
    assert table.names == ("x1", "flag", "count", "text") and table.skipped == ("name",)
    assert table.time == tuple(DAYS)
    np.testing.assert_array_equal(table.values[:, 0], DRAWS[:, 1])
    np.testing.assert_array_equal(table.values[:, 1], np.arange(ROWS) % 2)
    np.testing.assert_array_equal(table.values[:, 3], DRAWS[:, 2])
    columns["flag"][4] = None  # type: ignore[index]
    parquet.write_table(pyarrow.table(columns), tmp_path / "p.parquet")
    with pytest.raises(InputError, match="1 missing values, first in column 'flag', row 5; mend"):
        read_table(design_for(tmp_path / "p.parquet"))
    content = (tmp_path / "p.parquet").read_bytes()
    assert "not a parquet file" in refusal(tmp_path, b"PAR1 no", "q.parquet")
    assert "not a parquet file" in refusal(tmp_path, content[:-9], "q.parquet")
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    message = refusal(tmp_path, content, "p.parquet")
    assert "parquet needs pyarrow; pip install scantling[parquet]" in message


@settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    content=st.binary(max_size=300),
    name=st.sampled_from(["p.csv", "p.tsv", "p.csv.gz", "p.parquet"]),
)
def test_random_bytes_are_refused(tmp_path: Path, content: bytes, name: str) -> None:
    assert refusal(tmp_path, content, name)


CLEAN = text_of(grid()).encode()


@settings(
    max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    place=st.integers(0, len(CLEAN)),
    removed=st.integers(0, 30),
    put=st.binary(max_size=5)
    | st.sampled_from([b"\n", b",", b'"', b"NA", b"inf", b"1e999", b"\r", b"\xef\xbb\xbf"]),
    missing=st.sampled_from(["refuse", "drop-rows"]),
)
def test_mutations_are_read_or_refused(
    tmp_path: Path, place: int, removed: int, put: bytes, missing: str
) -> None:
    content = CLEAN[:place] + put + CLEAN[place + removed :]
    try:
        table = read(tmp_path, content, missing=missing)
    except InputError as refused:
        assert "panel.csv" in str(refused) and str(refused).isprintable()
    else:
        assert np.isfinite(table.values).all() and np.isfinite(table.response).all()
        assert table.rows_dropped == 0 or missing == "drop-rows"
        assert len(table.response) >= 30
