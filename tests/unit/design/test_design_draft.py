"""Drafts: what they propose, that they can be read back, and what they say must be mended."""

from __future__ import annotations

import tomllib
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from scantling.design.draft import draft_design, drafted
from scantling.design.expand import expand
from scantling.design.keys import LANGUAGE
from scantling.design.parse import read_design
from scantling.design.table import Table, read_table
from scantling.errors import InputError

ROWS = 50
DRAWS = np.random.default_rng(2).standard_normal((ROWS, 4))
DAYS = [str(date(2021, 5, 1) + timedelta(days=i)) for i in range(ROWS)]


def numbers(column: int) -> list[str]:
    return [repr(float(value)) for value in DRAWS[:, column]]


def write(folder: Path, columns: dict[str, list[str]], name: str = "panel.csv") -> Path:
    head = ",".join('"' + key.replace('"', '""') + '"' for key in columns)
    body = "\n".join(",".join(row) for row in zip(*columns.values(), strict=True))
    path = folder / name
    path.write_text(f"{head}\n{body}\n", encoding="utf-8")
    return path


def read_back(folder: Path, data: Path) -> tuple[str, Table]:
    text = draft_design(data, folder=folder)
    (folder / "draft.toml").write_text(text, encoding="utf-8")
    design = read_design(folder / "draft.toml")
    table = read_table(design)
    assert expand(design, table).names
    return text, table


def test_a_clean_table_is_ready_to_vet(tmp_path: Path) -> None:
    data = write(tmp_path, {"when": DAYS, "y": numbers(0), "a": numbers(1), "b": numbers(2)})
    text, table = read_back(tmp_path, data)
    assert (table.time_name, table.response_name, table.names) == ("when", "y", ("a", "b"))
    assert 'columns = ["*"]' in text and 'missing = "refuse"' in text
    assert 'response = "y"  # a guess, to be changed' in text
    assert "To mend" not in text
    tree = tomllib.loads(text)
    assert tree.pop("title") == "panel" and tree["target"]["relevant"] == 1
    assert {name: set(keys) for name, keys in tree.items()} == {
        name: set(keys) for name, keys in LANGUAGE.items()
    }
    lines = text.splitlines()
    for before, line in zip(["", *lines], lines, strict=False):
        # Every key is explained, beside it or above it.
        explained = "  # " in line or before.startswith("# ")
        assert " = " not in line or explained or line.startswith(("title", "#"))
        assert len(line) <= 80, line


@pytest.mark.parametrize(
    ("names", "response"),
    [
        (("a", "y", "b"), "y"),
        (("a", "b", "Target"), "Target"),
        (("a", "RESPONSE", "b"), "RESPONSE"),
        (("a", "dependent", "y"), "dependent"),  # the first of those named so
        (("a", "ya", "response_2"), "a"),  # no name but the whole one
    ],
)
def test_the_response_is_guessed_by_its_name(
    tmp_path: Path, names: tuple[str, ...], response: str
) -> None:
    data = write(tmp_path, {name: numbers(place) for place, name in enumerate(names)})
    _, table = read_back(tmp_path, data)
    assert table.response_name == response
    assert table.names == tuple(name for name in names if name != response)


def test_a_response_without_numbers_is_not_guessed(tmp_path: Path) -> None:
    columns = {"a": numbers(0), "y": ["u"] * ROWS, "target": ["3"] * ROWS, "b": numbers(1)}
    _, table = read_back(tmp_path, write(tmp_path, columns))
    assert (table.response_name, table.names) == ("a", ("b",))


def test_the_draft_tells_its_response_and_how_much_is_to_be_mended(tmp_path: Path) -> None:
    columns = {"y": [*numbers(0)[:-1], "n/d"], "a": numbers(1), "flat": ["2"] * ROWS}
    data = write(tmp_path, {**columns, "b": numbers(2)})
    made = drafted(data)
    assert (made.response, made.to_mend) == ("a", 2)
    assert made.text == draft_design(data) and made.text.count("# To mend") == 2
    clean = drafted(write(tmp_path, {"b": numbers(0), "Y": numbers(1)}))
    assert (clean.response, clean.to_mend) == ("Y", 0)


