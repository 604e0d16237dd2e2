"""The confirmed write on the wire: it owns time and the link, and decides nothing."""

import asyncio
from dataclasses import dataclass

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
from autotune.errors import LinkError
from autotune.experiment.commands import SetMode as RequestMode
from autotune.experiment.commands import SetSetpoint as RequestSetpoint
from autotune.field.link import LoopLink
from autotune.field.translate import field_to_raw, to_raw
from autotune.loop.outcome import Refusal
from autotune.loop.write import WriteReport
from autotune.service.clock import TICK_S
from autotune.service.deaf import to_the_end
from autotune.service.journal import Journal
from autotune.service.reading import LoopReader


@dataclass(frozen=True, slots=True)
class PerformedWrite:
    """One settings field as it went out: its number in the controller's unit and what became of it."""

    t_s: float
    name: str
    number: float
    report: WriteReport


class SettingsWriter:
    """Writes one confirmed plan over one link.  ``writes`` are the fields as they went out; it runs once."""

    def __init__(self, loop: LoopConfig, link: LoopLink, journal: Journal) -> None:
        self.writes: list[PerformedWrite] = []
        self._loop = loop
        self._link = link
        self._journal = journal
        self._reader = LoopReader(loop, link)
        self._is_cancelled = False

    async def write(
        self, plan: WritePlan, confirmation: Confirmation, spent: frozenset[Confirmation], pace: WritePace | None = None
    ) -> WriteState | Refusal:
        """Write, read back, and put back what doesn't hold.

        The confirmation is used up by this call, whatever comes of it.  A cancellation is heard as "put back"
        and raised only afterwards.  Raises ``JournalError`` before anything is written.
        """
        begun = begin(plan, confirmation, spent, _now_s(), pace)
        if isinstance(begun, Refusal):
            return begun
        self._journal.record("write_plan", plan, t_s=_now_s(), durable=True)
        return await to_the_end(self._run(*begun), self._cancel)

    def _cancel(self) -> None:
        self._is_cancelled = True

    async def _run(self, state: WriteState, commands: tuple[Command, ...]) -> WriteState:
        while not state.is_over:
            if self._is_cancelled and state.cancelled_by is None:
                event: Event = CancelAsked(_now_s(), "the service is stopping")
                commands_after = commands
            elif commands:
                event, commands_after = await self._perform(commands[0]), ()
            else:
                event, commands_after = await self._wait(next_deadline_s(state)), ()
            self._journal.record("event", event, t_s=event.t_s)
            state, commands = step(state, event)
            commands = commands or commands_after
        self._journal.record("end", state.phase.value, t_s=_now_s(), durable=True)
        return state

    async def _wait(self, deadline_s: float | None) -> Event:
        await asyncio.sleep(0.0 if deadline_s is None else max(deadline_s + TICK_S - _now_s(), 0.0))
        return TimePassed(_now_s())

    async def _perform(self, command: Command) -> Event:
        if isinstance(command, ReadSettings):
            return await self._read()
        self._journal.record("command", command, t_s=_now_s(), durable=True)
        match command:
            case WriteField(name, number):
                report = await self._link.write({name: field_to_raw(self._loop, name, number)})
                self.writes.append(PerformedWrite(_now_s(), name, number, report))
                return FieldWritten(_now_s(), name, report)
            case SetMode(mode):
                return ModeSet(_now_s(), await self._link.write(to_raw(self._loop, RequestMode(mode))))
            case SetSetpoint(sp_pct):
                return SetpointSet(_now_s(), await self._link.write(to_raw(self._loop, RequestSetpoint(sp_pct))))

    async def _read(self) -> Event:
        try:
            fields, sample = await self._reader.read_settings_and_sample()
        except LinkError as fault:
            return ReadFailed(_now_s(), str(fault))
        return SettingsRead(_now_s(), fields, sample.mode, sample.op_pct, sample.sp_pct)


def _now_s() -> float:
    return asyncio.get_running_loop().time()
