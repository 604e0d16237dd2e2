"""What we hold of a loop: our last writes, and what may be read until they are seen to have landed."""

from dataclasses import dataclass, replace

from autotune.experiment.commands import ClaimLoop, DriveOutput, SetMode
from autotune.loop.limits import AsFound
from autotune.loop.mode import LoopMode
from autotune.loop.sample import GuardState, GuardView, Sample

WORD = 1 << 16
"""Heartbeat and sequence are unsigned 16 bit and wrap."""


@dataclass(frozen=True, slots=True)
class Held:
    """Our last writes.

    ``op_pct`` is ``None`` while the output was never driven, ``mode`` while no mode was asked.  A write counts from
    the moment that it is decided, so until a reading shows it, OP may lie anywhere in ``op_may_read_pct``
    (low, high) and the mode be any of ``modes_may_read``; afterwards these hold just what was written.
    """

    op_pct: float | None = None
    mode: LoopMode | None = None
    token: int = 0
    sequence: int = 0
    heartbeat: int = 0
    op_may_read_pct: tuple[float, float] | None = None
    modes_may_read: tuple[LoopMode, ...] = ()
    has_guard_given_back: bool = False
    has_sp_been_mended: bool = False
    has_release_been_asked: bool = False
    taken: str | None = None
    """What showed in a hand-back that somebody took the loop; once it is said, the loop stays theirs."""

    @property
    def is_op_confirmed(self) -> bool:
        """Whether a reading has shown the last move of the output."""
        return self.op_pct is not None and self.op_may_read_pct == (self.op_pct, self.op_pct)

    def has_op_in_reach(self, op_pct: float, resolution_pct: float) -> bool:
        """Whether a reading of OP can be ours: within resolution of what our last write explains."""
        if self.op_pct is None:
            return False
        low_pct, high_pct = self.op_may_read_pct or (self.op_pct, self.op_pct)
        return low_pct - resolution_pct <= op_pct <= high_pct + resolution_pct


def claim(held: Held) -> tuple[Held, ClaimLoop]:
    """Ask the guard for the loop, or keep the claim alive: the next heartbeat."""
    held = replace(held, heartbeat=(held.heartbeat + 1) % WORD)
    return held, ClaimLoop(held.token, held.heartbeat, held.sequence)


def ask_mode(held: Held, mode: LoopMode, reading: LoopMode) -> tuple[Held, SetMode]:
    """Ask for a mode; until it is read back, the present one is no surprise."""
    return replace(held, mode=mode, modes_may_read=(reading, mode)), SetMode(mode)


def drive(held: Held, op_pct: float, reading_pct: float) -> tuple[Held, DriveOutput]:
    """Hold the output at ``op_pct``: the next heartbeat, and the next sequence number where it moves.

    ``reading_pct`` is OP as just read.  All that an earlier write, not yet seen, may still do stays possible.
    """
    is_move = held.op_pct is None or op_pct != held.op_pct
    may_read_pct = held.op_may_read_pct
    if is_move:
        earlier_pct = () if may_read_pct is None or held.is_op_confirmed else may_read_pct
        bounds = (op_pct, reading_pct, *earlier_pct)
        may_read_pct = (min(bounds), max(bounds))
    held = replace(
        held,
        op_pct=op_pct,
        sequence=(held.sequence + is_move) % WORD,
        heartbeat=(held.heartbeat + 1) % WORD,
        op_may_read_pct=may_read_pct,
    )
    return held, DriveOutput(op_pct, held.token, held.heartbeat, held.sequence)


def confirmed(held: Held, sample: Sample, resolution_pct: float) -> Held:
    """Take from a reading what it shows to have landed."""
    if held.mode is not None and sample.mode is held.mode:
        held = replace(held, modes_may_read=(held.mode,))
    if held.op_pct is not None and sample.op_pct is not None and abs(sample.op_pct - held.op_pct) <= resolution_pct:
        held = replace(held, op_may_read_pct=(held.op_pct, held.op_pct))
    return held


def is_ours(guard: GuardView, token: int) -> bool:
    """Whether the guard is armed and, as far as the PLC tells, holds the loop for us."""
    return guard.state is GuardState.ARMED and guard.holder in (None, token)


def may_release(guard: GuardView | None, token: int) -> bool:
    """Whether our request may be taken back: the guard holds the loop for us or for nobody, not for another."""
    return guard is not None and guard.holder in (None, 0, token)


def is_released(guard: GuardView | None, token: int) -> bool:
    """Whether the PLC no longer names us as holder; where it names nobody, whether its guard has disarmed."""
    if guard is None:
        return True
    return guard.state is not GuardState.ARMED if guard.holder is None else guard.holder != token


def expected_modes(held: Held, as_found: AsFound) -> tuple[LoopMode, ...]:
    """The modes that our writes explain; as found while none was asked."""
    return held.modes_may_read or (as_found.mode if held.mode is None else held.mode,)
