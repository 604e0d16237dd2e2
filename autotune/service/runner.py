"""One supervised test: it owns time and the link, and decides nothing.

The walk of one sample: sleep to the scan grid or to the machine's deadline, read, record the
event, step the pure machine, store the new state, perform its commands, and feed each outcome
back as the next event.  Leaving by any exit goes through the same hand-back.
"""

import asyncio
from types import MappingProxyType

from autotune.config.types import LoopConfig
from autotune.errors import JournalError, LinkError, WriteForbidden
from autotune.experiment.commands import Command, DriveOutput, HandBack
from autotune.experiment.ending import refuse_start
from autotune.experiment.events import (
    AbortAsked,
    Event,
    FinishAsked,
    HandBackEnded,
    HandBackResult,
    ReadFailed,
    SampleArrived,
    SmallerStepsAsked,
    Started,
    TicksMissed,
    TimePassed,
    Written,
)
from autotune.experiment.gate import gate, gate_hand_back
from autotune.experiment.machine import begin, next_deadline_s, step
from autotune.experiment.phases import Phase
from autotune.experiment.plan import TestPlan
from autotune.experiment.state import Experiment
from autotune.field.link import LoopLink
from autotune.field.translate import WireCommand, to_raw
from autotune.loop.outcome import Refusal
from autotune.loop.write import WriteReport
from autotune.service.clock import TICK_S
from autotune.service.deaf import to_the_end
from autotune.service.hand_back import HandBackRun
from autotune.service.journal import Journal, LineKind
from autotune.service.probing import prove_writable
from autotune.service.reading import LoopReader
from autotune.service.scan_grid import ScanGrid
from autotune.service.test_log import TestLog

_WISH_WORDS = MappingProxyType(
    {AbortAsked: "abort", FinishAsked: "finish now and keep", SmallerStepsAsked: "smaller steps"}
)
_Wish = tuple[type[AbortAsked] | type[FinishAsked] | type[SmallerStepsAsked], str]


