"""Several responses in one design: reports as of designs of their own, shared work done once."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scantling.cli.main import run
from scantling.core.streams import worker_pool
from scantling.design.parse import read_design, read_designs
from scantling.design.table import read_tables
from scantling.law.diagnosed import Shared, diagnosed
from scantling.pipeline import diagnose_each
from scantling.report.series_document import design_diagnosis_json

STATUS = {"within budget": 0, "borderline": 3, "over budget": 4, "no budget": 5}
RESPONSES = ("dues", "berth/9", "tonnage")
ROWS = 130
REST = """
[target]
relevant = 1
smallest_effect = 0.6
[simulation]
replicates = 50
seed = 4
"""
LAGGED = "[expand]\npowers = 2\nlags = 1\ncontemporaneous = true\nown_lags = 2\n"


def table(rows: int = ROWS, columns: int = 4) -> dict[str, list[str]]:
    """Three responses, the second heavy-tailed, and columns of which two matter."""
    rng = np.random.default_rng(8)
    x = rng.standard_normal((rows, columns))
    values = {
        "dues": 1.5 * x[:, 0] + rng.standard_normal(rows),
        "x0": x[:, 0],
        "berth/9": x[:, 1] + rng.standard_t(1.4, rows) ** 3,
        "tonnage": 0.5 * x[:, 1] + rng.standard_t(4, rows),
        **{f"x{j}": x[:, j] for j in range(1, columns)},
    }
    return {name: [repr(float(value)) for value in column] for name, column in values.items()}


def write_table(folder: Path, columns: dict[str, list[str]]) -> None:
    head = ",".join(["day", *columns])
    rows = zip(*columns.values(), strict=True)
    body = "\n".join(f"{day},{','.join(row)}" for day, row in enumerate(rows, start=1))
    (folder / "t.csv").write_text(f"{head}\n{body}\n", encoding="utf-8")


def design(response: str | tuple[str, ...], data: str = "", expand: str = LAGGED) -> str:
    named = json.dumps(response if isinstance(response, str) else list(response))
    head = 'title = "Dues"\n[data]\nfile = "t.csv"\ntime = "day"\n'
    return f"{head}response = {named}\n{data}\n{expand}{REST}"


def without(document: dict[str, Any], *keys: str) -> dict[str, Any]:
    return {key: value for key, value in document.items() if key not in keys}


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """One run of `scantling vet` on several responses."""

    folder: Path
    """Holds the design, d.toml, and its table."""
    out: Path
    """Where it wrote."""
    status: int
    """Its exit status."""
    printed: str
    """What it printed."""
    documents: dict[str, dict[str, Any]]
    """The JSON twin of each response."""


STEMS = {"dues": "d-dues", "berth/9": "d-berth_9", "tonnage": "d-tonnage"}


@pytest.fixture(scope="module")
def several(
    tmp_path_factory: pytest.TempPathFactory, valid_document: Callable[[str], dict[str, Any]]
) -> Run:
    import contextlib
    import io

    folder = tmp_path_factory.mktemp("several")
    write_table(folder, table())
    (folder / "d.toml").write_text(design(RESPONSES))
    out, printed = folder / "out", io.StringIO()
    with contextlib.redirect_stdout(printed):
        status = run(["vet", str(folder / "d.toml"), "--out", str(out)])
    documents = {
        name: valid_document((out / f"{stem}.json").read_text("utf-8"))
        for name, stem in STEMS.items()
    }
    return Run(
        folder=folder, out=out, status=status, printed=printed.getvalue(), documents=documents
    )


def test_one_report_each_and_a_table(several: Run) -> None:
    names = {path.name for path in several.out.iterdir()}
    assert names == {"d.txt", *(s + e for s in STEMS.values() for e in (".json", ".txt"))}
    summary = (several.out / "d.txt").read_text("utf-8")
    texts = [(several.out / f"{stem}.txt").read_text("utf-8") for stem in STEMS.values()]
    head, *rest = several.printed.split("\n=====")
    assert head == summary
    assert [part.partition("\n\n")[2] for part in rest] == texts
    assert [part.partition(" =")[0] for part in rest] == [
        f" {place} of 3: {name}" for place, name in enumerate(RESPONSES, start=1)
    ]
    assert max(map(len, several.printed.split("\n"))) <= 80
    assert summary.startswith("scantling: Dues (3 responses)\n")
    assert [text.partition("\n")[0] for text in texts] == [
        f"scantling: Dues: {name}" for name in RESPONSES
    ]


def test_the_table_says_what_the_reports_say(several: Run) -> None:
    lines = (several.out / "d.txt").read_text("utf-8").split("\n")
    for name, document in several.documents.items():
        (line,) = [line for line in lines if line.startswith(name)]
        budget, answer = document["budget"], document["verdict"]["answer"]
        assert answer.upper() in line
        assert f" {document['design']['columns']} " in line
        if answer != "no budget" and budget["allowed"]["columns"] is not None:
            assert f" {budget['allowed']['columns']}" in line
        assert (budget["binding"] or " - ") in line


def test_the_status_is_the_most_severe(several: Run) -> None:
    answers = [document["verdict"]["answer"] for document in several.documents.values()]
    assert len(set(answers)) > 1
    assert several.status == max(STATUS[answer] for answer in answers)
    worst = max(answers, key=STATUS.__getitem__)
    assert several.printed.split("\n")[1].startswith(f"Verdict     {worst.upper()}, the most")


def test_numbers_are_those_of_a_design_of_its_own(several: Run, tmp_path: Path) -> None:
    name = "berth/9"  # the others: below, in a shorter list
    write_table(tmp_path, table())
    (tmp_path / "own.toml").write_text(design(name, 'columns = ["x*"]'))
    status = run(["vet", str(tmp_path / "own.toml"), "--out", str(tmp_path / "o"), "--quiet"])
    own = json.loads((tmp_path / "o" / "own.json").read_text("utf-8"))
    assert status == STATUS[own["verdict"]["answer"]]
    ours = several.documents[name]
    assert without(ours, "title", "receipt") == without(own, "title", "receipt")
    assert list(ours) == list(own)


def test_one_alone_is_computed_again(
    several: Run, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """By the command in its receipt: the same file, and no other."""
    receipt = several.documents["berth/9"]["receipt"]
    assert receipt["command"] == "scantling vet d.toml --response berth/9"
    arguments = ["vet", str(several.folder / "d.toml"), "--response", "berth/9"]
    run([*arguments, "--out", str(tmp_path), "--json"])
    printed = capsys.readouterr().out
    assert sorted(path.name for path in tmp_path.iterdir()) == ["d-berth_9.json", "d-berth_9.txt"]
    again = json.loads(printed)
    for document in (again, receipt_free := json.loads(json.dumps(several.documents["berth/9"]))):
        document["receipt"].pop("wall_clock")
    assert again == receipt_free


def test_json_is_a_list_in_the_order_of_the_design(
    several: Run, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    two = ("tonnage", "dues")
    write_table(tmp_path, table())
    (tmp_path / "e.toml").write_text(design(two, 'columns = ["x*"]'))
    out = tmp_path / "out"
    status = run(["vet", str(tmp_path / "e.toml"), "--out", str(out), "--json", "--seed", "4"])
    printed = capsys.readouterr().out
    found = json.loads(printed)
    assert [document["design"]["response"] for document in found] == list(two)
    for document, name in zip(found, two, strict=True):
        # Each stands in the list as in its file, so that either can be compared as text.
        assert (out / f"e-{name}.json").read_text("utf-8").rstrip("\n") in printed
        assert without(document, "receipt") == without(several.documents[name], "receipt")
        assert document["receipt"]["command"] == f"scantling vet e.toml --response {name} --seed 4"
    assert status == max(STATUS[document["verdict"]["answer"]] for document in found)


def diagnoses(folder: Path, text: str) -> list[dict[str, Any]]:
    (folder / "v.toml").write_text(text)
    found = diagnose_each(read_designs(folder / "v.toml"))
    return [json.loads(design_diagnosis_json(one)) for one in found]


def gaps(name: str) -> dict[str, list[str]]:
    columns = table()
    columns[name][3] = columns[name][70] = ""
    return columns


VARIANTS = [
    ("lags", table(), "", ["x*"] * 2, LAGGED),
    ("as they stand", table(), 'columns = ["x*"]', ["x*"] * 2, ""),
    ("clipped", table(), "", ["x*"] * 2, '[expand]\ntransform = "clip"\nown_lags = 1\n'),
    ("only own lags", table(), "columns = []", [None] * 2, "[expand]\nown_lags = 3\n"),
    ("a gap in one", gaps("berth/9"), 'missing = "drop-rows"', ["x*"] * 2, LAGGED),
    (
        "a response as a column", table(), 'columns = ["*", "tonnage"]',
        ['x*", "tonnage', "x*"], LAGGED,
    ),
]  # fmt: skip


@pytest.mark.parametrize(
    ("columns", "data", "alone", "expand"), [v[1:] for v in VARIANTS], ids=[v[0] for v in VARIANTS]
)
def test_sharing_changes_no_number(
    columns: dict[str, list[str]],
    data: str,
    alone: list[str | None],
    expand: str,
    tmp_path: Path,
) -> None:
    two = ("dues", "tonnage") if "tonnage" in data else ("dues", "berth/9")
    others = set(RESPONSES) - set(two)
    write_table(tmp_path, {name: cells for name, cells in columns.items() if name not in others})
    together = diagnoses(tmp_path, design(two, data, expand))
    rest = data if "missing" in data else ""
    for name, pattern, ours in zip(two, alone, together, strict=True):
        taken = "columns = []" if pattern is None else f'columns = ["{pattern}"]'
        (own,) = diagnoses(tmp_path, design(name, f"{taken}\n{rest}", expand))
        assert without(ours, "title", "receipt") == without(own, "title", "receipt")
        assert ours["title"] == f"Dues: {name}" and own["title"] == "Dues"


def test_a_gap_costs_the_other_responses_no_row(tmp_path: Path) -> None:
    write_table(tmp_path, gaps("berth/9"))
    (tmp_path / "d.toml").write_text(design(RESPONSES, 'missing = "drop-rows"'))
    tables = read_tables(read_designs(tmp_path / "d.toml"))
    assert [one.rows_dropped for one in tables] == [0, 2, 0]
    assert tables[0].values is tables[2].values
    assert tables[1].values.shape == (ROWS - 2, 4)


def test_responses_are_no_columns_unless_named(tmp_path: Path) -> None:
    write_table(tmp_path, table())
    for data, expected in (
        ("", [("x0", "x1", "x2", "x3")] * 3),
        ('columns = ["x1", "ton*", "x2"]', None),
        (
            'columns = ["x1", "tonnage"]',
            [("tonnage", "x1"), ("tonnage", "x1"), ("x1",)],
        ),
    ):
        (tmp_path / "d.toml").write_text(design(RESPONSES, data))
        if expected is None:
            assert run(["vet", str(tmp_path / "d.toml"), "--out", str(tmp_path / "o")]) == 2
            continue
        tables = read_tables(read_designs(tmp_path / "d.toml"))
        assert [one.names for one in tables] == expected
    # Named, it brings the lags that [expand] states; its own are own_lags.
    (tmp_path / "d.toml").write_text(design(RESPONSES, 'columns = ["x1", "tonnage"]'))
    documents = diagnose_each(read_designs(tmp_path / "d.toml"))
    assert {"tonnage.lag1", "dues.lag1", "dues.lag2"} <= set(documents[0].read.names)
    assert [n for n in documents[2].read.names if "tonnage" in n] == [
        "tonnage.lag1",
        "tonnage.lag2",
    ]


@pytest.mark.parametrize(("own_lags", "structures"), [(0, 1), (2, 3)])
def test_shared_work_is_done_once(
    own_lags: int, structures: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The table read, raw columns expanded and diagnosed once; of own lags, only what is theirs."""
    from scantling.design import expand as expand_module
    from scantling.design import table as table_module
    from scantling.diagnostics import column_findings as findings_module

    done: Counter[str] = Counter()
    widths: list[int] = []

    def counted(module: Any, name: str) -> None:
        kept = getattr(module, name)

        def call(*args: Any, **named: Any) -> Any:
            done[name] += 1
            if name == "series_group":
                widths.append(args[0].shape[1])
            return kept(*args, **named)

        monkeypatch.setattr(module, name, call)

    counted(table_module, "read_columns")
    counted(table_module, "file_sha256")
    counted(expand_module, "_transformed")
    counted(findings_module, "series_group")
    counted(findings_module, "column_structure")
    write_table(tmp_path, table())
    expand = f"[expand]\nlags = 2\ncontemporaneous = true\nown_lags = {own_lags}\n"
    diagnoses(tmp_path, design(RESPONSES, "", expand))
    assert widths == [12, *([own_lags] * 3 if own_lags else [])]
    assert done == {
        "read_columns": 1,
        "file_sha256": 1,
        "_transformed": 1,
        "series_group": len(widths),
        "column_structure": structures,
    }


