"""What a write knows of itself between two events."""

from dataclasses import dataclass

from autotune.confirmed_write.commands import Command
from autotune.confirmed_write.events import SettingsRead
from autotune.confirmed_write.phases import TERMINAL_PHASES, Phase, Trigger
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal


@dataclass(frozen=True, slots=True)
class WritePace:
    """How patient a write is, in seconds.

    ``settle_s`` is longer than a PLC scan: the time from a write to where a read may show it, and between
    two reads.  ``within_s`` bounds each phase, ``put_back_within_s`` the whole way back.
    """

    settle_s: float = 0.5
    within_s: float = 5.0
    put_back_within_s: float = 15.0


@dataclass(frozen=True, slots=True)
class WriteState:
    """A write as it stands; made by ``begin``, moved by ``step``.

    ``written`` counts the fields of ``plan.order`` that were sent, ``last_sent`` names the last one, sent there
    or back.  ``mode_found`` goes back at the end;
    ``mode_held`` is the mode that is to be seen now.  ``ends_at`` is the trigger of a good end.
    ``read_at_s`` is when to read again (``None``: a command is out).  ``op_held_pct`` is the output in
    manual.  ``last_read`` is the last good reading, ``because`` lists in order why it isn't ``WRITTEN``, or
    what a person must know besides.
    """

    phase: Phase
    plan: WritePlan
    confirmation: Confirmation
    pace: WritePace
    give_up_s: float
    read_at_s: float | None = None
    written: int = 0
    last_sent: str | None = None
    is_taken: bool = False
    cancelled_by: str | None = None
    is_mode_acknowledged: bool = False
    is_setpoint_given: bool = False
    mode_found: LoopMode = LoopMode.NOT_KNOWN
    mode_held: LoopMode = LoopMode.NOT_KNOWN
    sp_found_pct: float | None = None
    op_held_pct: float | None = None
    ends_at: Trigger = Trigger.NOTHING_WRITTEN
    last_read: SettingsRead | None = None
    because: tuple[Refusal, ...] = ()

    @property
    def is_over(self) -> bool:
        """Whether the write has come to its end."""
        return self.phase in TERMINAL_PHASES

    @property
    def op_bump_pct(self) -> float | None:
        """How far the output moved while the mode went back, in percent; ``None`` where that wasn't seen."""
        read_pct = None if self.last_read is None else self.last_read.op_pct
        if not (self.is_over and self.is_taken) or self.op_held_pct is None or read_pct is None:
            return None
        return read_pct - self.op_held_pct


Step = tuple[WriteState, tuple[Command, ...]]