class TestRunner:
    """Drives one ``Experiment`` over one link.

    ``experiment`` is the present state, for whoever wants to look; ``log`` holds every reading, write and
    happening with its stamps; ``faults`` are our own, for the sheet.  A runner runs once.
    """

    __test__ = False  # not a test case, whatever a test collector makes of the name

    def __init__(self, loop: LoopConfig, plan: TestPlan, link: LoopLink, journal: Journal) -> None:
        self.experiment: Experiment = begin(plan)
        self.log = TestLog()
        self.faults: list[str] = []
        self._loop = loop
        self._plan = plan
        self._link = link
        self._journal = journal
        self._reader = LoopReader(loop, link)
        self._wishes: asyncio.Queue[_Wish] = asyncio.Queue()
        self._last_driven_pct: float | None = None
        self._handing_back: HandBackRun | None = None
        self._has_written = False

    def abort(self, by: str) -> None:
        """Ask for the end of the test, now; always allowed, any number of times."""
        self._wishes.put_nowait((AbortAsked, by))

    def finish(self, by: str) -> None:
        """Ask to finish now and keep what has been measured."""
        self._wishes.put_nowait((FinishAsked, by))

    def smaller_steps(self, by: str) -> None:
        """Ask for smaller steps from the next switch on."""
        self._wishes.put_nowait((SmallerStepsAsked, by))

    async def run(self) -> Experiment:
        """Run the test to a terminal phase and return the last state.

        A cancellation is heard as "abort" and then as nothing more: the loop is handed back first, and
        ``CancelledError`` is raised only afterwards.  Raises ``JournalError`` before anything is touched
        when the journal can't be written.
        """
        return await to_the_end(self._run(), lambda: self.abort("the service is stopping"))

    async def _run(self) -> Experiment:
        self._journal.record("plan", self._plan, t_s=_now_s(), durable=True)
        try:
            await self._begin()
            grid = ScanGrid(_now_s(), self._plan.scan_s)
            while not self.experiment.phase.is_terminal:
                await self._advance(grid)
        except BaseException as fault:
            await self._last_resort(fault)
            raise
        self._record_end()
        return self.experiment

    async def _begin(self) -> None:
        """Start, unless a setting of the loop can't be written where its file wants that shown first."""
        if self._loop.proves_writable:
            refusal = await prove_writable(self._loop, self._link, self._journal, self.log)
            if refusal is not None:
                self.experiment = refuse_start(self.experiment, refusal)
                self.log.add_story(_now_s(), "note", str(refusal), code=refusal.code)
                return
        await self._feed(Started(_now_s()))

    async def _advance(self, grid: ScanGrid) -> None:
        """Wait for a wish, the next scan or the machine's own deadline, whichever comes first."""
        deadline_s = next_deadline_s(self.experiment)
        due_s = grid.due_s if deadline_s is None else min(grid.due_s, deadline_s + TICK_S)
        wish = await self._wish_before(due_s)
        if wish is not None:
            await self._feed(wish)
        elif due_s < grid.due_s:
            await self._feed(TimePassed(_now_s()))
        else:
            missed = grid.take(_now_s())
            if missed:
                await self._feed(TicksMissed(_now_s(), missed))
            if not self.experiment.phase.is_terminal:
                await self._feed(await self._read())

    async def _wish_before(self, due_s: float) -> Event | None:
        """A wish gets its time when it is heard, so that events never run backwards."""
        if self._wishes.empty():
            waiting = asyncio.ensure_future(self._wishes.get())
            try:
                await asyncio.wait({waiting}, timeout=max(due_s - _now_s(), 0.0))
                if not waiting.done():
                    return None
                kind, by = waiting.result()
            finally:
                waiting.cancel()
        else:
            kind, by = self._wishes.get_nowait()
        self.log.add_story(_now_s(), "operator", _WISH_WORDS[kind], by=by)
        return kind(_now_s(), by)

    async def _read(self) -> Event:
        try:
            sample = await self._reader.read_sample()
        except LinkError as fault:
            self.log.add_story(_now_s(), "link", str(fault))
            return ReadFailed(_now_s(), str(fault))
        self.log.add_sample(sample)
        return SampleArrived(_now_s(), sample)

    async def _feed(self, event: Event) -> None:
        """Record the event, step the machine, store the state, and only then act on it."""
        before = self.experiment.phase
        self._note("event", event, t_s=event.t_s)
        had_as_found = self.experiment.as_found is not None
        self.experiment, commands = step(self.experiment, event)
        phase = self.experiment.phase
        if self.experiment.as_found is not None and not had_as_found:
            self._note("as_found", self.experiment.as_found, t_s=event.t_s, durable=True)
        if phase is not before:
            self._note("phase", phase.value, t_s=event.t_s, durable=True)
            self.log.add_story(event.t_s, "phase", phase.value)
        for command in commands:
            if self.experiment.phase is not phase:
                break  # an outcome has changed the plan: what an earlier phase wanted is void
            outcome = await self._perform(command)
            if not self.experiment.phase.is_terminal:
                await self._feed(outcome)

    async def _perform(self, command: Command) -> Event:
        if isinstance(command, HandBack):
            return await self._hand_back(command.because)
        self._record_command(command, gate(self.experiment, command))
        if self.faults and not self._has_written:
            return AbortAsked(_now_s(), f"the journal failed before anything was written: {self.faults[0]}")
        return Written(_now_s(), command, await self._write(command))

    def _record_command(self, command: WireCommand, refusal: Refusal | None) -> None:
        """Gate, record, write: in this order, for every write of a test and of its hand-back."""
        if refusal is not None:
            raise WriteForbidden(f"{self._loop.name}: {refusal}")
        moves = not isinstance(command, DriveOutput) or command.op_pct != self._last_driven_pct
        self._note("command", command, t_s=_now_s(), durable=moves)

    async def _write(self, command: WireCommand) -> WriteReport:
        values = to_raw(self._loop, command)
        self._has_written = True  # from here on it may land, whatever we hear
        report = await self._link.write(values)
        self.log.add_write(command, values, report)
        if isinstance(command, DriveOutput):
            self._last_driven_pct = command.op_pct
        return report

    async def _hand_back(self, because: str) -> HandBackEnded:
        as_found = self.experiment.as_found
        # A hand-back that broke off has written since; its last writes are ours too.
        held = self.experiment.held if self._handing_back is None else self._handing_back.held
        if as_found is None or not self._has_written:
            return HandBackEnded(_now_s(), HandBackResult.RESTORED, "nothing was written")
        self.log.add_story(_now_s(), "note", f"handing back: {because}")

        async def write(command: WireCommand) -> WriteReport:
            self._record_command(command, gate_hand_back(as_found, self._plan.token, command))
            report = await self._write(command)
            self._note("note", report, t_s=_now_s())
            return report

        self._handing_back = HandBackRun(self._plan, as_found, held, self._reader, write)
        ended = await self._handing_back.run()
        for sample in self._handing_back.samples:
            self.log.add_sample(sample)
        return ended

    async def _last_resort(self, fault: BaseException) -> None:
        """We failed ourselves: hand back what may be touched, without the machine, which can't hear of it."""
        self.faults.append(f"{type(fault).__name__}: {fault}")
        if self.experiment.phase.is_touched:
            ended = await self._hand_back(f"our own fault: {fault!r}")
            self.faults.append(f"last-resort hand-back: {ended.result.value}; {ended.detail}")
            self._note("note", self.faults[-1], t_s=ended.t_s, durable=True)
        self._note("end", f"{self.experiment.phase.value}; {self.faults[-1]}", t_s=_now_s(), durable=True)

    def _record_end(self) -> None:
        self._note("end", self.experiment.phase.value, t_s=_now_s(), durable=True)

    def _note(self, kind: LineKind, payload: object, *, t_s: float, durable: bool = False) -> None:
        """Write the journal; from the first touch on a full disk ends the test, but never a hand-back."""
        try:
            self._journal.record(kind, payload, t_s=t_s, durable=durable)
        except JournalError as fault:
            if self.experiment.phase in (Phase.IDLE, Phase.CHECKING):
                raise
            if not self.faults:
                self.abort(f"the journal failed: {fault}")
            self.faults.append(str(fault))


def _now_s() -> float:
    return asyncio.get_running_loop().time()
