"""From the process to the reading in the PLC: noise, filter, resolution, span and failure."""

from dataclasses import dataclass
from enum import Enum
from math import exp, nan

import numpy as np

IN_RANGE_LOW_PCT = -1.25
"""3.8 mA: below it NAMUR NE 43 reads a failure."""
IN_RANGE_HIGH_PCT = 103.125
"""20.5 mA: above it NAMUR NE 43 reads a failure."""
FAILED_LOW_PCT = -2.5
"""3.6 mA, a failed transmitter that drives low (NAMUR NE 43)."""
FAILED_HIGH_PCT = 106.25
"""21 mA, a failed transmitter that drives high (NAMUR NE 43)."""


@dataclass(frozen=True, slots=True)
class TransmitterSpec:
    """Percent of span and seconds; ``noise_pct`` is a standard deviation, ``resolution_pct`` 0 means none."""

    noise_pct: float = 0.0
    resolution_pct: float = 0.0
    filter_time_s: float = 0.0

    def __post_init__(self) -> None:
        if not min(self.noise_pct, self.resolution_pct, self.filter_time_s) >= 0.0:
            raise ValueError("a transmitter's noise, resolution and filter time must not be negative")


class TransmitterFault(Enum):
    """What a transmitter can suffer from."""

    NONE = "none"
    STUCK = "stuck"
    NAN = "nan"
    HIGH = "high"
    LOW = "low"


class Transmitter:
    """Reads one process output; noise enters before the filter, resolution is the last thing."""

    def __init__(self, spec: TransmitterSpec, *, seed: int, t_s: float = 0.0, reading_pct: float = 0.0) -> None:
        self.spec = spec
        self.fault = TransmitterFault.NONE
        self.reading_pct = reading_pct
        self._filtered_pct = reading_pct
        self._t_s = t_s
        self._chance = np.random.default_rng(seed)

    @property
    def is_failed(self) -> bool:
        """Whether the PLC's input card can see a failure; a stuck reading looks healthy."""
        return not IN_RANGE_LOW_PCT <= self.reading_pct <= IN_RANGE_HIGH_PCT

    def read(self, t_s: float, output_pct: float) -> float:
        """The reading at ``t_s`` (percent of span), NaN when the transmitter gives no number."""
        elapsed_s, self._t_s = t_s - self._t_s, t_s
        noisy_pct = output_pct + self.spec.noise_pct * float(self._chance.standard_normal())
        share = 1.0 if self.spec.filter_time_s == 0.0 else 1.0 - exp(-elapsed_s / self.spec.filter_time_s)
        self._filtered_pct += share * (noisy_pct - self._filtered_pct)
        match self.fault:
            case TransmitterFault.NONE:
                self.reading_pct = self._to_reading(self._filtered_pct)
            case TransmitterFault.NAN:
                self.reading_pct = nan
            case TransmitterFault.HIGH:
                self.reading_pct = FAILED_HIGH_PCT
            case TransmitterFault.LOW:
                self.reading_pct = FAILED_LOW_PCT
            case TransmitterFault.STUCK:
                pass
        return self.reading_pct

    def _to_reading(self, measured_pct: float) -> float:
        if self.spec.resolution_pct > 0.0:
            measured_pct = self.spec.resolution_pct * round(measured_pct / self.spec.resolution_pct)
        return min(max(measured_pct, IN_RANGE_LOW_PCT), IN_RANGE_HIGH_PCT)
