"""What to do.  Commands are imperative and data; the shell performs them and reports back."""

from dataclasses import dataclass

from autotune.loop.mode import LoopMode


@dataclass(frozen=True, slots=True)
class ClaimLoop:
    """Ask the PLC's guard for the loop, or keep the claim alive: ``token`` as holder request, and a heartbeat.

    ``sequence`` is that of the last move (0 before the first one).  It has to be in the PLC's mailbox no later than
    the request: the guard takes what it finds there when it arms as old, and only what is newer as a move.
    """

    token: int
    heartbeat: int
    sequence: int = 0


@dataclass(frozen=True, slots=True)
class SetMode:
    """Request a mode of the block."""

    mode: LoopMode


@dataclass(frozen=True, slots=True)
class DriveOutput:
    """Hold the output at ``op_pct`` (percent of span).

    With a guard, token, heartbeat, sequence and output go in one contiguous write in every scan; the
    sequence grows only when the output moves (16 bit, modulo).  Without a guard it is sent on moves only.
    """

    op_pct: float
    token: int
    heartbeat: int
    sequence: int


@dataclass(frozen=True, slots=True)
class SetSetpoint:
    """Write the setpoint back, in percent of span; only part of a hand-back, where it tracks in manual."""

    sp_pct: float


@dataclass(frozen=True, slots=True)
class ReleaseLoop:
    """Give the holder's token back to the PLC: write 0 as holder request."""


@dataclass(frozen=True, slots=True)
class HandBack:
    """Give the loop back as found.  Retried, idempotent, deaf to cancels; answered by ``HandBackEnded``."""

    because: str


Command = ClaimLoop | SetMode | DriveOutput | SetSetpoint | ReleaseLoop | HandBack
