"""How far a test may go.  Every interlock and the gate before every write read from here."""

from dataclasses import dataclass

from autotune.loop.mode import LoopMode
from autotune.loop.sample import Sample


@dataclass(frozen=True, slots=True)
class WatchLimit:
    """A condition outside the loop that must hold: ``low_eu <= reading <= high_eu`` in its own unit."""

    name: str
    low_eu: float
    high_eu: float
    meaning: str = ""


@dataclass(frozen=True, slots=True)
class Limits:
    """Limits of one test, in percent of span and seconds; ``None`` switches a limit off.

    ``step_up_pct``/``step_down_pct``: largest move of OP from as found.  ``op_low_pct``/``op_high_pct``:
    the tightest of the loop's clamps and the site's ceilings.  ``op_move_s``: longest time from a
    write to its read-back (PLC scan, rate and I/O).  ``safe_without_view_s``: how long missed or
    spiky reads are allowed.  ``inverse_response_s`` and ``dead_time_s`` are the declared, largest ones.
    ``pv_frozen_s``: longest time an unchanged PV is explained by its baseline (``None``: learn it).
    """

    step_up_pct: float
    step_down_pct: float
    op_low_pct: float
    op_high_pct: float
    pv_low_pct: float
    pv_high_pct: float
    op_rate_pct_per_s: float | None = None
    op_resolution_pct: float = 0.05
    op_move_s: float = 1.0
    pv_rate_pct_per_s: float | None = None
    pv_deviation_pct: float | None = None
    drift_pct_per_s: float | None = None
    sample_age_s: float = 1.0
    safe_without_view_s: float = 0.0
    heartbeat_s: float = 1.0
    switch_within_s: float = 600.0
    test_within_s: float = 3600.0
    cycles_at_most: int = 20
    missed_ticks_at_most: int = 5
    inverse_response_s: float = 0.0
    dead_time_s: float = 0.0
    pv_frozen_s: float | None = None
    watch: tuple[WatchLimit, ...] = ()


@dataclass(frozen=True, slots=True)
class AsFound:
    """The loop as it was before we touched it: what goes back, exactly.

    ``op_pct`` is the reading in manual, the mean over the look-around in automatic.  ``sp_pct`` is
    ``None`` where the setpoint is not read.  ``sample`` is the last reading before the first write.
    """

    op_pct: float
    sp_pct: float | None
    sample: Sample

    @property
    def mode(self) -> LoopMode:
        """The mode to give back."""
        return self.sample.mode

    @property
    def boot_count(self) -> int | None:
        """The PLC's restart count when the loop was found."""
        return self.sample.boot_count