def test_what_is_left_for_the_next_response_fits_or_is_not_used(tmp_path: Path) -> None:
    """Findings of other rows or columns are computed afresh, not taken over."""
    write_table(tmp_path, gaps("berth/9"))
    (tmp_path / "d.toml").write_text(design(RESPONSES, 'missing = "drop-rows"'))
    designs = read_designs(tmp_path / "d.toml")
    tables = read_tables(designs)
    left: list[Shared] = []
    with worker_pool(1):
        for one, its in zip(designs, tables, strict=True):
            found = diagnosed(one, its, lambda stage: None, left[-1] if left else None)
            left.append(found.shared)
            assert found.columns.values.shape[0] == len(its.response) - 2
    assert left[0].raw is not left[1].raw and left[1].alone is not left[0].alone


def test_three_take_less_than_three_times_one(
    several: Run, scantling: Callable[..., Any], tmp_path: Path
) -> None:
    """Of processor time, which other work on the machine changes little."""
    resource = pytest.importorskip("resource")

    def spent(path: Path) -> float:
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        assert scantling("diagnose", path).returncode == 0
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        return float(after.ru_utime - before.ru_utime)

    write_table(tmp_path, table())
    (tmp_path / "d.toml").write_text(design("tonnage", 'columns = ["x*"]'))
    assert spent(several.folder / "d.toml") < 3 * spent(tmp_path / "d.toml")


