"""The record of a test: irregular stamps of samples and of the effects of our writes."""

from dataclasses import dataclass
from enum import Enum

from autotune.loop.mode import ControlAction
from autotune.loop.sample import Stamp


class TimeBase(Enum):
    """Whose clock the stamps of a record follow."""

    PLC_CLOCK = "PLC clock"  # the PLC stamps samples and effects: points, network latency is no part of it
    OUR_CLOCK = "our clock"  # hulls: [request - PLC scan - I/O, reply] and [request, reply + PLC scan + I/O]


@dataclass(frozen=True, slots=True)
class RecordedSample:
    """One sample used by the identification; PV in percent of span, stamp in seconds of the record's clock."""

    taken: Stamp
    pv_pct: float
    op_pct: float | None = None  # read back in the same request


@dataclass(frozen=True, slots=True)
class OutputEffect:
    """From ``effect`` on the output held ``op_pct`` (percent), until the next effect."""

    effect: Stamp
    op_pct: float


@dataclass(frozen=True, slots=True)
class Record:
    """All that the identification may know of one test.

    ``samples`` and ``effects`` are in order of time; ``effects`` begin with the held output of the
    baseline, so that the input is known at every sample.  Percent of span, seconds.
    ``relay_from_s`` is when the first relay move took effect; ``hysteresis_pct`` is the half-width.
    ``noise_pct`` is the standard deviation at rest, ``drift_pct_per_s`` the slope at rest.
    ``scan_s`` is our nominal scan, ``plc_scan_s`` the PLC's, ``None`` where not declared.
    """

    action: ControlAction
    time_base: TimeBase
    samples: tuple[RecordedSample, ...]
    effects: tuple[OutputEffect, ...]
    centre_pct: float
    reference_pct: float
    relay_from_s: float
    hysteresis_pct: float
    noise_pct: float
    drift_pct_per_s: float
    scan_s: float
    plc_scan_s: float | None
