"""The folder of a run: what is finished, and what has to be unchanged for it to be of use.

`<stem>.run` beside the report: `run.json` (the design, the options, checksums of the inputs and
of this package), `units` (the journal) and `lock`. It appears whole, is locked while a process
works in it, and is taken away once the report is written, or when nothing in it is worth keeping.
"""

from __future__ import annotations

import hashlib
import itertools
import json
import os
import platform
import secrets
import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from shlex import quote
from typing import Any, BinaryIO

from scantling.core.journal import Journal
from scantling.errors import InputError, ResourceError

SCHEMA = "scantling-run/1"
MANIFEST, UNITS, LOCK = "run.json", "units", "lock"
HINT = "scantling resume"
"""What the note on a kept run begins with."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """What was asked of a run."""

    design: Path
    """The design file."""
    out: Path
    """Where the report goes."""
    response: str | None = None
    """The only response to vet; None: all of them."""
    seed: int | None = None
    """Instead of the design's."""
    replicates: int | None = None
    """Instead of the design's."""
    workers: int = 1
    """Processes."""
    cluster: str | None = None
    """Address of a dask scheduler."""
    quiet: bool = False
    """Whether nothing is printed."""
    as_json: bool = False
    """Whether the JSON twin is printed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RunFolder:
    """A run folder this process holds."""

    path: Path
    """The folder."""
    lock: BinaryIO
    """Its lock file, locked while open."""
    continued: bool
    """Whether it was left by an earlier process."""

    def remove(self) -> None:
        """Take it away, the manifest last: until then it can be resumed."""
        with suppress(OSError):
            for name in (UNITS, LOCK, MANIFEST):
                (self.path / name).unlink(missing_ok=True)
            self.path.rmdir()


def manifest(request: Request, inputs: tuple[Path, ...]) -> dict[str, Any]:
    """What the folder says about its run: everything that could change its result."""
    from importlib.metadata import version

    from scantling.pipeline import LIBRARIES

    return {
        "schema": SCHEMA,
        "version": version("scantling"),
        "code": _package_checksum(),
        "libraries": {
            "python": platform.python_version(),
            **{name: version(name) for name in LIBRARIES},
        },
        "design": str(request.design.absolute()),
        "out": str(request.out.absolute()),
        "response": request.response,
        "seed": request.seed,
        "replicates": request.replicates,
        "inputs": {str(path.absolute()): checksum(path) for path in inputs},
    }


def checksum(path: Path) -> str:
    """sha-256 of a file.

    Raises
    ------
    InputError
        If it cannot be read.
    """
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as fault:
        raise InputError(f"{path}: cannot be read ({fault.strerror})") from fault


def _package_checksum() -> str:
    """sha-256 of this package's modules: results of other code are not mixed in."""
    root = Path(__file__).parents[1]
    found = hashlib.sha256()
    for path in sorted(root.rglob("*.py")):
        found.update(path.relative_to(root).as_posix().encode() + b"\0" + path.read_bytes())
    return found.hexdigest()


@contextmanager
def kept_run(
    request: Request, inputs: tuple[Path, ...], folder: Path | None = None
) -> Iterator[Journal]:
    """Hold the folder of a run while it goes on; yield its journal.

    Parameters
    ----------
    request : Request
    inputs : tuple of Path
        Files whose content decides the result.
    folder : Path, optional
        The folder to go on from; by default a new one, or one left by the same request.

    Raises
    ------
    InputError
        If the folder to go on from is not this run's any more, or another process works in it.
    ResourceError
        If it cannot be written. A note on this and any other error that leaves results behind
        says how to go on.
    """
    wanted = manifest(request, inputs)
    held = _begin(request, wanted) if folder is None else _go_on(folder, wanted)
    journal = None
    try:
        with Journal(held.path / UNITS) as journal:
            yield journal
        held.remove()
    except BaseException as fault:
        # A refusal of the input would only come again.
        useful = isinstance(fault, ResourceError) or not isinstance(fault, InputError)
        if journal is not None and journal.kept and useful:
            fault.add_note(f"{HINT} {quote(str(held.path))} goes on from here")
        elif not held.continued:
            held.remove()
        raise
    finally:
        held.lock.close()


def read_request(folder: Path) -> Request:
    """What the run in a folder was asked for.

    Raises
    ------
    InputError
        If it is no run folder.
    """
    found = _read(folder)
    return Request(
        design=Path(found["design"]),
        out=Path(found["out"]),
        response=found["response"],
        seed=found["seed"],
        replicates=found["replicates"],
        workers=found["workers"],
        cluster=found["cluster"],
        quiet=found["quiet"],
        as_json=found["as_json"],
    )