def refused(folder: Path, text: str, capsys: pytest.CaptureFixture[str], *options: str) -> str:
    (folder / "d.toml").write_text(text)
    assert run(["vet", str(folder / "d.toml"), "--out", str(folder / "out"), *options]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    assert sorted(path.name for path in folder.iterdir()) == ["d.toml", "t.csv"]
    return message


@pytest.mark.parametrize(
    ("responses", "change", "options", "parts"),
    [
        (("dues", "none"), {}, (), ["t.csv: no column 'none', named by [data] response"]),
        (("dues", "dues"), {}, (), ["['dues', 'dues']", "a list of names that differ"]),
        (("dues", "day"), {}, (), ["time = 'day': also a response"]),
        (("dues", "b 9", "b/9"), {"b 9": "x2", "b/9": "x3"}, (),
         ["'b 9' and 'b/9' would both be written as d-b_9.json"]),
        (("dues", "twin"), {"twin": "dues"}, (), ["responses 'dues' and 'twin' are identical"]),
        (("dues", "words"), {"words": "n/k"}, (), ["'words'", "'n/k'", "not a number"]),
        (("dues", "flat"), {"flat": "2.5"}, (), ["the response 'flat' is constant (2.5)"]),
        (("dues", "hole"), {"hole": "hole"}, (), ["1 missing", "'hole'", "row 6 (line 7)"]),
        (("dues", "line"), {"line": "line"}, (), ["explain 'line' exactly"]),
        (RESPONSES, {}, ("--response", "tonage"),
         ["'tonage' is no response of this design", "nearest: 'tonnage'"]),
        ("dues", {}, ("--response", "x1"), ["there is only 'dues'"]),
    ],
)  # fmt: skip
def test_refusals_of_one_are_refusals_of_all(
    responses: str | tuple[str, ...],
    change: dict[str, str],
    options: tuple[str, ...],
    parts: list[str],
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Before anything is written."""
    columns = table()
    for name, what in change.items():
        if what in columns:
            columns[name] = list(columns[what]) if what == "dues" else columns.pop(what)
        elif what == "hole":
            columns[name] = [*columns["x3"][:5], "", *columns["x3"][6:]]
        elif what == "line":
            columns[name] = [repr(2 * float(value) + 1) for value in columns["x1"]]
        else:
            columns[name] = [what] * ROWS
    write_table(tmp_path, columns)
    text = design(responses, expand="" if "line" in change else LAGGED)
    message = refused(tmp_path, text, capsys, *options)
    assert all(part in message for part in parts), message


def test_a_list_of_one_is_one(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_table(tmp_path, table())
    (tmp_path / "d.toml").write_text(design(("dues",), 'columns = ["x*"]', ""))
    assert read_design(tmp_path / "d.toml").title == "Dues"
    run(["diagnose", str(tmp_path / "d.toml"), "--json"])
    assert json.loads(capsys.readouterr().out)["receipt"]["command"] == "scantling diagnose d.toml"


def test_diagnose_prints_one_after_another(
    several: Run, capsys: pytest.CaptureFixture[str]
) -> None:
    path = str(several.folder / "d.toml")
    assert run(["diagnose", path]) == 0
    text = capsys.readouterr().out
    assert run(["diagnose", path, "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    for place, (name, document) in enumerate(zip(RESPONSES, found, strict=True), start=1):
        assert f"===== {place} of 3: {name} =" in text
        assert document["diagnosis"] == several.documents[name]["diagnosis"]
        assert document["receipt"]["command"] == f"scantling diagnose d.toml --response {name}"
    assert run(["diagnose", path, "--response", "tonnage"]) == 0
    alone = capsys.readouterr().out
    assert "=====" not in alone and alone.startswith("scantling diagnose: Dues: tonnage\n")
    assert run(["diagnose", str(several.folder / "t.csv"), "--response", "dues"]) == 2
    assert "goes with a design" in capsys.readouterr().err


def test_a_report_of_several_is_replayed(several: Run, capsys: pytest.CaptureFixture[str]) -> None:
    report = several.out / "d-tonnage.json"
    assert run(["replay", str(report)]) == 0, capsys.readouterr()
