"""The confirmed write on the wire: it owns time and the link, and decides nothing."""

import asyncio
from collections.abc import Awaitable, Callable, Mapping
from dataclasses import dataclass
from typing import TypeVar

from autotune.config.types import LoopConfig
from autotune.confirmed_write.commands import Command, ReadSettings, SetMode, SetSetpoint, WriteField
from autotune.confirmed_write.events import (
    CancelAsked,
    Event,
    FieldWritten,
    ModeSet,
    ReadFailed,
    SetpointSet,
    SettingsRead,
    TimePassed,
)
from autotune.confirmed_write.machine import begin, next_deadline_s, step
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.confirmed_write.state import WritePace, WriteState
from autotune.errors import JournalError, LinkError
from autotune.experiment.commands import SetMode as RequestMode
from autotune.experiment.commands import SetSetpoint as RequestSetpoint
from autotune.field.link import LoopLink, RawValue
from autotune.field.translate import field_to_raw, to_raw
from autotune.loop.outcome import Refusal
from autotune.loop.sample import Stamp
from autotune.loop.write import WriteOutcome, WriteReport
from autotune.service.clock import TICK_S
from autotune.service.deaf import to_the_end
from autotune.service.journal import Journal, LineKind
from autotune.service.reading import LoopReader

_Done = TypeVar("_Done")
_Else = TypeVar("_Else")


@dataclass(frozen=True, slots=True)
class PerformedWrite:
    """One settings field as it went out: its number in the controller's unit and what became of it."""

    t_s: float
    name: str
    number: float
    report: WriteReport


class SettingsWriter:
    """Writes one confirmed plan over one link; it runs once.

    ``state`` is the present one, ``None`` before it began; ``has_written`` tells whether anything may have reached
    the loop; ``writes`` are the fields as they went out; ``faults`` are our own, for the record.
    """

    def __init__(self, loop: LoopConfig, link: LoopLink, journal: Journal) -> None:
        self.state: WriteState | None = None
        self.writes: list[PerformedWrite] = []
        self.faults: list[str] = []
        self._loop = loop
        self._link = link
        self._journal = journal
        self._reader = LoopReader(loop, link)
        self._stop_because: str | None = None
        self.has_written = False

    def stop(self, because: str) -> None:
        """Ask for the settings as found to be put back; may be asked any number of times."""
        self._stop_because = self._stop_because or because

    async def write(
        self, plan: WritePlan, confirmation: Confirmation, spent: frozenset[Confirmation], pace: WritePace | None = None
    ) -> WriteState | Refusal:
        """Write, read back, and put back what doesn't hold.

        The confirmation is used up by this call, whatever comes of it.  A cancellation is heard as "put back"
        and raised only afterwards.  Raises ``JournalError`` before anything is written; a journal that fails later
        is heard as "put back" too.
        """
        begun = begin(plan, confirmation, spent, _now_s(), pace)
        if isinstance(begun, Refusal):
            return begun
        self._journal.record("write_plan", plan, t_s=_now_s(), durable=True)
        return await to_the_end(self._run(*begun), self._cancelled)

    def _cancelled(self) -> None:
        self.stop("the service is stopping")

    async def _run(self, state: WriteState, commands: tuple[Command, ...]) -> WriteState:
        self.state = state
        while not state.is_over:
            commands_after: tuple[Command, ...] = ()
            if self._stop_because is not None and state.cancelled_by is None:
                event: Event = CancelAsked(_now_s(), self._stop_because)
                commands_after = commands
            elif commands:
                event = await self._perform(commands[0])
            else:
                event = await self._wait(next_deadline_s(state))
            self._note("event", event, t_s=event.t_s)
            state, commands = step(state, event)
            self.state = state
            commands = commands or commands_after
        self._note("end", state.phase.value, t_s=_now_s(), durable=True)
        return state

    async def _wait(self, deadline_s: float | None) -> Event:
        wait_s = 0.0 if deadline_s is None else max(deadline_s + TICK_S - _now_s(), 0.0)
        await self._uncancelled(asyncio.sleep(wait_s), lambda: None)
        return TimePassed(_now_s())

    async def _perform(self, command: Command) -> Event:
        if isinstance(command, ReadSettings):
            return await self._read()
        self._note("command", command, t_s=_now_s(), durable=True)
        self.has_written = True  # from here on it may land, whatever we hear
        match command:
            case WriteField(name, number):
                report = await self._send({name: field_to_raw(self._loop, name, number)})
                self.writes.append(PerformedWrite(_now_s(), name, number, report))
                return FieldWritten(_now_s(), name, report)
            case SetMode(mode):
                return ModeSet(_now_s(), await self._send(to_raw(self._loop, RequestMode(mode))))
            case SetSetpoint(sp_pct):
                return SetpointSet(_now_s(), await self._send(to_raw(self._loop, RequestSetpoint(sp_pct))))

    async def _send(self, values: Mapping[str, RawValue]) -> WriteReport:
        sent_s = _now_s()

        def unheard() -> WriteReport:
            return WriteReport(WriteOutcome.NOT_HEARD, Stamp(sent_s, _now_s()), "interrupted")

        return await self._uncancelled(self._link.write(values), unheard)

    async def _read(self) -> Event:
        try:
            read = await self._uncancelled(self._reader.read_settings_and_sample(), lambda: None)
        except LinkError as fault:
            return ReadFailed(_now_s(), str(fault))
        if read is None:
            return ReadFailed(_now_s(), "interrupted")
        fields, sample = read
        return SettingsRead(_now_s(), fields, sample.mode, sample.op_pct, sample.sp_pct)

    async def _uncancelled(self, work: Awaitable[_Done], interrupted: Callable[[], _Else]) -> _Done | _Else:
        """A cancellation that reaches even this task costs what is under way and asks for the way back."""
        try:
            return await work
        except asyncio.CancelledError:
            self._cancelled()
            return interrupted()

    def _note(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        """Write the journal; once something was written, a full disk asks for the way back and never stops it."""
        try:
            self._journal.record(kind, payload, t_s=t_s, durable=durable)
        except JournalError as fault:
            if not self.has_written:
                raise
            self.faults.append(str(fault))
            self.stop(f"the journal failed: {fault}")


def _now_s() -> float:
    return asyncio.get_running_loop().time()
