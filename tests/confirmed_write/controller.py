"""A controller in memory that answers a write's commands, with the faults that a test gives it."""

from collections.abc import Callable
from dataclasses import dataclass, field, replace

from autotune.confirmed_write.commands import Command, ReadSettings, SetMode, SetSetpoint, WriteField
from autotune.confirmed_write.confirmation import confirm, short_digest
from autotune.confirmed_write.events import (
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
from autotune.confirmed_write.state import WriteState
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Stamp
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome, WriteReport

APPLIED, REFUSED, NOT_HEARD = WriteOutcome.APPLIED, WriteOutcome.REFUSED, WriteOutcome.NOT_HEARD

OLD = BlockFields(2.0, 30.0, 4.0)
NEW = BlockFields(1.5, 20.0, 3.0)
PLAN = WritePlan(
    loop="TIC-204",
    proposal="tyreus-luyben-pid",
    as_found=OLD,
    fields=NEW,
    order=("gain", "derivative", "integral"),
    block_digest="b" * 64,
    configuration_digest="c" * 64,
)


def confirmed(plan: WritePlan = PLAN, now_s: float = 0.0) -> Confirmation:
    """A person's valid word for the plan."""
    confirmation = confirm(plan, short_digest(plan), "A. Person", now_s)
    assert isinstance(confirmation, Confirmation), confirmation
    return confirmation


@dataclass
class Controller:
    """Holds settings, mode, output and setpoint.  A command takes 10 ms.

    ``on_write`` and ``on_mode`` say what becomes of a request: its outcome and whether it lands.
    ``on_command`` runs before each command, to let a person or the plant interfere.
    """

    fields: BlockFields = OLD
    mode: LoopMode = LoopMode.AUTO
    op_pct: float | None = 40.0
    sp_pct: float | None = 60.0
    sp_tracks_to_pct: float | None = None
    is_readable: bool = True
    holds: Callable[[str, float], float] = lambda _, number: number
    on_write: Callable[[str, float], tuple[WriteOutcome, bool]] = lambda *_: (APPLIED, True)
    on_mode: Callable[[LoopMode], tuple[WriteOutcome, bool]] = lambda _: (APPLIED, True)
    on_command: Callable[["Controller", Command], None] = lambda *_: None
    now_s: float = 0.0
    commands: list[Command] = field(default_factory=list)

    def perform(self, command: Command) -> Event:
        """Do it, and tell what became of it."""
        self.on_command(self, command)
        self.commands.append(command)
        self.now_s += 0.01
        match command:
            case ReadSettings():
                if not self.is_readable:
                    return ReadFailed(self.now_s, "no answer")
                return SettingsRead(self.now_s, self.fields, self.mode, self.op_pct, self.sp_pct)
            case WriteField(name, number):
                outcome, lands = self.on_write(name, number)
                if lands:
                    self.fields = replace(self.fields, **{name: self.holds(name, number)})
                return FieldWritten(self.now_s, name, self._report(outcome))
            case SetMode(mode):
                outcome, lands = self.on_mode(mode)
                if lands:
                    self.set_mode(mode)
                return ModeSet(self.now_s, self._report(outcome))
            case SetSetpoint(sp_pct):
                self.sp_pct = sp_pct
                return SetpointSet(self.now_s, self._report(APPLIED))

    def set_mode(self, mode: LoopMode) -> None:
        """As by the command or by a person's hand; in manual the setpoint may follow PV."""
        self.mode = mode
        if mode is LoopMode.MAN and self.sp_tracks_to_pct is not None:
            self.sp_pct = self.sp_tracks_to_pct

    def _report(self, outcome: WriteOutcome) -> WriteReport:
        return WriteReport(outcome, Stamp(self.now_s - 0.01, self.now_s), "by the test")

    @property
    def writes(self) -> list[WriteField]:
        """The settings that were sent, in order."""
        return [command for command in self.commands if isinstance(command, WriteField)]

    @property
    def modes(self) -> list[LoopMode]:
        """The modes that were asked for, in order."""
        return [command.mode for command in self.commands if isinstance(command, SetMode)]


def started(controller: Controller, plan: WritePlan = PLAN) -> tuple[WriteState, tuple[Command, ...]]:
    """A confirmed write of ``plan``, just begun."""
    begun = begin(plan, confirmed(plan, controller.now_s), frozenset(), controller.now_s)
    assert isinstance(begun, tuple), begun
    return begun


def run(
    controller: Controller, plan: WritePlan = PLAN, interfere: Callable[[WriteState], Event | None] = lambda _: None
) -> WriteState:
    """Carry the write to its end; ``interfere`` may put in one more event before each answer."""
    state, commands = started(controller, plan)
    for _ in range(500):
        if state.is_over:
            assert commands == ()
            return state
        extra = interfere(state)
        if extra is not None:
            state, more = step(state, extra)
            assert more == ()
        if commands:
            (command,) = commands
            state, commands = step(state, controller.perform(command))
        else:
            deadline_s = next_deadline_s(state)
            assert deadline_s is not None, f"{state.phase} waits for nothing"
            controller.now_s = max(controller.now_s, deadline_s)
            state, commands = step(state, TimePassed(controller.now_s))
    raise AssertionError(f"no end in {state.phase}")
