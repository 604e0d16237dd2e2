"""The loops that we had touched when our own process died: what to give back, and what we last wrote."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TypeVar

from autotune.errors import JournalError
from autotune.experiment.commands import Command, DriveOutput, SetMode
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import AsFound
from autotune.service.journal_reading import JournalLine, is_ended, read_journal
from autotune.service.journal_replay import replay

_T = TypeVar("_T")


@dataclass(frozen=True, slots=True)
class OpenIntent:
    """A test that touched its loop and whose end was never written: the loop may still be as the test left it.

    ``as_found`` is what to give back; ``last_output`` and ``last_mode`` are our last writes (``None``: never
    written); ``last_utc`` is the last line's instant.  ``fault`` says why the journal can't be read; then
    nothing else is known and a person must look.
    """

    file: Path
    sheet_id: str
    plan: TestPlan | None = None
    as_found: AsFound | None = None
    last_command: Command | None = None
    last_output: DriveOutput | None = None
    last_mode: SetMode | None = None
    started_utc: datetime | None = None
    last_utc: datetime | None = None
    torn: str | None = None
    fault: str | None = None


def open_intents(data_dir: Path) -> tuple[OpenIntent, ...]:
    """Every journal without an ``end`` whose test had begun to write, oldest name first.

    A journal that can't be read is among them, with its ``fault``: silence would hide a touched loop.
    """
    files = sorted((data_dir / "journals").glob("*.jsonl"))
    found = (_open_intent(file) for file in files if not is_ended(file))
    return tuple(intent for intent in found if intent is not None)


def _open_intent(file: Path) -> OpenIntent | None:
    try:
        journal = read_journal(file)
    except JournalError as fault:
        return OpenIntent(file, file.stem, fault=str(fault))
    kinds = {line.kind for line in journal.lines}
    if "end" in kinds or "command" not in kinds:
        return None
    commands = [line.payload for line in journal.lines if line.kind == "command"]
    last_command = commands[-1]
    return OpenIntent(
        file,
        file.stem,
        plan=next(_payloads(journal.lines, "plan", TestPlan), None),
        as_found=_as_found(journal.lines),
        last_command=last_command if isinstance(last_command, Command) else None,
        last_output=next((c for c in reversed(commands) if isinstance(c, DriveOutput)), None),
        last_mode=next((c for c in reversed(commands) if isinstance(c, SetMode)), None),
        started_utc=journal.lines[0].utc,
        last_utc=journal.lines[-1].utc,
        torn=journal.torn,
    )


def _payloads(lines: Sequence[JournalLine], kind: str, payload_type: type[_T]) -> Iterator[_T]:
    return (line.payload for line in lines if line.kind == kind and isinstance(line.payload, payload_type))


def _as_found(lines: Sequence[JournalLine]) -> AsFound | None:
    """As the journal says, else as the replayed test knew it."""
    said = next(_payloads(lines, "as_found", AsFound), None)
    return said if said is not None else replay(lines)[0].as_found
