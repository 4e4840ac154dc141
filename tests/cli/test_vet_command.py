"""`scantling vet` from end to end: status, first screen, files, receipt, repeatability."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scantling.cli.main import run
from scantling.cli.output import reserved_folder

STATUS = {"within budget": 0, "borderline": 3, "over budget": 4, "no budget": 5}
Start = Callable[..., subprocess.CompletedProcess[str]]
Parse = Callable[[str], dict[str, Any]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Vetted:
    """One run of the installed command."""

    done: subprocess.CompletedProcess[str]
    """The finished process."""
    out: Path
    """Where it wrote."""
    document: dict[str, Any]
    """The JSON twin, valid against the schema."""


@pytest.fixture(scope="module")
def vetted(
    harbour: Path,
    scantling: Start,
    valid_document: Parse,
    tmp_path_factory: pytest.TempPathFactory,
) -> Vetted:
    out = tmp_path_factory.mktemp("vetted") / "made" / "on the way"
    done = scantling("vet", harbour, "--out", out)
    return Vetted(
        done=done, out=out, document=valid_document((out / "harbour.json").read_text("utf-8"))
    )


@pytest.fixture(scope="module")
def twin(
    harbour: Path,
    scantling: Start,
    valid_document: Parse,
    tmp_path_factory: pytest.TempPathFactory,
) -> Vetted:
    """The same run with two workers and JSON on stdout."""
    out = tmp_path_factory.mktemp("twin")
    done = scantling("vet", "--workers", "2", "--json", "--out", out, harbour)
    return Vetted(
        done=done, out=out, document=valid_document((out / "harbour.json").read_text("utf-8"))
    )


def test_status_is_the_verdict(vetted: Vetted) -> None:
    answer = vetted.document["verdict"]["answer"]
    assert vetted.done.returncode == STATUS[answer]
    # What covers an answer is said of those answers alone that it could speak for.
    cover = vetted.document["verdict"]["cover"]
    ending = f" (cover: {cover})" if answer in ("within budget", "borderline") else ""
    assert vetted.done.stdout.split("\n")[1] == f"Verdict     {answer.upper()}{ending}"
    # Columns and errors share a volatile, heavy-tailed path: this cannot be within budget.
    assert vetted.done.returncode in (3, 4, 5)
    assert vetted.done.stderr == ""


def test_first_twelve_lines_say_what_has_to_be_decided(vetted: Vetted) -> None:
    head = vetted.done.stdout.split("\n")[:12]
    budget = vetted.document["budget"]
    found = {label: line for line in head if (label := line[:12].strip())}
    for label in ("Verdict", "Because", "Columns", "Limits", "Rows", "Remedies"):
        assert found[label][12:].strip(), label
    assert found["Columns"].startswith("Columns     25 asked for; ")
    if budget["allowed"]["high"] == 0:
        assert found["Columns"].endswith("none allowed, 1 being the fewest tried")
    elif vetted.document["verdict"]["answer"] != "no budget":
        assert f"{budget['allowed']['columns']} allowed" in found["Columns"]
        assert "90 % band" in found["Columns"]
    if vetted.document["verdict"]["answer"] != "no budget":
        named, _, rest = found["Limits"][12:].partition(" bind")
        assert named.startswith(budget["binding"])
        assert named.endswith(f" {budget[budget['binding']]['columns']}")
        assert rest.startswith("s; " if " and " not in named else "; ")
    for name in ("noise", "signal", "stability"):
        assert name in found["Limits"]
    assert found["Rows"].startswith("Rows        304 used")
    first = vetted.document["remedies"][0]
    if first["answer"] == "within budget":
        outcome = f"within, all {first['columns']}"
    else:
        low = f" (low end {first['low']})" if first["low"] < first["allowed_columns"] else ""
        outcome = (
            f"{first['answer'].split()[0]}, {first['allowed_columns']} of {first['columns']}{low}"
        )
    # A name that is too long is cut, never what comes of it.
    name, room = f"1. {first['remedy']}", 80 - 12 - len(f": {outcome}")
    name = name if len(name) <= room else name[: room - 3] + "..."
    assert found["Remedies"] == f"Remedies    {name}: {outcome}"
    assert head[0] == "scantling: Harbour dues, heavy tails"


def test_piped_text_is_narrow_plain_ascii(vetted: Vetted) -> None:
    text = vetted.done.stdout
    assert text.isascii() and "\x1b" not in text and "\t" not in text
    assert text.endswith("\n") and not text.endswith("\n\n")
    wide = [line for line in text.split("\n") if len(line) > 80]
    assert not wide, "\n".join(wide)
    assert all(line == line.rstrip() for line in text.split("\n"))
    assert "nan" not in text.lower().split()
    assert "None" not in text and "np.float64" not in text


def test_files_hold_what_was_printed(vetted: Vetted, twin: Vetted) -> None:
    assert sorted(path.name for path in vetted.out.iterdir()) == ["harbour.json", "harbour.txt"]
    assert (vetted.out / "harbour.txt").read_text("utf-8") == vetted.done.stdout
    assert (twin.out / "harbour.json").read_text("utf-8") == twin.done.stdout
    assert twin.done.stderr == ""
    # Files are as readable as any other, whatever the file they were written beside.
    mask = os.umask(0)
    os.umask(mask)
    for path in vetted.out.iterdir():
        assert path.stat().st_mode & 0o777 == 0o666 & ~mask


def test_workers_do_not_change_a_byte(vetted: Vetted, twin: Vetted) -> None:
    texts = []
    for run_ in (vetted, twin):
        document = json.loads((run_.out / "harbour.json").read_text("utf-8"))
        assert set(document["receipt"].pop("wall_clock")) == {"seconds", "finished"}
        texts.append(json.dumps(document, indent=2))
    assert texts[0] == texts[1]
    assert vetted.done.returncode == twin.done.returncode
    # And the key order is the contract's, so that files can be compared as text.
    assert list(vetted.document) == [
        "schema", "title", "design", "diagnosis", "law", "budget", "stress", "remedies",
        "verdict", "cautions", "receipt",
    ]  # fmt: skip


def test_receipt_names_inputs_and_leaves_out_what_changes_nothing(
    vetted: Vetted, twin: Vetted, harbour: Path
) -> None:
    import hashlib

    for run_ in (vetted, twin):
        receipt = run_.document["receipt"]
        assert receipt["command"] == "scantling vet harbour.toml"
        assert receipt["seed"] == 3
        assert receipt["inputs"] == {
            path.name: hashlib.sha256(path.read_bytes()).hexdigest()
            for path in (harbour, harbour.with_suffix(".csv"))
        }
        assert receipt["libraries"]["numpy"] == np.__version__


def test_diagnosis_of_a_known_process(vetted: Vetted) -> None:
    """t(3) innovations on a GARCH path, volatility shared by columns and response."""
    diagnosis = vetted.document["diagnosis"]
    assert diagnosis["errors"]["tail"]["finite"] is True
    assert diagnosis["errors"]["tail"]["low"] < 3
    assert vetted.document["law"]["volatility"]["kind"] in ("garch", "gjr")
    assert vetted.document["budget"]["penalty_ratio"] > 1.05
    assert set(vetted.document["design"]["pilot_columns"]) >= {"berth_1", "berth_2"}
    assert {run_["law"] for run_ in vetted.document["stress"]} in (
        set(),
        {"fitted", "twin", "normal-volatility"},
    )


def test_quiet_run_over_old_files(
    small: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], valid_document: Parse
) -> None:
    for name in ("small.txt", "small.json"):
        (tmp_path / name).write_text("an older and much longer report\n" * 5000)
    state = np.random.get_state()[1].copy()  # type: ignore[index,union-attr]  # noqa: NPY002
    status = run(["vet", str(small), "--out", str(tmp_path), "--quiet", "--seed", "9"])
    assert capsys.readouterr() == ("", "")
    text = (tmp_path / "small.txt").read_text("utf-8")
    document = valid_document((tmp_path / "small.json").read_text("utf-8"))
    assert "older" not in text and text.startswith("scantling: small\n")
    assert status == STATUS[document["verdict"]["answer"]]
    assert document["receipt"]["seed"] == 9
    assert document["receipt"]["command"] == "scantling vet small.toml --seed 9"
    assert document["diagnosis"]["dependence"] == []
    assert document["design"]["time_ordered"] is False
    assert sorted(path.name for path in tmp_path.iterdir()) == ["small.json", "small.txt"]
    np.testing.assert_array_equal(np.random.get_state()[1], state)  # type: ignore[index] # noqa: NPY002


@pytest.mark.parametrize(
    ("options", "replicates"),
    [
        (["--pace", "quick"], 100),
        (["--pace", "thorough", "--replicates", "55"], 55),
        (["--replicates", "55", "--pace", "quick"], 55),
    ],
)
def test_replicates_and_pace(
    small: Path,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    options: list[str],
    replicates: int,
) -> None:
    run(["vet", str(small), "--out", str(tmp_path), "--json", *options])
    printed = json.loads(capsys.readouterr().out)
    assert printed["design"]["replicates"] == replicates
    assert printed["receipt"]["command"] == f"scantling vet small.toml --replicates {replicates}"


def test_other_seed_other_numbers(vetted: Vetted, harbour: Path, tmp_path: Path) -> None:
    run(["vet", str(harbour), "--out", str(tmp_path), "--quiet", "--seed", "4"])
    other = json.loads((tmp_path / "harbour.json").read_text("utf-8"))
    assert other["budget"]["curve"] != vetted.document["budget"]["curve"]
    # The estimate of the tail has no randomness in it; only its interval is simulated.
    ours, theirs = (d["diagnosis"]["errors"]["tail"]["index"] for d in (vetted.document, other))
    assert ours == theirs


def test_name_that_needs_quotes(
    small: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    named = tmp_path / "my design; final.toml"
    table = str(small.with_name("small.csv"))
    named.write_text(small.read_text().replace('"small.csv"', json.dumps(table)))
    run(["vet", str(named), "--out", str(tmp_path / "o"), "--json"])
    assert json.loads(capsys.readouterr().out)["receipt"]["command"] == (
        "scantling vet 'my design; final.toml'"
    )


def test_long_and_foreign_names_stay_within_the_page(
    tmp_path: Path, scantling: Start, valid_document: Parse
) -> None:
    rng = np.random.default_rng(8)
    long = "position_of_the_forward_freight_agreement_" * 3
    names = ["\u03c1_rent", long + "1", long + "2", "x", "sparse"]
    values = rng.standard_t(4, (120, 5))
    values[:, 4] = (np.arange(120) % 30 == 0) * 1.0
    lines = [",".join(names), *(",".join(map(repr, map(float, row))) for row in values)]
    (tmp_path / "t.csv").write_text("\n".join(lines) + "\n", "utf-8")
    (tmp_path / "t.toml").write_text(
        f'title = "{"A title that does not end " * 8}"\n[data]\nfile = "t.csv"\n'
        'response = "\u03c1_rent"\n[expand]\npowers = 2\n[target]\nrelevant = 2\n'
        "[simulation]\nreplicates = 50\n",
        "utf-8",
    )
    done = scantling(
        "vet", tmp_path / "t.toml", "--out", tmp_path / "o", env={"PYTHONIOENCODING": "latin-1"}
    )
    assert done.returncode in (0, 3, 4, 5), done.stderr
    assert done.stderr == ""
    text = (tmp_path / "o" / "t.txt").read_text("utf-8")
    assert "\u03c1_rent" in text and r"\u03c1_rent" in done.stdout
    assert [line for line in text.split("\n") if len(line) > 80] == []
    document = valid_document((tmp_path / "o" / "t.json").read_text("utf-8"))
    assert [d["column"] for d in document["design"]["dropped"]] == ["sparse^2"]


def test_reader_that_leaves_early_does_not_change_the_status(
    small: Path, command: list[str], tmp_path: Path
) -> None:
    ends = os.pipe()
    os.close(ends[0])
    with os.fdopen(ends[1], "wb") as closed:
        done = subprocess.run(
            [*command, "vet", str(small), "--out", str(tmp_path)],
            stdout=closed,
            stderr=subprocess.PIPE,
            timeout=60,
            check=False,
        )
    answer = json.loads((tmp_path / "small.json").read_text("utf-8"))["verdict"]["answer"]
    assert done.returncode == STATUS[answer]
    assert done.stderr == b""


def test_file_that_cannot_be_replaced(
    small: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "small.json").mkdir()
    assert run(["vet", str(small), "--out", str(tmp_path)]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    assert "small.json: cannot be written" in message
    assert not [path for path in tmp_path.iterdir() if path.name.startswith(".")]


@pytest.mark.parametrize("workers", ["1", "2"])
def test_interrupt(harbour: Path, command: list[str], tmp_path: Path, workers: str) -> None:
    out = tmp_path / "made" / "out"
    with subprocess.Popen(
        [
            *command, "vet", str(harbour), "--out", str(out), "--replicates", "100000",
            "--workers", workers,
        ],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        # A shell's background job ignores interrupts, and so would its children.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    ) as running:  # fmt: skip
        deadline = time.monotonic() + 30
        while not out.exists() and time.monotonic() < deadline:
            time.sleep(0.05)
        time.sleep(1.0)
        running.send_signal(signal.SIGINT)
        printed, message = running.communicate(timeout=60)
    assert running.returncode == 130
    assert printed == ""
    if "resume" in message:  # units were done by then, and are kept
        assert message == (
            f"scantling: interrupted; scantling resume {out / 'harbour.run'} goes on from here\n"
        )
        assert [path.name for path in out.iterdir()] == ["harbour.run"]
        return
    assert message == "scantling: interrupted; nothing was written\n"
    # Folders made for a report that never came are taken away again.
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("stop", [KeyboardInterrupt, RuntimeError])
def test_a_stopped_run_removes_only_folders_it_made_and_left_empty(
    stop: type[BaseException], tmp_path: Path
) -> None:
    def attempt(folder: Path, write: str = "") -> None:
        with pytest.raises(stop), reserved_folder(folder):
            assert folder.is_dir()
            if write:
                (folder / write).touch()
            raise stop

    (tmp_path / "there").mkdir()
    attempt(tmp_path / "there")
    assert (tmp_path / "there").is_dir()  # it was there before
    attempt(tmp_path / "there" / "a" / "b")
    assert list((tmp_path / "there").iterdir()) == []
    attempt(tmp_path / "kept" / "a", write="half.txt")
    assert [path.name for path in (tmp_path / "kept" / "a").iterdir()] == ["half.txt"]
    with reserved_folder(tmp_path / "done" / "a"):
        pass
    assert (tmp_path / "done" / "a").is_dir()


def test_an_interrupt_while_libraries_load_is_no_traceback(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def interrupted() -> None:
        raise KeyboardInterrupt

    from scantling.cli import entry

    monkeypatch.setattr("scantling.cli.main.main", interrupted)
    with pytest.raises(SystemExit) as left:
        entry.main()
    assert left.value.code == 130
    assert capsys.readouterr() == ("", "scantling: interrupted; nothing was written\n")
