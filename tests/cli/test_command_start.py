"""Starting the command: help, version, what is imported; drafting a design and vetting it."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path

import numpy as np
import pytest

from scantling.cli.commands import commands
from scantling.cli.main import run

Start = Callable[..., subprocess.CompletedProcess[str]]


def test_installed_command_answers(scantling: Start) -> None:
    done = scantling("--help")
    assert done.returncode == 0 and done.stderr == ""
    assert "Exit status: 0 within budget" in done.stdout.replace("\n", " ")
    assert "vet" in done.stdout and "draft" in done.stdout
    assert all(len(line) <= 80 for line in done.stdout.split("\n"))


def test_module_answers_as_the_command_does(scantling: Start) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "scantling", "vet", "no such.toml"],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    installed = scantling("vet", "no such.toml")
    assert (done.returncode, done.stdout, done.stderr) == (2, "", installed.stderr)
    assert installed.returncode == 2 and "no such.toml" in installed.stderr


@pytest.mark.parametrize("name", sorted(commands.commands))
@pytest.mark.parametrize("option", ["--help", "-h"])
def test_help_of_every_command(name: str, option: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run([name, option]) == 0
    printed, message = capsys.readouterr()
    assert message == "" and printed.startswith(f"Usage: scantling {name} ")
    options = [o for p in commands.commands[name].params for o in p.opts if o.startswith("--")]
    assert all(o in printed for o in options)
    assert all(len(line) <= 80 for line in printed.split("\n"))


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["--version"]) == 0
    assert capsys.readouterr() == (f"scantling {version('scantling')}\n", "")


HEAVY = ("numpy", "scipy", "pandas", "statsmodels", "sklearn", "arch", "rich")


def test_nothing_heavy_is_imported_before_it_is_needed() -> None:
    code = (
        "import sys, scantling.cli.main; from scantling.cli.main import run; run(['vet', '-h']);"
        f"sys.exit(','.join(name for name in {HEAVY!r} if name in sys.modules) or 0)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.stdout.startswith("Usage: ")
    assert done.returncode == 0 and done.stderr == "", done.stderr


def draft_table(path: Path, gap: bool) -> None:
    rng = np.random.default_rng(6)
    lines = ["date,level,rent,idle"]
    for month in range(60):
        values = [f"{value:.6f}" for value in rng.standard_normal(3)]
        if gap and month == 7:
            values[1] = ""
        lines.append(f"{2015 + month // 12}-{month % 12 + 1:02d}," + ",".join(values))
    path.write_text("\n".join(lines) + "\n")


@pytest.mark.parametrize("gap", [False, True])
def test_draft_can_be_vetted_as_it_is(
    gap: bool,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    valid_document: Callable[[str], dict],
) -> None:
    (tmp_path / "tables").mkdir()
    draft_table(tmp_path / "tables" / "rents.csv", gap)
    monkeypatch.chdir(tmp_path)
    assert run(["draft", "tables/rents.csv"]) == 0
    said, message = capsys.readouterr()
    assert said.startswith("wrote rents.toml; ")
    assert message == "response taken: 'level', a guess\n"
    # The default is 400 replicates; numbers do not matter here.
    status = run(["vet", "rents.toml", "--replicates", "50", "--out", "out", "--json"])
    document = valid_document(capsys.readouterr().out)
    assert status in (0, 3, 4, 5)
    assert document["design"]["response"] == "level"
    assert document["design"]["time_ordered"] is True
    assert document["design"]["rows"] == (59 if gap else 60)
    assert document["design"]["rows_dropped"] == (1 if gap else 0)


def test_draft_never_overwrites(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    draft_table(tmp_path / "rents.csv", False)
    monkeypatch.chdir(tmp_path)
    (tmp_path / "rents.toml").write_text("mine\n")
    assert run(["draft", "rents.csv"]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    assert "rents.toml: exists" in message
    assert (tmp_path / "rents.toml").read_text() == "mine\n"
    assert run(["draft", "rents.csv", "--out", "other.toml"]) == 0
    written = (tmp_path / "other.toml").read_text()
    capsys.readouterr()
    assert run(["draft", "rents.csv", "--out", "-"]) == 0
    assert capsys.readouterr() == (written, "response taken: 'level', a guess\n")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["other.toml", "rents.csv", "rents.toml"]


def test_draft_into_a_folder_that_is_not_there(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    draft_table(tmp_path / "rents.csv", False)
    target = tmp_path / "absent" / "d.toml"
    assert run(["draft", str(tmp_path / "rents.csv"), "--out", str(target)]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1 and str(target) in message
