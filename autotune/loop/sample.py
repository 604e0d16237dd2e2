"""One coalesced reading of a loop, and when it was true."""

from dataclasses import dataclass
from enum import Enum

from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality


@dataclass(frozen=True, slots=True)
class Stamp:
    """The interval in which something surely happened, in monotonic seconds; a point where the PLC tells."""

    earliest_s: float
    latest_s: float

    @classmethod
    def at(cls, t_s: float) -> "Stamp":
        """A stamp without doubt."""
        return cls(t_s, t_s)

    @property
    def middle_s(self) -> float:
        """The middle of the interval."""
        return 0.5 * (self.earliest_s + self.latest_s)

    @property
    def width_s(self) -> float:
        """How much of the instant is unknown."""
        return self.latest_s - self.earliest_s


class GuardState(Enum):
    """The PLC's own guard of one loop."""

    IDLE = "idle"
    ARMED = "armed"
    GAVE_BACK = "gave back"
    NOT_KNOWN = "not known"


@dataclass(frozen=True, slots=True)
class GuardView:
    """What the PLC's guard says; ``None`` where the PLC offers no such tag.

    ``holder`` is the token of who holds the loop, 0 when free.  ``heartbeat_echo`` copies our
    heartbeat in each PLC scan.  ``op_effect_count`` counts the writes that took effect and
    ``op_effect_ms`` is the PLC clock of the last of them (unsigned 32 bit, milliseconds).
    """

    state: GuardState
    holder: int | None = None
    heartbeat_echo: int | None = None
    is_enabled: bool | None = None
    is_stop_pressed: bool | None = None
    is_alarm: bool | None = None
    timeout_s: float | None = None
    op_effect_count: int | None = None
    op_effect_ms: int | None = None


@dataclass(frozen=True, slots=True)
class WatchReading:
    """One entry of the watch list as read, in its own engineering unit; a Boolean is 0 or 1."""

    name: str
    reading_eu: float | None
    quality: Quality


@dataclass(frozen=True, slots=True)
class Sample:
    """One reading of a loop.

    ``t_s`` is our clock when the reply was complete; ``taken`` is the interval, on our clock, in
    which the PLC sampled PV.  Percent of span; a value that is not usable is ``None`` and its
    quality says why.  ``plc_clock_ms`` (unsigned 32 bit) is the PLC scan that sampled PV.
    """

    t_s: float
    taken: Stamp
    pv_pct: float | None
    pv_quality: Quality
    sp_pct: float | None
    op_pct: float | None
    op_quality: Quality
    mode: LoopMode
    guard: GuardView | None = None
    watch: tuple[WatchReading, ...] = ()
    plc_clock_ms: int | None = None
    boot_count: int | None = None