def test_paths_are_relative_to_where_the_draft_goes(tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    (tmp_path / "designs").mkdir()
    data = write(tmp_path / "data", {"y": numbers(0), "a": numbers(1)})
    text, _ = read_back(tmp_path / "designs", data)
    assert 'file = "../data/panel.csv"' in text
    assert 'file = "panel.csv"' in draft_design(data)
    assert '# time = "..."' in text


@pytest.mark.parametrize(
    ("name", "labels", "found"),
    [
        ("stamp", [f"2020-01-01 {i // 60:02d}:{i % 60:02d}" for i in range(ROWS)], True),
        ("n", [str(i) for i in range(ROWS)], True),
        ("day", [str(20200101 + i) for i in range(ROWS)], True),
        ("Year", [str(1950 + i) for i in range(ROWS)], True),
        ("when", DAYS[::-1], False),
        ("a", [str(i / 7) for i in range(ROWS)], False),
    ],
)
def test_the_time_is_found(tmp_path: Path, name: str, labels: list[str], found: bool) -> None:
    data = write(tmp_path, {name: labels, "y": numbers(0), "x": numbers(1)})
    _, table = read_back(tmp_path, data)
    assert table.time_name == (name if found else None)


def test_a_growing_column_is_no_time_unless_it_looks_like_one(tmp_path: Path) -> None:
    growing = [str(i) for i in range(ROWS)]
    data = write(tmp_path, {"y": numbers(0), "trend": growing, "t": [*growing[:-1], "99"]})
    _, table = read_back(tmp_path, data)
    assert table.time_name == "t" and table.names == ("trend",)


def test_what_has_to_be_mended_is_named_and_worked_around(tmp_path: Path) -> None:
    gaps, mixed, hollow = numbers(2), numbers(3), numbers(3)
    gaps[4], gaps[9], mixed[6] = "NA", "inf", "oops"
    hollow[:30] = [""] * 30
    data = write(
        tmp_path,
        {
            "when": [DAYS[1], DAYS[0], *DAYS[2:]],
            "name": ["n"] * ROWS,
            "flat": ["1"] * ROWS,
            "y": numbers(0),
            "a": numbers(1),
            "copy": numbers(1),
            "gaps": gaps,
            "mixed": mixed,
            "hollow": hollow,
        },
    )
    text, table = read_back(tmp_path, data)
    assert (table.time_name, table.response_name) == (None, "y")
    assert table.names == ("a", "gaps") and table.rows_dropped == 2
    for fragment in (
        f"# To mend: 'when' looks like the time, but row 2 (line 3), '{DAYS[0]}', does not come",
        "# Columns without any number, skipped: 'when', 'name'.",
        "# To mend: constant, left out: 'flat'.",
        "# To mend: 'copy' is left out; identical to 'a'.",
        "# 2 missing or infinite values, most in 'gaps'; this draft drops their rows: 48 of 50 are"
        " left.",
        "# To mend: 'mixed' is left out; row 7 (line 8), 'oops', is not a number.",
        "# To mend: over half of the values missing or infinite, left out: 'hollow'.",
        'missing = "drop-rows"',
    ):
        assert fragment.removeprefix("# ") in text.replace("\n# ", " ")
    assert max(map(len, text.splitlines())) <= 80


@pytest.mark.parametrize("length", [3, 30, 70, 200])
def test_only_what_cannot_be_broken_is_wider_than_a_page(tmp_path: Path, length: int) -> None:
    """Comments wrap; a value of the file, or a single word of a comment, stays whole."""
    names = [f"{'n' * length}{j}" for j in range(3)]
    columns: dict[str, list[str]] = {name: numbers(j) for j, name in enumerate(names)}
    columns |= {f"{'w' * length}{j}": ["word"] * ROWS for j in range(8)}
    text, table = read_back(tmp_path, write(tmp_path, columns, f"{'f' * length}.csv"))
    assert table.names == tuple(names[1:])
    for line in text.splitlines():
        if len(line) > 80:
            words = line.removeprefix("# ").split()
            value = "=" in words and "#" not in line
            assert value or len(words) == 1, line


def test_faults_of_the_header_and_too_few_rows_are_named(tmp_path: Path) -> None:
    path = tmp_path / "p.csv"
    path.write_text("y,,x,x\n" + "".join(f"{i * i},1,{-i},{i % 7}\n" for i in range(20)))
    text = draft_design(path)
    assert "# To mend in the file: column 2 has the name ''." in text
    assert "# To mend in the file: column 4 has a name used before, 'x'." in text
    assert "# To mend: 20 usable rows; at least 30 are needed." in text
    (tmp_path / "d.toml").write_text(text)
    with pytest.raises(InputError, match="column 2 has an empty name"):
        read_table(read_design(tmp_path / "d.toml"))


def test_a_response_alone_is_given_own_lags(tmp_path: Path) -> None:
    text, table = read_back(tmp_path, write(tmp_path, {"y": numbers(0)}))
    assert table.names == () and "own_lags = 5" in text
    text, table = read_back(tmp_path, write(tmp_path, {"y": numbers(0), "flat": ["2"] * ROWS}))
    assert table.names == () and "columns = []" in text


def test_no_draft_of_what_is_no_table(tmp_path: Path) -> None:
    data = write(tmp_path, {"a": ["u"] * ROWS, "b": ["v"] * ROWS})
    with pytest.raises(InputError, match="no numeric column that varies"):
        draft_design(data)
    with pytest.raises(InputError, match="no such data file"):
        draft_design(tmp_path / "none.csv")
    data.write_text("a,b\n")
    with pytest.raises(InputError, match="a header and no rows"):
        draft_design(data)
    data.write_text("a,b\n1,2\n")
    with pytest.raises(InputError, match=r"csv: 1 row, too few; at least 30 rows are needed$"):
        draft_design(data)
    data.write_text("a,b\n" + "1,2\n" * 29)
    with pytest.raises(InputError, match=r"csv: 29 rows, too few; at least 30"):
        draft_design(data)


PLAIN = st.text(
    st.characters(blacklist_categories=("Cs", "Cc", "Zl", "Zp")), min_size=1, max_size=12
).map(str.strip)


@settings(
    max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    names=st.lists(PLAIN | st.sampled_from(['"', "\\", "x\\n", "[a]*", "#", "'"]),
                   min_size=3, max_size=3, unique=True).filter(all)
)  # fmt: skip
def test_any_name_is_escaped(tmp_path: Path, names: list[str]) -> None:
    columns = {name: numbers(place) for place, name in enumerate(names)}
    data = write(tmp_path, {**columns, 'flat \\ "': ["1"] * ROWS})
    _, table = read_back(tmp_path, data)
    named = [name for name in names if name.lower() in ("y", "response", "target", "dependent")]
    response = [*named, names[0]][0]
    assert table.response_name == response
    assert table.names == tuple(name for name in names if name != response)
