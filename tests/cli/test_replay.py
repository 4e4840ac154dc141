"""`scantling replay`: agreement, disagreement by key, and what is refused."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from scantling.cli.comparison import differences
from scantling.cli.main import run


@pytest.fixture(scope="module")
def saved(small: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A report in a folder below its design's."""
    folder = tmp_path_factory.mktemp("replayed")
    for name in ("small.toml", "small.csv"):
        shutil.copy(small.with_name(name), folder / name)
    arguments = ["--seed", "7", "--replicates", "60", "--quiet", "--out", str(folder / "reports")]
    assert run(["vet", str(folder / "small.toml"), *arguments]) in (0, 3, 4, 5)
    return folder / "reports" / "small.json"


def changed(saved: Path, name: str, change: Callable[[dict[str, Any]], object]) -> Path:
    """The report with something changed."""
    found = json.loads(saved.read_text("utf-8"))
    change(found)
    path = saved.with_name(name)
    path.write_text(json.dumps(found), "utf-8")
    return path


def test_a_report_agrees_with_itself(saved: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["replay", str(saved)]) == 0
    printed, message = capsys.readouterr()
    assert printed == f"{saved}: agrees, every key the same\n" and message == ""


def test_a_changed_figure_is_named(saved: Path, capsys: pytest.CaptureFixture[str]) -> None:
    def change(found: dict[str, Any]) -> None:
        found["budget"]["risk_at_design"]["value"] += 0.01
        found["verdict"]["answer"] = "no budget"

    path = changed(saved, "changed.json", change)
    assert run(["replay", str(path)]) == 6
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == f"{path}: disagrees in 2 keys"
    assert lines[1].startswith("  budget.risk_at_design.value: ")
    assert lines[2].startswith("  verdict.answer: 'no budget', now '")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda d: d.update(schema="other/1"), "schema: scantling-report/1 is needed; found 'oth"),
        (lambda d: d.pop("receipt"), "receipt: command and inputs are needed"),
        (lambda d: d["receipt"].update(inputs={"small.toml": 3}), "receipt: command and inputs"),
        (
            lambda d: d["receipt"].update(command="scantling budget --rows 5"),
            "receipt: command: one of scantling vet is needed",
        ),
        (
            lambda d: d["receipt"].update(command="scantling vet small.toml --odd"),
            "receipt: command: one of scantling vet is needed",
        ),
        (lambda d: d["receipt"].update(command="scantling vet 'x"), "receipt: command: one of"),
        (
            lambda d: d["receipt"]["inputs"].update({"small.csv": "0" * 64}),
            "small.csv: changed since refused.json was made",
        ),
        (
            lambda d: d["receipt"].update(inputs={"../../other.toml": "0" * 64}),
            "its design is not beside it, in a folder above or in one beside its folder; --design",
        ),
    ],
)
def test_what_cannot_be_replayed_is_refused(
    saved: Path,
    capsys: pytest.CaptureFixture[str],
    change: Callable[[dict[str, Any]], object],
    message: str,
) -> None:
    path = changed(saved, "refused.json", change)
    assert run(["replay", str(path)]) == 2
    printed, line = capsys.readouterr()
    assert printed == "" and line.count("\n") == 1 and message in line


def test_a_design_in_a_folder_beside_the_reports_is_found(
    saved: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Of those of its name, in order of the folders, the one with the receipt's checksum."""
    report = tmp_path / "reports" / "small.json"
    designs = [tmp_path / name / "small.toml" for name in ("attempts", "examples", "zones")]
    for folder in (report.parent, *(path.parent for path in designs)):
        folder.mkdir()
    shutil.copy(saved, report)
    for path in designs:
        shutil.copy(saved.parents[1] / "small.toml", path)
        shutil.copy(saved.parents[1] / "small.csv", path.parent)
    designs[0].write_text(designs[0].read_text() + "# a remark\n")
    assert run(["replay", str(report)]) == 0
    printed, message = capsys.readouterr()
    assert printed == f"{report}: agrees, every key the same\n"
    assert message == f"design taken: {designs[1]}\n"
    assert run(["replay", str(report), "--quiet"]) == 0
    assert capsys.readouterr() == ("", "")
    # Where none is the one, the first is named, and why not; folders two levels away are not read.
    for path in designs[1:]:
        path.unlink()
    assert run(["replay", str(report), "--quiet"]) == 2
    assert f"{designs[0]}: changed since small.json was made" in capsys.readouterr().err
    designs[0].rename(tmp_path / "attempts" / "other.toml")
    (tmp_path / "zones" / "deep").mkdir()
    shutil.copy(saved.parents[1] / "small.toml", tmp_path / "zones" / "deep")
    assert run(["replay", str(report), "--quiet"]) == 2
    assert "small.toml is not beside it, in a folder above or in" in capsys.readouterr().err


def test_no_report_and_no_design(
    saved: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "text.json").write_text("no report")
    assert run(["replay", str(tmp_path / "text.json")]) == 2
    assert "not a JSON report" in capsys.readouterr().err
    assert run(["replay", str(tmp_path / "none.json")]) == 2
    assert "cannot be read (No such file" in capsys.readouterr().err
    alone = tmp_path / "a" / "b" / "c" / "small.json"
    alone.parent.mkdir(parents=True)
    shutil.copy(saved, alone)
    assert run(["replay", str(alone)]) == 2
    assert "small.toml is not beside it" in capsys.readouterr().err
    design = str(saved.parents[1] / "small.toml")
    assert run(["replay", str(alone), "--design", design, "--quiet"]) == 0
    assert capsys.readouterr() == ("", "")


BASE: dict[str, Any] = {
    "schema": "scantling-report/1",
    "power": {"value": 0.80, "low": 0.77, "high": 0.83},
    "rows": 300,
    "reasons": ["risk 0.05 at 300 columns"],
    "receipt": {"version": "1", "libraries": {"numpy": "2"}, "seed": 1, "wall_clock": {"s": 1}},
}


def compared(elsewhere: bool, **changes: Any) -> tuple[bool, str]:
    """Agreement of the base with a copy that has other values."""
    fresh = json.loads(json.dumps(BASE)) | changes
    fresh["receipt"]["wall_clock"] = {"s": 2}
    if elsewhere:
        fresh["receipt"]["libraries"] = {"numpy": "3"}
    found = differences(BASE, fresh)
    assert found.agree is (not found.lines)
    return found.agree, found.sentence


def test_tolerances() -> None:
    """A 90 % interval 0.06 wide has a standard error of 0.0182: two are 0.0365."""
    near = {"value": 0.8 + 5e-7, "low": 0.77, "high": 0.83}
    within = {"value": 0.83, "low": 0.80, "high": 0.86}
    beyond = {"value": 0.84, "low": 0.81, "high": 0.87}
    assert compared(False) == (True, "agrees, every key the same")
    assert compared(False, power=near) == (True, "agrees to 1e-06")
    assert compared(False, power=within)[0] is False
    assert compared(True, power=within)[0] is True
    assert compared(True, power=beyond)[0] is False
    assert compared(True, rows=301)[0] is False  # not simulated: no allowance
    assert compared(False, reasons=["risk 0.06 at 290 columns"])[0] is False
    assert compared(True, reasons=["risk 0.06 at 290 columns"])[0] is True
    assert compared(True, reasons=["no risk"])[0] is False
    assert compared(True, reasons=[])[0] is False
    assert compared(True, rows=None)[0] is False
    assert compared(False, extra=1) == (False, "disagrees in 1 key")
    assert differences(BASE, {k: v for k, v in BASE.items() if k != "rows"}).lines == (
        "rows: 300, now nothing",
    )
