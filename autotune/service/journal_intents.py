"""The loops that we had touched when our own process died: what to give back, and what we last wrote."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from itertools import takewhile
from pathlib import Path
from typing import TypeVar

from autotune.confirmed_write.commands import ReadSettings
from autotune.confirmed_write.plan import WritePlan
from autotune.errors import JournalError
from autotune.experiment.commands import DriveOutput, SetMode
from autotune.experiment.events import SampleArrived, Written
from autotune.experiment.plan import TestPlan
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample
from autotune.loop.write import WriteOutcome, WriteReport
from autotune.service.journal_reading import JournalLine, is_ended, read_journal

_T = TypeVar("_T")


@dataclass(frozen=True, slots=True)
class OpenIntent:
    """A test or a write of settings that touched its loop and whose end was never written.

    A test has ``plan`` and ``as_found``, what to give back; ``last_output`` and ``last_mode`` are its last
    writes (``None``: never written).  Whether a last write has landed is not known unless its answer was written
    down too: ``outputs_pct`` and ``modes`` are all that the block may stand at by our doing, the last write first,
    and end with the one that is known to have landed, or with what was read before the first.
    A write of settings has ``write_plan``, which holds its as-found.
    ``last_command`` is the last write of either, begun if not done.  ``last_utc`` is the last line of the
    process that died: looking at an intent again makes it no younger.  ``journal_id`` is the name of its file.
    ``fault`` says why the journal can't be read; then nothing else is known and a person must look.
    """

    file: Path
    journal_id: str
    plan: TestPlan | None = None
    write_plan: WritePlan | None = None
    as_found: AsFound | None = None
    last_command: object = None
    last_output: DriveOutput | None = None
    last_mode: SetMode | None = None
    outputs_pct: tuple[float, ...] = ()
    modes: tuple[LoopMode, ...] = ()
    started_utc: datetime | None = None
    last_utc: datetime | None = None
    torn: str | None = None
    fault: str | None = None


def open_intents(data_dir: Path) -> tuple[OpenIntent, ...]:
    """Every journal without an ``end`` that had begun to write to its loop, in order of names.

    A journal that can't be read is among them, with its ``fault``: silence would hide a touched loop.
    A test that another process is just running has no ``end`` either: hold the loop's lock before you act.
    """
    files = sorted((data_dir / "journals").glob("*.jsonl"))
    found = (_open_intent(file) for file in files if not is_ended(file))
    return tuple(intent for intent in found if intent is not None)


def _open_intent(file: Path) -> OpenIntent | None:
    try:
        journal = read_journal(file)
    except JournalError as fault:
        return OpenIntent(file, file.stem, fault=str(fault))
    outputs_pct, modes = _may_stand_at(journal.lines)
    is_ended_within = any(line.kind == "end" for line in journal.lines)
    commands = [
        line.payload for line in journal.lines if line.kind == "command" and not isinstance(line.payload, ReadSettings)
    ]
    if is_ended_within or not commands:
        return None
    return OpenIntent(
        file,
        file.stem,
        plan=next(_payloads(journal.lines, "plan", TestPlan), None),
        write_plan=next(_payloads(journal.lines, "write_plan", WritePlan), None),
        as_found=next(_payloads(journal.lines, "as_found", AsFound), None),
        last_command=commands[-1],
        last_output=next((c for c in reversed(commands) if isinstance(c, DriveOutput)), None),
        last_mode=next((c for c in reversed(commands) if isinstance(c, SetMode)), None),
        outputs_pct=outputs_pct,
        modes=modes,
        started_utc=journal.lines[0].utc,
        last_utc=[line.utc for line in takewhile(lambda line: line.kind != "resumed", journal.lines)][-1],
        torn=journal.torn,
    )


def _may_stand_at(lines: Sequence[JournalLine]) -> tuple[tuple[float, ...], tuple[LoopMode, ...]]:
    """Outputs (percent) and modes that our writes explain, the newest first; see ``OpenIntent``.

    A command is written down before it goes out and its answer after it: where we died in between, the write has
    landed or it has not, and either is ours.
    """
    outputs: list[float] = []
    modes: list[LoopMode] = []
    read: Sample | None = None
    pending: list[float] | list[LoopMode] | None = None
    for line in lines:
        payload = line.payload
        report = payload.report if isinstance(payload, Written) else payload
        if isinstance(payload, SampleArrived):
            read = payload.sample
        elif line.kind == "command":
            pending = None
            if isinstance(payload, DriveOutput):
                if not outputs and read is not None and read.op_pct is not None:
                    outputs.append(read.op_pct)
                outputs.insert(0, payload.op_pct)
                pending = outputs
            elif isinstance(payload, SetMode):
                if not modes and read is not None:
                    modes.append(read.mode)
                modes.insert(0, payload.mode)
                pending = modes
        elif isinstance(report, WriteReport) and pending:
            if report.outcome is WriteOutcome.APPLIED:
                del pending[1:]
            elif report.outcome is WriteOutcome.REFUSED:
                del pending[0]
            pending = None
    return tuple(outputs), tuple(modes)


def _payloads(lines: Sequence[JournalLine], kind: str, payload_type: type[_T]) -> Iterator[_T]:
    return (line.payload for line in lines if line.kind == kind and isinstance(line.payload, payload_type))
