"""Seen is not inferred: an oscillation point is a measurement, the ultimate point a conclusion."""

from dataclasses import dataclass

from autotune.identify.model import ModelWithDraws
from autotune.loop.outcome import Interval, Refusal
from autotune.loop.record import TimeBase


@dataclass(frozen=True, slots=True)
class Cycle:
    """One whole relay cycle, from up-switch to up-switch, on the record's clock.

    ``period_s``; ``pv_amplitude_pct`` is half of PV's peak-to-peak; ``amplitude_pct`` half of OP's.
    """

    from_s: float
    period_s: float
    pv_amplitude_pct: float
    amplitude_pct: float


@dataclass(frozen=True, slots=True)
class OscillationPoint:
    """What was seen: one point of the loop's frequency response.

    ``gain`` (%PV/%OP, |G|) and ``phase_rad`` (of G for positive process gain, negative) at ``frequency_rad_per_s``.
    ``method`` names how it was read.  ``gain_sd_ratio`` (relative) and ``phase_sd_rad`` are the scatter
    over cycles.
    """

    method: str
    frequency_rad_per_s: float
    gain: float
    phase_rad: float
    gain_sd_ratio: float
    phase_sd_rad: float


@dataclass(frozen=True, slots=True)
class UltimatePoint:
    """What was concluded: ultimate gain (%OP/%PV) and period (s) of the plant that the PLC's block sees.

    ``method`` names the inference.  ``because`` lists, in words, what makes the intervals as wide as they are.
    """

    method: str
    ultimate_gain: Interval
    ultimate_period_s: Interval
    because: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Findings:
    """The result of identifying one record.

    ``describing_function`` is the textbook reading: 4d/(pi a) and the observed period, with nothing removed.
    ``fourier`` has known latency and hold removed.  ``static_gain`` (signed %PV/%OP) where the test was
    asymmetric and the interval is usable.  ``ultimate`` is the conclusion that design builds on.
    ``cautions`` are sentences that a technician reads beside the numbers.
    ``model`` is the fitted plant that ``ultimate`` was concluded from, where one could be trusted.
    """

    time_base: TimeBase
    cycles: tuple[Cycle, ...]
    describing_function: OscillationPoint
    fourier: OscillationPoint
    static_gain: Interval | None
    ultimate: UltimatePoint
    cautions: tuple[str, ...] = ()
    model: ModelWithDraws | None = None


FindingsOrRefusal = Findings | Refusal
