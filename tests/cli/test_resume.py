"""A killed, interrupted or starved run: what is kept, what goes on, what is refused."""

from __future__ import annotations

import json
import os
import resource
import shutil
import signal
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from scantling.cli.main import run
from scantling.cli.run_folder import Request, kept_run, read_request, refuse_newer
from scantling.errors import InputError, ResourceError

Start = Callable[..., subprocess.CompletedProcess[str]]


def document(path: Path) -> str:
    """A report without its only volatile key, as text in the order it was written."""
    found = json.loads(path.read_text("utf-8"))
    del found["receipt"]["wall_clock"]
    return json.dumps(found, indent=2)


@pytest.fixture(scope="module")
def whole(harbour: Path, scantling: Start, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of the report of an uninterrupted run."""
    out = tmp_path_factory.mktemp("whole")
    done = scantling("vet", harbour, "--out", out)
    assert done.returncode in (0, 3, 4, 5), done.stderr
    return out


def stopped_when(
    arguments: list[str], units: Path, size: int, how: signal.Signals
) -> subprocess.CompletedProcess[str]:
    """A run that is sent a signal once its journal holds more than so many bytes."""
    with subprocess.Popen(
        arguments, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    ) as running:  # fmt: skip
        deadline = time.monotonic() + 90
        while running.poll() is None and time.monotonic() < deadline:
            if units.exists() and units.stat().st_size > size:
                break
            time.sleep(0.01)
        running.send_signal(how)
        printed, message = running.communicate(timeout=60)
    return subprocess.CompletedProcess(arguments, running.returncode, printed, message)


def test_killed_three_times_the_report_is_the_same_byte_for_byte(
    harbour: Path, whole: Path, command: list[str], scantling: Start, tmp_path: Path
) -> None:
    out = tmp_path / "out"
    units = out / "harbour.run" / "units"
    begin = [*command, "vet", str(harbour), "--out", str(out)]
    go_on = [*command, "resume", str(units.parent)]
    sizes = [-1]  # as soon as the journal is there, then twice when it has grown
    for place in range(3):
        killed = stopped_when(go_on if place else begin, units, sizes[-1], signal.SIGKILL)
        assert killed.returncode == -signal.SIGKILL
        assert sorted(p.name for p in units.parent.iterdir()) == ["lock", "run.json", "units"]
        assert [p.name for p in out.iterdir()] == ["harbour.run"]
        sizes.append(units.stat().st_size)
    assert sizes[2] > 0 and sizes[3] > sizes[2]
    # A torn entry and rubbish at the end are computed again.
    with units.open("ab") as journal:
        journal.write(b"scJ1 and then nothing that fits")
    done = scantling(*go_on[len(command) :], "--workers", "2")
    assert done.stderr == ""
    assert document(out / "harbour.json") == document(whole / "harbour.json")
    assert (out / "harbour.txt").read_text("utf-8").splitlines()[:12] == done.stdout.splitlines()[
        :12
    ]
    assert sorted(p.name for p in out.iterdir()) == ["harbour.json", "harbour.txt"]


def test_an_interrupt_says_how_to_go_on(
    harbour: Path, whole: Path, command: list[str], scantling: Start, tmp_path: Path
) -> None:
    out = tmp_path / "my out"
    folder = out / "harbour.run"
    begin = [*command, "vet", str(harbour), "--out", str(out), "--workers", "2", "--quiet"]
    left = stopped_when(begin, folder / "units", 600_000, signal.SIGINT)
    assert left.returncode == 130 and left.stdout == ""
    assert left.stderr == (
        f"scantling: interrupted; scantling resume '{folder}' goes on from here\n"
    )
    # What was asked for is remembered; the same command as before goes on as well.
    assert read_request(folder) == Request(design=harbour, out=out, workers=2, quiet=True)
    size = (folder / "units").stat().st_size
    left = stopped_when(begin, folder / "units", size + 300_000, signal.SIGINT)
    assert left.returncode == 130 and (folder / "units").stat().st_size > size
    done = scantling("resume", folder)
    assert (done.stdout, done.stderr) == ("", "")
    assert document(out / "harbour.json") == document(whole / "harbour.json")
    assert not folder.exists()


def test_a_disk_that_fills_is_one_line_and_keeps_what_is_done(
    harbour: Path, whole: Path, command: list[str], scantling: Start, tmp_path: Path
) -> None:
    """A limit on the size of files stands for the full disk: writes fail half-way through."""
    limit = 500_000
    done = subprocess.run(
        [*command, "vet", str(harbour), "--out", str(tmp_path)],
        capture_output=True, text=True, check=False, timeout=120,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit)),
    )  # fmt: skip
    folder = tmp_path / "harbour.run"
    assert done.returncode == 2 and done.stdout == ""
    assert done.stderr == (
        f"scantling: {folder / 'units'}: cannot be written (File too large); what is done is"
        f" kept: scantling resume {folder} goes on from here\n"
    )
    assert 0 < (folder / "units").stat().st_size <= limit
    scantling("resume", folder)
    assert document(tmp_path / "harbour.json") == document(whole / "harbour.json")


@pytest.fixture
def left(small: Path, tmp_path: Path) -> Path:
    """A run folder of the small design in a folder of its own, with one unit kept."""
    for name in ("small.toml", "small.csv"):
        shutil.copy(small.with_name(name), tmp_path / name)
    request = Request(design=tmp_path / "small.toml", out=tmp_path)
    inputs = (tmp_path / "small.toml", tmp_path / "small.csv")
    with pytest.raises(KeyboardInterrupt), kept_run(request, inputs) as journal:
        journal.keep(0, "unit", 1, 0, 1.0, now=0.0)
        raise KeyboardInterrupt
    return tmp_path / "small.run"


def refusal(folder: Path, capsys: pytest.CaptureFixture[str]) -> str:
    """The one line with which a resume is refused."""
    assert run(["resume", str(folder)]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    return message.removeprefix("scantling: ").rstrip()


@pytest.mark.parametrize("name", ["small.toml", "small.csv"])
def test_an_input_that_changed_is_refused(
    left: Path, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    path = left.with_name(name)
    path.write_text(path.read_text().replace("\n", "\n\n", 1))
    if name == "small.toml":
        path.write_text(path.read_text() + "# a remark\n")
    assert refusal(left, capsys) == (
        f"{path}: changed since {left} was begun; vet the design again"
    )
    assert (left / "units").stat().st_size > 0  # still there


@pytest.mark.parametrize(
    ("key", "value", "message"),
    [
        ("version", "0.0.1", "begun by another scantling than this (0.0.1, now "),
        ("code", "0" * 64, "begun by another scantling than this"),
        ("libraries", {"numpy": "1.0"}, "begun with python None, now "),
        ("schema", "another/1", "damaged, or of another program"),
        ("workers", "many", "damaged, or of another program"),
        ("seed", "one", "damaged, or of another program"),
    ],
)
def test_another_program_version_or_library_is_refused(
    left: Path, capsys: pytest.CaptureFixture[str], key: str, value: object, message: str
) -> None:
    path = left / "run.json"
    path.write_text(json.dumps({**json.loads(path.read_text()), key: value}))
    assert message in refusal(left, capsys)


def test_folders_that_hold_no_run_are_refused(
    left: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert refusal(tmp_path / "none", capsys) == f"{tmp_path / 'none'}: no such run directory"
    assert refusal(left / "units", capsys).endswith("no such run directory")
    assert "not a run directory (run.json: No such file" in refusal(tmp_path, capsys)
    for text in ("", "{", "[]", "{}", "\x00"):
        (left / "run.json").write_text(text)
        assert "run.json: damaged" in refusal(left, capsys)


def test_a_folder_in_use_is_left_alone(
    left: Path, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    request = Request(design=tmp_path / "small.toml", out=tmp_path)
    inputs = (tmp_path / "small.toml", tmp_path / "small.csv")
    with kept_run(request, inputs) as journal:
        assert journal.path.parent == left  # the same request goes on where it was left
        assert refusal(left, capsys) == f"{left}: another process is working in it"
        # A second run of the same design at the same time has a folder of its own.
        with kept_run(request, inputs) as second:
            assert second.path.parent.name == "small.2.run"
        assert journal.path.exists() and not second.path.exists()
    assert not left.exists()


def test_other_options_do_not_take_over_the_folder(left: Path, tmp_path: Path) -> None:
    request = Request(design=tmp_path / "small.toml", out=tmp_path, seed=2)
    with kept_run(request, (tmp_path / "small.toml", tmp_path / "small.csv")) as journal:
        assert journal.path.parent.name == "small.2.run"
    assert left.exists()


def test_a_newer_report_of_other_settings_is_not_overwritten(
    left: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A short vet after a long one was interrupted: the report is kept, and so is the run."""
    report = tmp_path / "small.json"
    arguments = ["--seed", "2", "--replicates", "50", "--out", str(tmp_path), "--quiet"]
    assert run(["vet", str(tmp_path / "small.toml"), *arguments]) in (0, 3, 4, 5)
    made = report.read_bytes()
    assert refusal(left, capsys) == (
        f"{report}: newer than {left}, made by 'scantling vet small.toml --seed 2 --replicates 50';"
        " resuming would overwrite it: move it away, or delete the run"
    )
    assert report.read_bytes() == made and (left / "units").stat().st_size > 0
    # Older than the run, it was to be overwritten from the start; and moved away, nothing is lost.
    earlier = (left / "units").stat().st_mtime_ns - 10**9
    for path in (left / "run.json", report):
        os.utime(path, ns=(earlier, earlier))
    assert run(["resume", str(left), "--quiet"]) in (0, 3, 4, 5)
    assert report.read_bytes() != made and not left.exists()


def test_a_report_of_the_same_settings_or_none_to_read_is_no_loss(left: Path) -> None:
    report = left.with_name("small.json")
    own = "scantling vet small.toml"
    refuse_newer(left, [report], [own])
    report.write_text(json.dumps({"receipt": {"command": own}}))
    newer = (left / "units").stat().st_mtime_ns + 10**9
    os.utime(report, ns=(newer, newer))
    refuse_newer(left, [report], [own])
    with pytest.raises(InputError, match="newer than"):
        refuse_newer(left, [report], [own + " --seed 3"])
    # Of several responses one is enough.
    with pytest.raises(InputError, match=r"small\.json: newer than"):
        refuse_newer(left, [left.with_name("none.json"), report], [own, own + " --seed 3"])


@pytest.mark.parametrize(
    ("fault", "kept"),
    [
        (KeyboardInterrupt(), True), (MemoryError(), True), (ResourceError("disk"), True),
        (InputError("bad"), False),
    ],
)  # fmt: skip
def test_what_is_worth_keeping(
    small: Path, tmp_path: Path, fault: BaseException, kept: bool
) -> None:
    request = Request(design=small, out=tmp_path)
    with pytest.raises(type(fault)), kept_run(request, (small,)):
        raise fault
    assert list(tmp_path.iterdir()) == []  # nothing was done yet
    with pytest.raises(type(fault)) as raised, kept_run(request, (small,)) as journal:
        journal.keep(0, "unit", 1, 0, 1.0, now=0.0)
        journal.flush()
        raise fault
    assert (tmp_path / "small.run").exists() is kept
    notes = getattr(raised.value, "__notes__", [])
    assert notes == [f"scantling resume {tmp_path / 'small.run'} goes on from here"] * kept


def test_a_full_disk_under_the_report_is_one_line(
    small: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    real = os.fsync

    def full(handle: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    assert run(["vet", str(small), "--out", str(tmp_path)]) == 2
    printed, message = capsys.readouterr()
    assert printed == "" and message.count("\n") == 1
    assert "small.txt: cannot be written (No space left on device); what is done is kept" in message
    monkeypatch.setattr(os, "fsync", real)
    assert run(["resume", str(tmp_path / "small.run"), "--quiet"]) in (0, 3, 4, 5)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["small.json", "small.txt"]
