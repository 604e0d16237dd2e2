"""Reading a journal back, also one that a crash has torn, and writing on where it ends."""

import json
import os
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from autotune.errors import JournalError
from autotune.service.clock import WallClock, utc_now
from autotune.service.journal import FileJournal, Sync
from autotune.service.journal_codec import from_json

_TAIL_BYTES = 64 * 1024


@dataclass(frozen=True, slots=True)
class JournalLine:
    """One line: its number from 1, the instant in UTC, the test's clock (s), kind and decoded payload."""

    n: int
    utc: datetime
    t_s: float
    kind: str
    payload: object


@dataclass(frozen=True, slots=True)
class JournalText:
    """A whole journal; ``torn`` says what was found instead of a last line, or is ``None``.

    ``size_bytes`` is the length of the good lines.
    """

    lines: tuple[JournalLine, ...]
    torn: str | None
    size_bytes: int


def read_journal(file: Path) -> JournalText:
    """All lines of a journal.

    What a crash tore at the end is left out and said; damage before a good line raises ``JournalError``
    with the line's number.
    """
    try:
        pieces = file.read_bytes().splitlines(keepends=True)
    except OSError as fault:
        raise JournalError(f"{file}: {fault.strerror}; mend its rights or name another file") from fault
    return _journal_text(pieces, file)


def is_ended(file: Path) -> bool:
    """Whether the last line is an ``end``; reads the file's tail only."""
    try:
        with file.open("rb") as journal:
            journal.seek(max(0, file.stat().st_size - _TAIL_BYTES))
            pieces = journal.read().splitlines(keepends=True)
    except OSError:
        return False  # a full reading tells what is wrong
    fields = _fields(pieces[-1]) if pieces else None
    return fields is not None and fields["kind"] == "end"


def read_journal_text(text: str) -> JournalText:
    """The same from lines in memory."""
    return _journal_text(text.encode().splitlines(keepends=True), "journal")


def resume_journal(file: Path, *, wall_clock: WallClock = utc_now, sync: Sync = os.fsync) -> FileJournal:
    """Go on writing a journal after our own death, to record the recovery and the end.

    The first line says ``resumed``, with half a line that stood at the end (``None``: there was none); that
    half is cut off.  Raises ``JournalError``.
    """
    journal = read_journal(file)
    try:
        raw = file.open("r+b", buffering=0)
        raw.seek(journal.size_bytes)
        rest = raw.read()
        raw.truncate(journal.size_bytes)
        raw.seek(journal.size_bytes)
    except OSError as fault:
        raise JournalError(f"{file}: {fault.strerror}; mend its rights") from fault
    resumed = FileJournal(
        file,
        raw,
        None,
        lines=len(journal.lines),
        size_bytes=journal.size_bytes,
        wall_clock=wall_clock,
        sync=sync,
    )
    last_s = journal.lines[-1].t_s if journal.lines else 0.0
    torn = rest.decode("ascii", errors="backslashreplace") if rest else None
    resumed.record("resumed", torn, t_s=last_s, durable=True)
    return resumed


def _journal_text(pieces: Sequence[bytes], where: Path | str) -> JournalText:
    lines: list[JournalLine] = []
    size_bytes = 0
    for index, piece in enumerate(pieces):
        fields = _fields(piece)
        if fields is None:
            if any(_fields(later) is not None for later in pieces[index + 1 :]):
                raise JournalError(f"{where}: line {index + 1} is damaged and good lines follow; keep a copy of it")
            torn_bytes = sum(len(rest) for rest in pieces[index:])
            return JournalText(
                tuple(lines), f"line {index + 1} is torn ({torn_bytes} bytes); what it said is not known", size_bytes
            )
        if fields["n"] != index + 1:
            raise JournalError(f"{where}: line {index + 1} has number {fields['n']}: lines were removed or added")
        lines.append(_line(fields, f"{where}: line {index + 1}"))
        size_bytes += len(piece)
    return JournalText(tuple(lines), None, size_bytes)


def _fields(piece: bytes) -> dict[str, object] | None:
    """The fields of a whole line, or ``None`` where it is none."""
    if not piece.endswith(b"\n"):
        return None
    try:
        fields = json.loads(piece, parse_constant=_no_constant)
    except ValueError:
        return None
    return fields if isinstance(fields, dict) and fields.keys() == {"n", "utc", "t_s", "kind", "payload"} else None


def _line(fields: dict[str, object], where: str) -> JournalLine:
    try:
        n, kind, utc, t_s = fields["n"], fields["kind"], fields["utc"], from_json(fields["t_s"])
        if not (isinstance(n, int) and isinstance(kind, str) and isinstance(utc, str) and isinstance(t_s, float | int)):
            raise JournalError("number, kind or clock has a wrong type")
        return JournalLine(n, datetime.fromisoformat(utc), float(t_s), kind, from_json(fields["payload"]))
    except (JournalError, ValueError) as fault:
        raise JournalError(f"{where}: {fault}") from fault


def _no_constant(word: str) -> None:
    raise ValueError(f"{word} is no number of JSON")
