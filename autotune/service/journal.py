"""The journal of one test: every line is written before it is acted on.

JSON lines, append-only, one file a test.  A line is in the operating system's hands when ``record``
returns, and on the disk when it was durable.  Replaying the events gives the same commands.
"""

import errno
import json
import os
from collections.abc import Callable
from datetime import UTC
from pathlib import Path
from typing import Any, Literal, Protocol

from autotune.errors import JournalError
from autotune.service.clock import WallClock, utc_now
from autotune.service.journal_codec import to_json
from autotune.service.reserve import Reserve

LineKind = Literal["plan", "write_plan", "event", "command", "phase", "as_found", "note", "resumed", "end"]
"""``plan`` of a test or ``write_plan`` of a write of settings, whole; ``event`` before it is stepped;
``command`` before it is performed, those of a hand-back too; ``phase`` its new name; ``as_found`` before
the first write; ``note`` a text or mapping; ``resumed`` a later process goes on, with another clock;
``end`` how it ended."""

Sync = Callable[[int], None]

RESERVE_BYTES = 256 * 1024
_DISK_FULL = {errno.ENOSPC, errno.EDQUOT}


class Journal(Protocol):
    """Where a test writes down what happens to it."""

    def record(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        """Write one line: what, when on the test's clock, and whether it must survive a loss of power.

        Raises ``JournalError``, which names file and remedy.
        """
        ...


class RawFile(Protocol):
    """The part of an unbuffered binary file that the journal needs."""

    def write(self, line: bytes, /) -> int | None:
        """Write what fits and tell how many bytes that were."""
        ...

    def truncate(self, size: int, /) -> int:
        """Cut the file to ``size`` bytes; where the next write goes is not changed by it."""
        ...

    def seek(self, place: int, /) -> int:
        """Let the next write go to ``place``."""
        ...

    def fileno(self) -> int:
        """The descriptor to sync."""
        ...

    def close(self) -> None:
        """Close the file."""
        ...


def journal_file(data_dir: Path, sheet_id: str) -> Path:
    """Where the journal of a test lies."""
    return data_dir / "journals" / f"{sheet_id}.jsonl"


class FileJournal:
    """A ``Journal`` in a file.

    When the disk is full the reserve is freed, the line is written into the space it leaves, and
    ``JournalError`` is raised once, so that the test ends; later lines go on as long as the space lasts.
    A line that can't be written whole is cut off again: no later line hangs on half a line.
    """

    def __init__(
        self,
        file: Path,
        raw: RawFile,
        reserve: Reserve | None,
        *,
        lines: int = 0,
        size_bytes: int = 0,
        wall_clock: WallClock = utc_now,
        sync: Sync = os.fsync,
    ) -> None:
        self.file = file
        self._raw = raw
        self._reserve = reserve
        self._lines = lines
        self._size_bytes = size_bytes
        self._wall_clock = wall_clock
        self._sync = sync

    @classmethod
    def create(
        cls,
        data_dir: Path,
        sheet_id: str,
        *,
        wall_clock: WallClock = utc_now,
        sync: Sync = os.fsync,
        reserve_bytes: int = RESERVE_BYTES,
    ) -> "FileJournal":
        """Begin the journal of a new test, its name already on the disk; raises ``JournalError``."""
        file = journal_file(data_dir, sheet_id)
        raw = None
        try:
            file.parent.mkdir(parents=True, exist_ok=True)
            raw = file.open("xb", buffering=0)
            reserve = Reserve(file.with_suffix(".reserve"), reserve_bytes)
            sync_folder(file.parent, sync)
        except OSError as fault:
            if raw is not None:
                raw.close()
                file.unlink()
                file.with_suffix(".reserve").unlink(missing_ok=True)
            raise JournalError(f"{file}: {_remedy(fault)}; no test starts without its journal") from fault
        return cls(file, raw, reserve, wall_clock=wall_clock, sync=sync)

    def record(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        """See ``Journal``."""
        line = to_line(self._lines + 1, kind, payload, t_s, self._wall_clock).encode() + b"\n"
        freed = self._write_or_free(line)
        self._lines += 1
        self._size_bytes += len(line)
        if durable:
            try:
                self._sync(self._raw.fileno())
            except OSError as fault:
                freed = freed or self._free(fault)
                raise JournalError(
                    f"{self.file}: line {self._lines} may not be on the disk: {_remedy(fault)}"
                ) from fault
        if freed:
            raise JournalError(f"{self.file}: the disk is full; the reserve was used to write on; free some space")

    def close(self) -> None:
        """Close the file and remove the reserve; may be called again."""
        self._raw.close()
        if self._reserve is not None:
            self._reserve.free()

    def _write_or_free(self, line: bytes) -> bool:
        """Write the whole line, if need be into the reserve's space; tells whether that was so."""
        freed, rest = False, line
        try:
            while rest:
                try:
                    rest = rest[self._write_some(rest) :]
                except OSError as fault:
                    if not self._free(fault):
                        raise
                    freed = True
        except (OSError, ValueError) as fault:  # ValueError: the file is closed
            self._cut_back()
            raise JournalError(f"{self.file}: {_remedy(fault)}") from fault
        return freed

    def _write_some(self, line: bytes) -> int:
        written = self._raw.write(line)
        if not written:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return written

    def _free(self, fault: OSError) -> bool:
        return fault.errno in _DISK_FULL and self._reserve is not None and self._reserve.free()

    def _cut_back(self) -> None:
        try:
            self._raw.truncate(self._size_bytes)
            self._raw.seek(self._size_bytes)
        except (OSError, ValueError):
            self._raw.close()  # half a line stands at the end; nothing may follow it


class MemoryJournal:
    """A ``Journal`` that keeps its coded lines in ``lines``, for tests in virtual time."""

    def __init__(self, wall_clock: WallClock = utc_now) -> None:
        self.lines: list[str] = []
        self._wall_clock = wall_clock

    def record(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        """See ``Journal``."""
        self.lines.append(to_line(len(self.lines) + 1, kind, payload, t_s, self._wall_clock))

    def close(self) -> None:
        """Nothing to close."""


def to_line(n: int, kind: LineKind, payload: object, t_s: float, wall_clock: WallClock) -> str:
    """One line without its end: number, instant in UTC, the test's clock, kind and coded payload."""
    utc = wall_clock().astimezone(UTC).isoformat(timespec="milliseconds")
    line: dict[str, Any] = {"n": n, "utc": utc, "t_s": to_json(t_s), "kind": kind, "payload": to_json(payload)}
    return json.dumps(line, separators=(",", ":"), allow_nan=False)


def sync_folder(folder: Path, sync: Sync) -> None:
    """Put the folder's own entries on the disk, where the operating system can."""
    if not hasattr(os, "O_DIRECTORY"):
        return
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        sync(descriptor)
    finally:
        os.close(descriptor)


def _remedy(fault: Exception) -> str:
    if isinstance(fault, OSError) and fault.errno in _DISK_FULL:
        return "the disk is full; free some space"
    if isinstance(fault, FileExistsError):
        return "a journal of that name exists; choose another id"
    if isinstance(fault, PermissionError):
        return "it can't be written; mend the rights of file and folder"
    return f"{fault}; check the disk"
