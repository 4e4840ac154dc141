"""What finished units of work returned, kept in one file, so that a run can go on after a stop.

The file only grows: one entry for each finished unit, found again by the number of the mapper
call and of the unit. An entry is a fixed-size front (mark, call, unit, lengths, checksum of the
content, checksum of the front itself), a name, and the encoded result. A process killed while it
writes leaves at most one torn entry at the end, which is cut off; an entry whose content does not
fit its checksum is left out; both are simply computed again.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO

from scantling.core.encoding import Damaged, NotEncodable, decode, encode
from scantling.errors import ResourceError

MARK = b"scJ1"
FRONT = struct.Struct("<4sIIIIIQI")
"""Mark; call, unit, units in the call; bytes of name, head, body; checksum of these three."""
CHECK = struct.Struct("<I")
"""Checksum of the front."""
BATCH = 256 * 1024
"""Bytes held back at most before they are handed to the system."""
HELD = 0.2
"""Seconds they are held back at most."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """Where one unit's result lies in the file."""

    name: str
    """Of the function that computed it."""
    units: int
    """How many units its call had."""
    start: int
    """Offset of the encoded head."""
    head: int
    """Bytes of the head."""
    body: int
    """Bytes of the body, which follows it."""


class Journal:
    """The results of one run's units; calls are numbered in the order in which they begin."""

    __slots__ = ("_call", "_end", "_entries", "_file", "_since", "_waiting", "path")

    def __init__(self, path: Path) -> None:
        """Open or begin a journal; a torn end is cut off."""
        self.path = path
        self._call = -1
        self._waiting: list[bytes] = []
        self._since = 0.0
        try:
            self._file: BinaryIO = path.open("r+b" if path.exists() else "x+b", buffering=0)
            self._entries, self._end = _entries(self._file)
            self._file.truncate(self._end)
        except OSError as fault:
            raise ResourceError(f"{path}: cannot be used ({fault.strerror})") from fault

    @property
    def kept(self) -> bool:
        """Whether the file holds any finished unit."""
        return self._end > 0

    def begin(self) -> int:
        """Number of the next mapper call."""
        self._call += 1
        return self._call

    def find(self, call: int, name: str, units: int) -> dict[int, Any]:
        """Results already there of a call, by unit.

        What another function left under the same number, or one with another number of units,
        is none of this call's.
        """
        found = {}
        for unit in range(units):
            entry = self._entries.get((call, unit))
            if entry is None or (entry.name, entry.units) != (name, units):
                continue
            self._file.seek(entry.start)
            block = self._file.read(entry.head + entry.body)
            try:
                found[unit] = decode(block[: entry.head], block[entry.head :])
            except Damaged:
                continue  # computed again
        return found

    def keep(self, call: int, name: str, units: int, unit: int, result: Any, now: float) -> None:
        """Keep one result; handed to the system in batches, at the latest after a moment.

        Parameters
        ----------
        call, name, units, unit
            As for `find`.
        result
            What the unit returned; of a kind that is not kept, it is computed again after a stop.
        now : float
            Seconds on a monotonic clock.

        Raises
        ------
        ResourceError
            If the file cannot be written; what it held before stays.
        """
        try:
            head, body = encode(result)
        except NotEncodable:
            return
        label = name.encode()
        check = zlib.crc32(body, zlib.crc32(head, zlib.crc32(label)))
        front = FRONT.pack(
            MARK, call, unit, units, len(label), len(head), len(body), check
        )  # fmt: skip
        if not self._waiting:
            self._since = now
        self._waiting += [front, CHECK.pack(zlib.crc32(front)), label, head, body]
        if now - self._since > HELD or sum(map(len, self._waiting)) > BATCH:
            self.flush()

    def flush(self) -> None:
        """Hand what is held back to the system.

        Raises
        ------
        ResourceError
            If it cannot be written.
        """
        block, self._waiting = memoryview(b"".join(self._waiting)), []
        try:
            self._file.seek(self._end)
            while block:
                block = block[self._file.write(block) :]
            self._end = self._file.tell()
        except OSError as fault:
            # What was written of the block before the fault counts, up to its last whole entry.
            self._file.seek(0)
            self._end = _entries(self._file)[1]
            raise ResourceError(f"{self.path}: cannot be written ({fault.strerror})") from fault

    def close(self) -> None:
        """Write what is held back, where that is possible, and close."""
        if self._file.closed:
            return
        try:
            self.flush()
        finally:
            self._file.close()

    def __enter__(self) -> Journal:
        """The journal itself."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Close it; a disk that is full then is no news while another error is on its way."""
        try:
            self.close()
        except ResourceError:
            if kind is None:
                raise


def _entries(file: BinaryIO) -> tuple[dict[tuple[int, int], Entry], int]:
    """Every whole entry, and where the last one ends."""
    found: dict[tuple[int, int], Entry] = {}
    end = 0
    size = FRONT.size + CHECK.size
    for front in iter(lambda: file.read(size), b""):
        if len(front) < size or not _sound(front):
            break
        _, call, unit, units, label, head, body, check = FRONT.unpack(front[: FRONT.size])
        block = file.read(label + head + body)
        if len(block) < label + head + body:
            break
        if zlib.crc32(block) == check:
            found[call, unit] = Entry(
                name=block[:label].decode(errors="replace"), units=units,
                start=end + size + label, head=head, body=body,
            )  # fmt: skip
        end += size + len(block)
    return found, end


def _sound(front: bytes) -> bool:
    inner = front[: FRONT.size]
    return inner.startswith(MARK) and CHECK.unpack(front[FRONT.size :])[0] == zlib.crc32(inner)