def _read(folder: Path) -> dict[str, Any]:
    path = folder / MANIFEST
    if not folder.is_dir():
        raise InputError(f"{folder}: no such run directory")
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
        kinds = {
            "schema": str, "version": str, "code": str, "libraries": dict, "design": str,
            "out": str, "inputs": dict, "workers": int, "quiet": bool, "as_json": bool,
        }  # fmt: skip
        sound = all(isinstance(found[key], kind) for key, kind in kinds.items())
        optional = {"response": str, "seed": int, "replicates": int, "cluster": str}
        sound &= all(isinstance(found[k], kind | None) for k, kind in optional.items())
    except OSError as fault:
        raise InputError(f"{folder}: not a run directory ({MANIFEST}: {fault.strerror})") from fault
    except (ValueError, KeyError, TypeError) as fault:
        raise InputError(f"{path}: damaged; vet the design again") from fault
    if not sound or found["schema"] != SCHEMA:
        raise InputError(f"{path}: damaged, or of another program; vet the design again")
    return dict(found)


def refuse_newer(folder: Path, reports: list[Path], commands: list[str]) -> None:
    """Refuse to go on where that would overwrite a newer report of other settings.

    Parameters
    ----------
    folder : Path
        The run's.
    reports : list of Path
        JSON reports it would write.
    commands : list of str
        The command line each would carry in its receipt.

    Raises
    ------
    InputError
        If one was made by another command after the run had last written.
    """
    last = max(_written(folder / name) for name in (MANIFEST, UNITS))
    for path, command in zip(reports, commands, strict=True):
        made = _command(path) if _written(path) > last else command
        if made != command:
            raise InputError(
                f"{path}: newer than {folder}, made by '{made}'; resuming would overwrite it: move"
                " it away, or delete the run"
            )


def _command(report: Path) -> str:
    """The command in a report's receipt; empty where there is none to read."""
    try:
        return str(json.loads(report.read_text(encoding="utf-8"))["receipt"]["command"])
    except (OSError, ValueError, KeyError, TypeError):
        return ""


def _written(path: Path) -> int:
    """When a file was last written, ns; 0 where there is none."""
    try:
        return path.stat().st_mtime_ns
    except OSError:
        return 0


def _begin(request: Request, wanted: dict[str, Any]) -> RunFolder:
    """A folder left by the same request, where no one works in it, or a new one."""
    for number in itertools.count(1):
        ending = "run" if number == 1 else f"{number}.run"
        path = request.out / f"{request.design.stem}.{ending}"
        if not path.exists():
            made = _create(path, request, wanted)
            if made is not None:
                return made
        lock = _locked(path)
        if lock is None:
            continue
        with suppress(InputError):
            found = _read(path)
            if all(found.get(key) == value for key, value in wanted.items()):
                return RunFolder(path=path, lock=lock, continued=True)
        lock.close()
    raise AssertionError  # the count has no end


def _create(path: Path, request: Request, wanted: dict[str, Any]) -> RunFolder | None:
    """Make the folder elsewhere and move it into place; None if another process was faster."""
    document = {
        **wanted, "workers": request.workers, "cluster": request.cluster,
        "quiet": request.quiet, "as_json": request.as_json,
    }  # fmt: skip
    made = path.with_name(f".{path.name}.{secrets.token_hex(4)}")
    try:
        made.mkdir()
        (made / MANIFEST).write_text(json.dumps(document, indent=2) + "\n", encoding="utf-8")
        (made / LOCK).touch()
        lock = _locked(made)
        assert lock is not None
        try:
            made.rename(path)
        except OSError:
            lock.close()
            if not path.exists():
                raise
            shutil.rmtree(made, ignore_errors=True)
            return None
    except OSError as fault:
        shutil.rmtree(made, ignore_errors=True)
        raise ResourceError(f"{path}: cannot be made ({fault.strerror})") from fault
    except BaseException:
        shutil.rmtree(made, ignore_errors=True)
        raise
    return RunFolder(path=path, lock=lock, continued=False)


def _go_on(folder: Path, wanted: dict[str, Any]) -> RunFolder:
    found = _read(folder)
    if found["version"] != wanted["version"] or found["code"] != wanted["code"]:
        raise InputError(
            f"{folder}: begun by another scantling than this"
            f" ({found['version']}, now {wanted['version']}); vet the design again"
        )
    for name, now in wanted["libraries"].items():
        then = found["libraries"].get(name)
        if then != now:
            raise InputError(f"{folder}: begun with {name} {then}, now {now}; vet the design again")
    for path, now in wanted["inputs"].items():
        if found["inputs"].get(path) != now:
            raise InputError(f"{path}: changed since {folder} was begun; vet the design again")
    lock = _locked(folder)
    if lock is None:
        raise InputError(f"{folder}: another process is working in it")
    return RunFolder(path=folder, lock=lock, continued=True)


def _locked(folder: Path) -> BinaryIO | None:
    """The folder's lock, held until it is closed or the process ends; None if it is taken."""
    try:
        lock = (folder / LOCK).open("ab")
    except OSError:
        return None
    try:
        if os.name == "nt":
            import msvcrt

            msvcrt.locking(lock.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
        else:
            import fcntl

            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        lock.close()
        return None
    return lock
